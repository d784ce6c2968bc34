"""`bridgewright keep`: an unattended journal, until it is told to stop.

One rule: it ends in words and an exit code, whoever ends it: the user, the system, the port or the disk.
"""

from __future__ import annotations

import argparse
import os
import select
import signal
import sys
import threading
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from typing import TYPE_CHECKING

from tui.commands.options import add_source_options
from tui.door import say, visible

if TYPE_CHECKING:
    from bridgeio.journal import JournalState
    from bridgeio.log.recorder import Recorder

__all__ = ["EXAMPLE", "add_arguments", "run"]

EXAMPLE = "bridgewright keep sim:duration=3 try.journal"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add keep's options."""
    add_source_options(parser, default=None)
    parser.add_argument("journal", metavar="JOURNAL", help="the journal's file; one that is there is continued")
    parser.add_argument("--bridge", metavar="FILE", help="bridge file; it is stored whole with the record")
    parser.add_argument("--frequency", metavar="F", help="noted where the bridge does not tell its own: 14.1M, 20m")
    parser.add_argument(
        "--acknowledge",
        action="store_true",
        help="print the number of each block once the disk has it: all up to that one survive whatever comes",
    )


def run(args: argparse.Namespace) -> int:
    """Record until SIGINT or SIGTERM, or until the source has ended or cannot be opened."""
    from bridgeio.bridge_file import parse_bridge_file, sheet_text
    from bridgeio.log.recorder import Recorder
    from bridgeio.ports import open_source
    from calibration.units import frequency_hz
    from tui.commands.reading import receiver_for

    source = open_source(args.source, args.baud)
    text = sheet_text(args.bridge) if args.bridge else ""
    if text:
        parse_bridge_file(text, args.bridge)
    # Before the journal is opened: told to stop from then on, it is closed whole.
    with _told_to_stop() as told:
        recorder = Recorder(
            source,
            receiver_for(args, source),
            args.journal,
            bridge_file=text,
            frequency_hz=frequency_hz(args.frequency) if args.frequency else None,
            say=_speak,
            on_commit=_Acknowledgement(sys.stdout.fileno()) if args.acknowledge else None,
        )
        return _until_told(recorder, told)


def _until_told(recorder: Recorder, told: threading.Event) -> int:
    from bridgeio.errors import LinkError
    from bridgeio.journal import Journal

    recorder.start()
    slow = False
    while not told.wait(0.2) and recorder.link.phase not in ("lost", "ended"):
        slow = _tell_slow(recorder.writer.state, slow)
    final = recorder.link
    kept = recorder.stop()
    path = recorder.writer.path
    if not kept:
        say(f"bridgewright keep: the disk has not taken all of the journal: {recorder.writer.state.words}")
        return 3
    with Journal(path) as journal:
        print(visible(f"{path}: {journal.account().words}"))
    if final.phase == "lost":
        raise LinkError(final.words)
    return 0


def _tell_slow(state: JournalState, before: bool) -> bool:
    """Say when the disk begins to keep the journal waiting, and when that is over; whether it does now."""
    now = state.phase == "slow"
    if now and not before:
        _speak(state.words)
    elif before and state.phase in ("recording", "moved"):
        _speak(f"the disk answers again: {state.words}")
    return now


def _speak(words: str) -> None:
    """Say it; a terminal that is gone is no reason to stop recording."""
    with suppress(OSError):
        say(f"bridgewright keep: {words}")


class _Acknowledgement:
    """Prints block numbers from the writer's thread; a number that would have to wait is left to the next one."""

    def __init__(self, fd: int) -> None:
        self._fd, self._last = fd, 0

    def __call__(self, block: int) -> None:
        """A block is safe, and all before it."""
        if block == self._last:
            return
        # Whoever listened may be gone, or read no more: neither may hold up the journal.
        with suppress(OSError):
            if select.select([], [self._fd], [], 0)[1]:
                os.write(self._fd, f"{block}\n".encode("ascii"))
                self._last = block


@contextmanager
def _told_to_stop() -> Iterator[threading.Event]:
    """An event that SIGINT, SIGTERM and the terminal's end set, while it lasts; not the last under nohup."""
    told = threading.Event()
    numbers = [signal.SIGINT, signal.SIGTERM]
    if hasattr(signal, "SIGHUP") and signal.getsignal(signal.SIGHUP) is not signal.SIG_IGN:
        numbers.append(signal.SIGHUP)
    before = [signal.signal(number, lambda *_: told.set()) for number in numbers]
    try:
        yield told
    finally:
        for number, handler in zip(numbers, before, strict=True):
            signal.signal(number, handler)
