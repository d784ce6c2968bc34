"""The chain with a journal, at a thousand tallies a second, against one with a row and a commit a reading.

One rule: as in `chain`, both run all the time and are fed in turn; a chain that cannot keep up with a thousand a
second is fed at a rate it can keep, so what is compared is the CPU time of a tally. None may be lost, on either way.
"""

from __future__ import annotations

import tempfile
import time
from contextlib import ExitStack
from pathlib import Path

from bridgeio.frames import Tallies
from bridgeio.journal import Journal

from . import counts
from .chain import RATE_HZ, WARM_UP, Chain, lost, printed
from .cost import Figure, Sizes, median
from .line import Line
from .programs import Program, script, until

__all__ = ["measure"]

#: A chain that cannot keep up is fed at this part of what it can do, so that it never falls behind.
_EASY = 0.6
#: SQLite's settings of the naive chains: its own, and those that spare it most of the waiting for the disk.
_SETTINGS: dict[str, tuple[str, ...]] = {"own": (), "WAL": ("journal_mode = WAL", "synchronous = NORMAL")}


def measure(sizes: Sizes) -> list[Figure]:
    """CPU time of a tally, ours and naive, and what was lost of ours on the way to the disk or to the output."""
    with ExitStack() as held:
        folder = Path(held.enter_context(tempfile.TemporaryDirectory(prefix="bridgewright-bench-")))
        n = int(sizes.chain_round_s * RATE_HZ)
        sent = counts.turning(n * sizes.rounds)
        with ExitStack() as running:
            ours = _ours(running, folder / "log", sent)
            naive = {name: _naive(running, folder / name, words, sizes) for name, words in _SETTINGS.items()}
            chains = {"ours": ours, **naive}
            costs_us = _in_turn(chains, sizes)
            out = {name: chain.program for name, chain in chains.items()}
            until(lambda: all(chain.program.lines for chain in chains.values()), "any reading")
        missing = lost(printed(out["ours"]), sent[0].tolist()) + lost(_kept(folder / "log"), sent[0].tolist())
        dropped = sum(len(chain.pieces) - len(printed(chain.program)) for chain in naive.values())
    return _figures(costs_us, {name: chain.rate_hz for name, chain in naive.items()}, missing, dropped, sizes)


def _ours(running: ExitStack, journal: Path, sent: counts.Counts) -> Chain:
    line = running.enter_context(Line())
    program = running.enter_context(Program(script("journaling", line.path, str(journal))))
    chain = Chain(line, program, counts.frames(WARM_UP), counts.frames(sent, len(WARM_UP[0])))
    chain.start()
    return chain


def _naive(running: ExitStack, database: Path, settings: tuple[str, ...], sizes: Sizes) -> Chain:
    """A naive chain, warmed up, with as many tallies to come as it can take in the time."""
    line = running.enter_context(Line())
    program = running.enter_context(Program(script("naive", line.path, str(database), *settings)))
    chain = Chain(line, program, counts.lines(WARM_UP), [], 100.0)
    chain.start()
    chain.rate_hz = min(RATE_HZ, _EASY * _fastest_hz(chain))
    n = max(1, int(sizes.chain_round_s * chain.rate_hz)) * sizes.rounds
    chain.pieces = counts.lines(counts.turning(n))
    return chain


def _fastest_hz(chain: Chain) -> float:
    """How many a second it answers where all of the warm-up comes at once."""
    upto, begun_s = chain.program.lines + len(chain.warm_up), time.monotonic()
    chain.line.feed_evenly(chain.warm_up, 1e6)
    chain.line.fed()
    until(lambda: chain.program.lines >= upto, "the end of the warm-up")
    return len(chain.warm_up) / (time.monotonic() - begun_s)


def _in_turn(chains: dict[str, Chain], sizes: Sizes) -> dict[str, float]:
    """The median CPU time of a tally [us] of each chain, taken A B C A B C."""
    found: dict[str, list[float]] = {name: [] for name in chains}
    for place in range(sizes.rounds):
        for name, chain in chains.items():
            n = len(chain.pieces) // sizes.rounds
            found[name].append(1e6 * chain.spent_s(place * n, n) / n)
    return {name: median(costs_us) for name, costs_us in found.items()}


def _kept(path: Path) -> list[int]:
    """Forward counts of the tallies in a journal that was closed, without those of the warm-up."""
    with Journal(path) as journal:
        found = [
            int(count) for timed in journal.tallies() if isinstance(timed.item, Tallies) for count in timed.item.forward
        ]
    return [count for count in found if count != WARM_UP[0][0]]


def _figures(
    costs_us: dict[str, float], rates_hz: dict[str, float], missing: float, dropped: float, sizes: Sizes
) -> list[Figure]:
    ours, own, wal = costs_us["ours"], costs_us["own"], costs_us["WAL"]
    what = "frames to a journal (WAL, FULL) and JSON lines, 1000 tallies/s"
    naive = "readline, Newton twice, a row and a commit (SQLite's own settings: rollback journal, FULL), json.dumps"
    more = {
        "default's rate, tallies/s": rates_hz["own"],
        "default with WAL and NORMAL, us": wal,
        "its rate, tallies/s": rates_hz["WAL"],
        "ratio to that": wal / ours,
        "ours, % of a core": ours * RATE_HZ / 1e4,
    }
    seconds = sizes.rounds * sizes.chain_round_s
    return [
        Figure("journal", what, naive, "CPU us a tally", ours, own, own / ours, 15.0, at_least=True, more=more),
        Figure(
            "journal, lost",
            f"tallies that came not to the output, or not to the journal, in {seconds:.0f} s",
            "both naive chains, at their rates",
            "tallies",
            missing,
            dropped,
            missing,
            0.0,
            "tallies",
        ),
    ]
