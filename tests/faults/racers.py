"""Several `keep` at once on one journal, each a process of its own that starts at a common signal.

One rule: they are forked from a server that has loaded the program, so that all of them reach the lock within a
millisecond and not within the half second that loading takes.
"""

from __future__ import annotations

import multiprocessing
import os
import sys
import threading
from collections.abc import Sequence
from multiprocessing.context import ForkServerContext
from multiprocessing.process import BaseProcess
from pathlib import Path

__all__ = ["Racer", "line_up", "server"]

_LOADED = ["pytest", "tests.faults.racers", "tui.commands.reading", "bridgeio.log.recorder", "bridgeio.simulator"]
_LOADED += [
    "tui.__main__",
    "tui.commands.keep",
    "bridgeio.bridge_file",
    "bridgeio.simulator.source",
    "calibration.units",
]


class Racer:
    """One of them: its process and where its words go."""

    def __init__(self, process: BaseProcess, told: Path, barrier: threading.Barrier) -> None:
        self.process, self._told = process, told
        # A barrier that nobody holds here is gone before the children have found it.
        self._barrier = barrier

    @property
    def pid(self) -> int:
        """Its process number."""
        assert self.process.pid is not None
        return self.process.pid

    @property
    def words(self) -> str:
        """What it said on standard error so far."""
        return self._told.read_text(encoding="utf-8")


def server() -> ForkServerContext:
    """Where racers are forked from."""
    context = multiprocessing.get_context("forkserver")
    context.set_forkserver_preload(_LOADED)
    return context


def line_up(context: ForkServerContext, names: Sequence[Path], folder: Path) -> list[Racer]:
    """Start one racer a name; they set off together."""
    barrier = context.Barrier(len(names))
    racers = []
    for number, name in enumerate(names):
        told = folder / f"words-{number}"
        told.write_text("", encoding="utf-8")
        process = context.Process(target=_race, args=(barrier, str(name), str(told)), daemon=True)
        process.start()
        racers.append(Racer(process, told, barrier))
    return racers


def _race(barrier: threading.Barrier, name: str, told: str) -> None:
    from tui.__main__ import main

    out = os.open(told, os.O_WRONLY | os.O_APPEND)
    os.dup2(os.open(os.devnull, os.O_WRONLY), 1)
    os.dup2(out, 2)
    barrier.wait(20)
    sys.exit(main(["keep", "sim:", name]))
