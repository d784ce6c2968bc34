"""`bridgewright report`: what a file holds, in words; which kind of file it is, its content tells.

One rule: all that a file says passes the door before it is shown.
"""

from __future__ import annotations

import argparse
import os
import sys

from bridgeio.errors import FileError
from tui.door import say, visible

__all__ = ["EXAMPLE", "add_arguments", "run"]

EXAMPLE = "bridgewright report try.journal"

#: How every journal begins, as every SQLite file does.
_DATABASE = b"SQLite format 3\0"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add report's options."""
    parser.add_argument("file", metavar="FILE", help="a journal, also while `keep` writes it, or a bridge file")
    parser.add_argument("--html", metavar="FILE", help="of a bridge file: write a page with pictures here instead")
    parser.add_argument(
        "--bridge",
        action="append",
        default=[],
        metavar="FILE",
        help="read a journal by this bridge file, not by the one stored; may be repeated, matched by device_id",
    )


def run(args: argparse.Namespace) -> int:
    """Print the report, or write its page; 3 where some of the file could not be read."""
    return _of_journal(args) if _is_database(args.file) else _of_bridge_file(args)


def _is_database(path: str) -> bool:
    try:
        with open(path, "rb") as file:
            return file.read(len(_DATABASE)) == _DATABASE
    except OSError as error:
        raise FileError(f"{path}: cannot be read: {error.strerror}; wanted a journal or a bridge file") from error


def _of_journal(args: argparse.Namespace) -> int:
    from bridgeio.bridge_file import load_bridge_file
    from bridgeio.journal import Journal
    from bridgeio.log.report import report_lines

    if args.html:
        raise FileError(f"{args.file}: is a journal, of which there is a report in words only; leave out --html")
    files = [load_bridge_file(path) for path in args.bridge]
    with Journal(args.file) as journal:
        for line in report_lines(journal, files):
            print(visible(line))
        return 3 if journal.bad or journal.faults else 0


def _of_bridge_file(args: argparse.Namespace) -> int:
    from bridgeio import bridge_report
    from bridgeio.fit_table import write_whole

    if not args.html:
        for line in bridge_report.text(args.file):
            print(visible(line))
        return 0
    if os.path.exists(args.html) and os.path.samefile(args.file, args.html):
        raise FileError(f"{args.html}: is the bridge file itself; wanted another name for the page")
    say("bridgewright report: drawing; this takes some seconds")
    write_whole(args.html, bridge_report.html(args.file, visible=visible))
    say(visible(f"written: {args.html}"), sys.stdout)
    return 0
