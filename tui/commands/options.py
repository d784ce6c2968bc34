"""Options that several commands share, so that one word means one thing everywhere."""

from __future__ import annotations

import argparse
import re

__all__ = ["add_reading_options", "add_source_options", "at_least_one", "positive"]

_SOURCE_HELP = (
    "device path such as /dev/ttyUSB0, socket://HOST:PORT, rfc2217://HOST:PORT, file:PATH (a capture or text lines; "
    "file:- is standard input), or sim: "
    "(the simulated bridge, the default; options as sim:antenna=dipole&power=50)"
)


def add_source_options(parser: argparse.ArgumentParser, default: str | None = "sim:") -> None:
    """SOURCE and what belongs to any source; without a default it must be told."""
    told = _SOURCE_HELP if default else _SOURCE_HELP.replace(", the default", "")
    parser.add_argument("source", nargs="?" if default else None, default=default, metavar="SOURCE", help=told)
    parser.add_argument("--baud", type=_rate, default=115200, metavar="RATE", help="rate of a serial port (115200)")
    parser.add_argument(
        "--wire", choices=("auto", "text"), default="auto", help="text: lines only, never binary frames (auto)"
    )
    parser.add_argument(
        "--pattern", metavar="RE", help="lines that match it are counts: groups forward, reflected, optionally ms"
    )


def add_reading_options(parser: argparse.ArgumentParser) -> None:
    """What turns counts into readings."""
    parser.add_argument(
        "--bridge",
        action="append",
        default=[],
        metavar="FILE",
        help="bridge file with a fit; may be repeated, files are matched to boards by device_id",
    )
    parser.add_argument("--frequency", metavar="F", help="14.1M, 14100k, hertz, or a band such as 20m")
    parser.add_argument("--hard", action="store_true", help="bounds that nothing can exceed, not 95 %% intervals")
    parser.add_argument(
        "--dark",
        choices=("file", "live"),
        default="file",
        help="zero: the bridge file's (default; intervals allow for a dark count that has moved), or the running one",
    )


def _rate(text: str) -> int:
    value = _whole(text)
    if not 300 <= value <= 4_000_000:
        raise argparse.ArgumentTypeError(f"{text[:40]!r} is no rate; wanted baud from 300 to 4000000, usually 115200")
    return value


def at_least_one(text: str) -> int:
    """A whole number from 1 up, for argparse."""
    value = _whole(text)
    if value < 1:
        raise argparse.ArgumentTypeError(f"{text[:40]!r} is no number of readings; wanted a whole number from 1 up")
    return value


def _whole(text: str) -> int:
    """A whole number of up to nine digits, else 0."""
    return int(text) if re.fullmatch("[0-9]{1,9}", text) else 0


def positive(text: str) -> float:
    """A number above zero, for argparse."""
    try:
        value = float(text)
    except ValueError:
        value = 0.0
    if not 0.0 < value < 1e9:
        raise argparse.ArgumentTypeError(f"{text!r} is not a number above 0")
    return value
