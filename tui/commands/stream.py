"""`bridgewright stream`: readings as lines on standard output, for programs and for looking.

One rule: standard output carries readings only; all talk goes to standard error.
"""

from __future__ import annotations

import argparse
import sys
import time
from typing import IO, TYPE_CHECKING

from tui.commands.options import add_reading_options, add_source_options, at_least_one

if TYPE_CHECKING:
    from bridgeio.desk import Desk, TimedReadings
    from bridgeio.ports import Source
    from bridgeio.receiver import Receiver

__all__ = ["EXAMPLE", "add_arguments", "run"]

EXAMPLE = "bridgewright stream sim: --count 5"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add stream's options."""
    add_source_options(parser)
    add_reading_options(parser)
    parser.add_argument("--format", choices=("jsonl", "csv"), default="jsonl", help="JSON lines (default) or CSV")
    parser.add_argument("--count", type=at_least_one, metavar="N", help="stop after N readings")
    parser.add_argument(
        "--samples", type=at_least_one, default=1, metavar="N", help="each pair of counts is a mean of N readings (1)"
    )
    parser.add_argument("--raw", metavar="FILE", help="also keep the bytes as they come, in a new file")


def run(args: argparse.Namespace) -> int:
    """Print readings until the source ends, the count is reached or the user stops."""
    from bridgeio.ports import EndOfSource, open_source
    from tui.commands.reading import desk_for, receiver_for

    source = open_source(args.source, args.baud)
    receiver = receiver_for(args, source)
    desk = desk_for(args, source)
    printer = _Printer(args.format, args.count)
    raw = _new_file(args.raw)
    try:
        source.open()
        while not printer.full:
            data = source.read()
            if raw is not None:
                raw.write(data)
            _print_all(data, receiver, desk, printer)
    except EndOfSource:
        pass
    finally:
        source.close()
        if raw is not None:
            raw.close()
    _tell_end(receiver, desk, printer, source)
    return 0


def _print_all(data: bytes, receiver: Receiver, desk: Desk, printer: _Printer) -> None:
    items = receiver.feed(data)
    for batch in desk.take(items, time.time()):
        printer.print(batch, desk)


class _Printer:
    """Prints rows until `count` are out, and says once why readings are counts only."""

    def __init__(self, form: str, count: int | None) -> None:
        from bridgeio.rows import FORMATS, csv_header

        self._rows, self._left, self.printed = FORMATS[form], count, 0
        self._said: str | None = None
        if form == "csv":
            print(csv_header())

    @property
    def full(self) -> bool:
        """Whether the count is reached."""
        return self._left == 0

    def print(self, batch: TimedReadings, desk: Desk) -> None:
        """Print a batch's rows, no more than are left, and flush: a reader follows live."""
        from tui.door import say

        if desk.note not in (None, self._said):
            self._said = desk.note
            say(f"bridgewright stream: {desk.note}")
        rows = list(self._rows(batch, desk.bridge_name, 1))
        if self._left is not None:
            rows = rows[: self._left]
            self._left -= len(rows)
        self.printed += len(rows)
        sys.stdout.write("".join(f"{row}\n" for row in rows))
        sys.stdout.flush()


def _new_file(path: str | None) -> IO[bytes] | None:
    from bridgeio.errors import FileError

    if path is None:
        return None
    try:
        return open(path, "xb")
    except OSError as error:
        raise FileError(f"{path}: cannot be made: {error.strerror}; --raw wants the name of a new file") from error


def _tell_end(receiver: Receiver, desk: Desk, printer: _Printer, source: Source) -> None:
    """Say on standard error what a listener should know: nothing readable at all, or damage and losses."""
    from tui.commands.reading import damage_in_words
    from tui.door import say

    words = damage_in_words(receiver.counters)
    if not printer.printed and not printer.full:
        say(f"bridgewright stream: nothing readable came from {source.name}{f' ({words})' if words else ''}")
    elif words:
        say(f"bridgewright stream: {words}")
