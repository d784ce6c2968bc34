"""`bridgewright keep`: an unattended journal, until it is told to stop.

One rule: it ends in words and an exit code, whoever ends it: the user, the system, the port or the disk.
"""

from __future__ import annotations

import argparse
import signal
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING

from tui.commands.options import add_source_options
from tui.door import say, visible

if TYPE_CHECKING:
    from bridgeio.log.recorder import Recorder

__all__ = ["EXAMPLE", "add_arguments", "run"]

EXAMPLE = "bridgewright keep sim:duration=3 try.journal"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add keep's options."""
    add_source_options(parser, default=None)
    parser.add_argument("journal", metavar="JOURNAL", help="the journal's file; one that is there is continued")
    parser.add_argument("--bridge", metavar="FILE", help="bridge file; it is stored whole with the record")
    parser.add_argument("--frequency", metavar="F", help="noted where the bridge does not tell its own: 14.1M, 20m")


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
    recorder = Recorder(
        source,
        receiver_for(args, source),
        args.journal,
        bridge_file=text,
        frequency_hz=frequency_hz(args.frequency) if args.frequency else None,
        say=lambda words: say(f"bridgewright keep: {words}"),
    )
    return _until_told(recorder)


def _until_told(recorder: Recorder) -> int:
    from bridgeio.errors import LinkError
    from bridgeio.journal import Journal

    with _told_to_stop() as told:
        recorder.start()
        while not told.wait(0.2) and recorder.link.phase not in ("lost", "ended"):
            pass
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


@contextmanager
def _told_to_stop() -> Iterator[threading.Event]:
    """An event that SIGINT and SIGTERM set, while it lasts."""
    told = threading.Event()
    numbers = (signal.SIGINT, signal.SIGTERM)
    before = [signal.signal(number, lambda *_: told.set()) for number in numbers]
    try:
        yield told
    finally:
        for number, handler in zip(numbers, before, strict=True):
            signal.signal(number, handler)
