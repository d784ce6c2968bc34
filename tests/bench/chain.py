"""The whole chain: bytes of a port to lines of JSON on standard output, at a thousand tallies a second.

One rule: both chains run all the time and are fed in turn, at the pace of a real bridge; what they used to start is
told apart. Every tally sent must come out, in order.
"""

from __future__ import annotations

import json
import math
import time
from collections.abc import Sequence
from contextlib import suppress
from dataclasses import dataclass

import numpy as np

from . import counts
from .cost import Figure, Sizes, median
from .line import Line
from .programs import Program, bridgewright, reading_options, script, until

__all__ = ["measure"]

RATE_HZ = 1000.0
_WARM_UP = np.full(100, 1000), np.full(100, 200)


def measure(sizes: Sizes) -> list[Figure]:
    """CPU time of `stream` against the naive chain, and what was lost."""
    n = int(sizes.chain_round_s * RATE_HZ)
    sent = counts.turning(n * sizes.rounds)
    with Line() as line, Line() as plain:
        ours = bridgewright("stream", *reading_options(line.path))
        with Program(ours) as stream, Program(script("naive", plain.path)) as naive:
            chains = (
                _Chain(line, stream, counts.frames(_WARM_UP), counts.frames(sent, len(_WARM_UP[0]))),
                _Chain(plain, naive, counts.lines(_WARM_UP), counts.lines(sent)),
            )
            starts = [chain.start() for chain in chains]
            shares: list[list[float]] = [[], []]
            for first in range(0, n * sizes.rounds, n):
                for chain, found in zip(chains, shares, strict=True):
                    found.append(chain.share(first, n))
            lost = [_lost(chain.program.text(), sent[0].tolist()) for chain in chains]
    return _figures(shares, starts, lost, sizes)


@dataclass
class _Chain:
    line: Line
    program: Program
    warm_up: Sequence[bytes]
    pieces: Sequence[bytes]

    def start(self) -> float:
        """CPU time [s] until readings come out; they are those of other counts."""
        out = 0
        while not out:
            self.line.feed_evenly(self.warm_up, RATE_HZ)
            self.line.fed()
            out = self.program.lines
        used_s = self.program.cpu_s
        until(self._quiet, "the end of the warm-up")
        return used_s

    def share(self, first: int, n: int) -> float:
        """Share of a core [%] while `n` pieces from `first` on come and are answered."""
        before, begun_cpu_s = self.program.lines, self.program.cpu_s
        self.line.feed_evenly(self.pieces[first : first + n], RATE_HZ)
        self.line.fed()
        with suppress(TimeoutError):  # lost tallies are counted at the end
            until(lambda: self.program.lines >= before + n, "the last line", 3.0)
        return 100.0 * (self.program.cpu_s - begun_cpu_s) / (n / RATE_HZ)

    def _quiet(self) -> bool:
        """Whether it uses no time any more: the warm-up is behind it."""
        before = self.program.cpu_s
        time.sleep(0.1)
        return self.program.cpu_s - before < 1e-3


def _lost(text: bytes, sent: list[int]) -> float:
    """How many of the forward counts `sent` did not come out; infinite where they came in another order."""
    found = [int(json.loads(line)["forward_counts"]) for line in text.splitlines()]
    found = [forward for forward in found if forward != _WARM_UP[0][0]]
    return float(len(sent) - len(found)) if found == sent or len(found) < len(sent) else math.inf


def _figures(shares: list[list[float]], starts: list[float], lost: list[float], sizes: Sizes) -> list[Figure]:
    ours, default = (median(found) for found in shares)
    more = {"start of ours, CPU s": starts[0], "start of the default, CPU s": starts[1]}
    what, naive = "bridgewright stream, frames to JSON lines, 1000 tallies/s", "readline, Newton twice, json.dumps"
    return [
        Figure("chain", what, naive, "% of a core", ours, default, default / ours, 15.0, at_least=True, more=more),
        Figure(
            "chain, lost",
            f"tallies that did not come out in {sizes.rounds * sizes.chain_round_s:.0f} s",
            naive,
            "tallies",
            lost[0],
            lost[1],
            lost[0],
            0.0,
            "tallies",
        ),
    ]
