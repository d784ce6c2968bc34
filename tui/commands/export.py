"""`bridgewright export`: a journal as readings, the rows that `stream` writes.

One rule: rows are readings only; what is missing, damaged or left out is told on standard error and in the exit code.
"""

from __future__ import annotations

import argparse
import sys
from contextlib import ExitStack
from datetime import UTC, datetime
from typing import IO, TYPE_CHECKING

from bridgeio.errors import FileError
from tui.door import say, visible

if TYPE_CHECKING:
    from bridgeio.journal import Journal
    from bridgeio.log.replay import Replay

__all__ = ["EXAMPLE", "add_arguments", "run"]

EXAMPLE = "bridgewright export try.journal --format csv"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add export's options."""
    parser.add_argument("journal", metavar="JOURNAL", help="a journal as `keep` writes it, also while it does")
    parser.add_argument(
        "--bridge",
        action="append",
        default=[],
        metavar="FILE",
        help="read by this bridge file, not by the one stored; may be repeated, matched to boards by device_id",
    )
    parser.add_argument("--format", choices=("jsonl", "csv"), default="jsonl", help="JSON lines (default) or CSV")
    parser.add_argument("-o", "--output", metavar="FILE", help="a new file (standard output)")
    parser.add_argument(
        "--from", dest="from_us", type=_time_us, metavar="T", help="from this time on: 2026-10-24T18:00Z, in UTC"
    )
    parser.add_argument("--to", dest="to_us", type=_time_us, metavar="T", help="until before this time")


def run(args: argparse.Namespace) -> int:
    """Write the rows; 3 where some of the journal could not be read."""
    from bridgeio.bridge_file import load_bridge_file
    from bridgeio.journal import Journal
    from bridgeio.log.replay import Replay

    files = [load_bridge_file(path) for path in args.bridge]
    with Journal(args.journal) as journal, ExitStack() as held:
        replay = Replay(journal, files, from_us=args.from_us, to_us=args.to_us)
        out = sys.stdout if args.output is None else held.enter_context(_new_file(args.output))
        rows = _write(replay, args.format, out)
        return _tell_end(args.journal, journal, replay, rows)


def _time_us(text: str) -> int:
    """A point in time [us since 1970] for argparse; UTC unless it says otherwise."""
    try:
        found = datetime.fromisoformat(text)
        told = found if found.tzinfo else found.replace(tzinfo=UTC)
        return round(told.timestamp() * 1e6)
    except (ValueError, OverflowError):
        raise argparse.ArgumentTypeError(
            f"{text[:40]!r} is no time; wanted a date and a time in UTC such as 2026-10-24T18:00:00Z"
        ) from None


def _write(replay: Replay, form: str, out: IO[str]) -> int:
    """Write all rows; returns how many."""
    from bridgeio.rows import FORMATS, csv_header

    written, rows_of = 0, FORMATS[form]
    if form == "csv":
        out.write(f"{csv_header()}\n")
    for batch, bridge in replay.readings():
        out.write("".join(f"{row}\n" for row in rows_of(batch, bridge)))
        written += len(batch.readings)
    return written


def _new_file(path: str) -> IO[str]:
    try:
        return open(path, "x", encoding="utf-8", newline="\n")
    except OSError as error:
        raise FileError(f"{path}: cannot be made: {error.strerror}; -o wants the name of a new file") from error


def _tell_end(path: str, journal: Journal, replay: Replay, rows: int) -> int:
    """Say what a reader of the rows should know; the exit code."""
    from bridgeio.log.words import bad_blocks, other_frames

    for words in (*replay.notes, *journal.faults):
        _tell(words)
    account = journal.walked
    others = other_frames(replay.frames)
    if others:
        _tell(f"not exported, being no tallies: {others}")
    damage = bad_blocks(account.bad)
    for words in damage:
        _tell(f"{path}: {words}")
    _tell(f"{path}: {rows} reading{'' if rows == 1 else 's'}; the log is {account.words}")
    return 3 if damage or journal.faults else 0


def _tell(words: str) -> None:
    """A line on standard error, whatever the words hold."""
    say(visible(f"bridgewright export: {words}"))
