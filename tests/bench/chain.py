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

__all__ = ["RATE_HZ", "WARM_UP", "Chain", "lost", "measure", "printed"]

RATE_HZ = 1000.0
WARM_UP = np.full(100, 1000), np.full(100, 200)


def measure(sizes: Sizes) -> list[Figure]:
    """CPU time of `stream` against the naive chain, and what was lost."""
    n = int(sizes.chain_round_s * RATE_HZ)
    sent = counts.turning(n * sizes.rounds)
    with Line() as line, Line() as plain:
        ours = bridgewright("stream", *reading_options(line.path))
        with Program(ours) as stream, Program(script("naive", plain.path)) as naive:
            chains = (
                Chain(line, stream, counts.frames(WARM_UP), counts.frames(sent, len(WARM_UP[0]))),
                Chain(plain, naive, counts.lines(WARM_UP), counts.lines(sent)),
            )
            starts = [chain.start() for chain in chains]
            shares: list[list[float]] = [[], []]
            for first in range(0, n * sizes.rounds, n):
                for chain, found in zip(chains, shares, strict=True):
                    found.append(chain.share(first, n))
            missing = [lost(printed(chain.program), sent[0].tolist()) for chain in chains]
    return _figures(shares, starts, missing, sizes)


@dataclass
class Chain:
    """A program that answers each of `pieces` by a line, and the line it reads from."""

    line: Line
    program: Program
    warm_up: Sequence[bytes]
    pieces: Sequence[bytes]
    rate_hz: float = RATE_HZ

    def start(self) -> float:
        """CPU time [s] until readings come out; they are those of other counts. TimeoutError where none do."""
        until(self._answers, "a first reading", 60.0)
        used_s = self.program.cpu_s
        until(self._quiet, "the end of the warm-up")
        return used_s

    def share(self, first: int, n: int) -> float:
        """Share of a core [%] while `n` pieces from `first` on come and are answered."""
        return 100.0 * self.spent_s(first, n) / (n / self.rate_hz)

    def spent_s(self, first: int, n: int) -> float:
        """CPU time [s] that it uses while `n` pieces from `first` on come and are answered."""
        before, begun_cpu_s = self.program.lines, self.program.cpu_s
        self.line.feed_evenly(self.pieces[first : first + n], self.rate_hz)
        self.line.fed()
        with suppress(TimeoutError):  # lost tallies are counted at the end
            until(lambda: self.program.lines >= before + n, "the last line", 3.0)
        return self.program.cpu_s - begun_cpu_s

    def _answers(self) -> bool:
        """Whether it answers the warm-up, or has before."""
        # A program that has ended reads no more, and whoever feeds it would wait for ever.
        if not self.program.running:
            raise RuntimeError("a program that is measured has ended by itself")
        self.line.feed_evenly(self.warm_up, self.rate_hz)
        self.line.fed()
        return self.program.lines > 0

    def _quiet(self) -> bool:
        """Whether it uses no time any more: the warm-up is behind it."""
        before = self.program.cpu_s
        time.sleep(0.1)
        return self.program.cpu_s - before < 1e-3


def printed(program: Program) -> list[int]:
    """Forward counts of the readings that a program has printed, without those of the warm-up."""
    found = [int(json.loads(line)["forward_counts"]) for line in program.text().splitlines()]
    return [forward for forward in found if forward != WARM_UP[0][0]]


def lost(found: list[int], sent: list[int]) -> float:
    """How many of the forward counts `sent` were not found; infinite where they came in another order."""
    return float(len(sent) - len(found)) if found == sent or len(found) < len(sent) else math.inf


def _figures(shares: list[list[float]], starts: list[float], missing: list[float], sizes: Sizes) -> list[Figure]:
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
            missing[0],
            missing[1],
            missing[0],
            0.0,
            "tallies",
        ),
    ]
