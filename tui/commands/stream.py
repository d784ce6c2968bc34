"""`bridgewright stream`: readings as lines on standard output, for programs and for looking.

One rule: standard output carries readings only; all talk goes to standard error.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Callable, Sequence
from contextlib import ExitStack
from typing import IO, TYPE_CHECKING

from bridgeio.errors import FileError
from tui.commands.options import add_reading_options, add_source_options, at_least_one
from tui.door import say, visible

if TYPE_CHECKING:
    from bridgeio.desk import Desk, TimedReadings
    from bridgeio.frames import Item
    from bridgeio.link import Link, LinkState
    from bridgeio.ports import Source
    from bridgeio.receiver import Receiver

__all__ = ["EXAMPLE", "add_arguments", "run"]

EXAMPLE = "bridgewright stream sim: --count 5"

#: Where several readings come at once, readings are printed ten times a second [s]; else each as it comes.
_SEVERAL, _GATHERING_S = 3, 0.1


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add stream's options."""
    add_source_options(parser)
    add_reading_options(parser)
    parser.add_argument("--format", choices=("jsonl", "csv"), default="jsonl", help="JSON lines (default) or CSV")
    parser.add_argument("--count", type=at_least_one, metavar="N", help="stop after N readings")
    parser.add_argument(
        "--samples", type=at_least_one, default=1, metavar="N", help="each pair of counts is a mean of N readings (1)"
    )
    parser.add_argument(
        "--average", type=at_least_one, default=1, metavar="N", help="one reading from N tallies, powers averaged (1)"
    )
    parser.add_argument("--raw", metavar="FILE", help="also keep the bytes as they come, in a new file")


def run(args: argparse.Namespace) -> int:
    """Print readings until the source ends, the count is reached or the user stops; one that was lost is looked for."""
    from bridgeio.link import Link
    from bridgeio.ports import open_source
    from tui.commands.reading import desk_for, receiver_for

    source = open_source(args.source, args.baud)
    receiver, desk = receiver_for(args, source), desk_for(args, source)
    with ExitStack() as held:
        raw, printer = _Raw(args.raw, held), _Printer(args.format, args.count)
        states = _States(raw.begin, printer.begin)
        link = Link(
            source,
            receiver,
            lambda items, arrival_s: _print_all(items, arrival_s, desk, printer, link),
            states.tell,
            on_reopened=desk.reopened,
            on_bytes=raw.keep,
        )
        link.run()
    if not printer.full:
        _tell_unfinished(raw.last, receiver)
        if desk.waiting:
            _tell(f"the last {desk.waiting} tallies make no average of {args.average} and were left out")
    _tell_end(receiver, printer, source)
    return 0


def _print_all(items: Sequence[Item], arrival_s: float, desk: Desk, printer: _Printer, link: Link) -> None:
    """Print the readings that `items` complete; the link rests by how many there are, and ends with the last one."""
    from bridgeio.link import REST_S

    before = printer.printed
    for batch in desk.take(items, arrival_s):
        printer.print(batch, desk)
    link.rest_s = REST_S if printer.printed - before < _SEVERAL else _GATHERING_S
    if printer.full:
        link.stop()


class _States:
    """Begins the output when the source is open, and says when it is lost and when it is back."""

    def __init__(self, *begin: Callable[[], None]) -> None:
        self._begin, self._begun, self._said = begin, False, ""

    def tell(self, state: LinkState) -> None:
        """Hear a state of the link."""
        if state.phase == "looking":
            # For how long it has been looked for is no news.
            words = state.words.rpartition(" for ")[0]
            if words != self._said:
                _tell(words)
            self._said = words
        elif state.phase == "open" and not self._begun:
            self._begun = True
            for begin in self._begin:
                begin()
        elif self._said:
            _tell(f"{state.words} again")
            self._said = ""


class _Raw:
    """Keeps the bytes as they come, in a new file where one is wanted; the last byte in any case."""

    def __init__(self, path: str | None, held: ExitStack) -> None:
        self._path, self._held = path, held
        self._file: IO[bytes] | None = None
        self.last = b""

    def begin(self) -> None:
        """Make the file, once there is something to keep. FileError where that cannot be."""
        if self._path is not None:
            self._file = self._held.enter_context(_new_file(self._path))

    def keep(self, data: bytes) -> None:
        """Write at once: whatever ends us, what came is kept. FileError where that cannot be."""
        self.last = data[-1:] or self.last
        if self._file is None:
            return
        try:
            self._file.write(data)
        except OSError as error:
            raise FileError(f"{self._path}: cannot be written: {error.strerror}") from error


class _Printer:
    """Prints rows until `count` are out, and says once what speaks against them."""

    def __init__(self, form: str, count: int | None) -> None:
        from bridgeio.rows import FORMATS, csv_header

        self._rows, self._left, self.printed = FORMATS[form], count, 0
        self._said: set[str] = set()
        self._header = csv_header() if form == "csv" else None

    def begin(self) -> None:
        """Print what goes before the rows."""
        if self._header is not None:
            print(self._header)

    @property
    def full(self) -> bool:
        """Whether the count is reached."""
        return self._left == 0

    def print(self, batch: TimedReadings, desk: Desk) -> None:
        """Print a batch's rows, no more than are left, and flush: a reader follows live."""
        for words in (desk.note, desk.caution):
            if words and words not in self._said:
                self._said.add(words)
                _tell(words)
        rows = list(self._rows(batch, desk.bridge_name))
        if self._left is not None:
            rows = rows[: self._left]
            self._left -= len(rows)
        self.printed += len(rows)
        sys.stdout.write("".join(f"{row}\n" for row in rows))
        sys.stdout.flush()


def _new_file(path: str) -> IO[bytes]:
    try:
        return open(path, "xb", buffering=0)
    except OSError as error:
        raise FileError(f"{path}: cannot be made: {error.strerror}; --raw wants the name of a new file") from error


def _tell_unfinished(last: bytes, receiver: Receiver) -> None:
    """Say that a last line without its end was left out: where it was cut off, its numbers would be false."""
    counters = receiver.counters
    lines = sum(counters.frames.values()) == counters.twins and (counters.lines or counters.bytes < 512)
    if lines and last not in (b"", b"\n", b"\0"):
        _tell("the last line has no line end and was left out, as it may be cut off")


def _tell_end(receiver: Receiver, printer: _Printer, source: Source) -> None:
    """Say on standard error what a listener should know: nothing readable at all, or damage and losses."""
    from tui.commands.reading import damage_in_words

    words = damage_in_words(receiver.counters)
    if not printer.printed and not printer.full:
        _tell(f"nothing readable came from {source.name}{f' ({words})' if words else ''}")
    elif words:
        _tell(words)


def _tell(words: str) -> None:
    """A line on standard error, whatever the words hold."""
    say(visible(f"bridgewright stream: {words}"))
