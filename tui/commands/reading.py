"""What `stream` and `watch` share: from options to a desk, and a link's damage in words."""

from __future__ import annotations

import argparse
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from bridgeio.account import Counters
    from bridgeio.desk import Desk
    from bridgeio.ports import Source
    from bridgeio.receiver import Receiver

__all__ = ["damage_in_words", "desk_for", "receiver_for"]


def desk_for(args: argparse.Namespace, source: Source) -> Desk:
    """The desk that reads `source` by the options given; the simulated bridge brings its own bridge file.

    FileError for a wrong bridge file, UnitError for a wrong frequency.
    """
    from bridgeio.bridge_file import load_bridge_file
    from bridgeio.desk import Desk
    from bridgeio.simulator import BRIDGE_FILE
    from calibration.units import frequency_hz

    paths = list(args.bridge) or ([BRIDGE_FILE] if source.simulated else [])
    return Desk(
        [load_bridge_file(path) for path in paths],
        frequency_hz=None if args.frequency is None else frequency_hz(args.frequency),
        samples=getattr(args, "samples", 1),
        simulated=source.simulated,
        live=source.live,
    )


def receiver_for(args: argparse.Namespace, source: Source) -> Receiver:
    """The receiver for `source`; a file is read from its first byte, a port from somewhere within a frame.

    PatternError (a usage error) for a --pattern that cannot be used.
    """
    from bridgeio.receiver import Receiver

    return Receiver(wire=args.wire, pattern=args.pattern, from_start=not source.live)


def damage_in_words(counters: Counters) -> str:
    """What was damaged or lost on the line, "" where nothing was."""
    parts = [
        (counters.bad_crc, "frames with a bad checksum"),
        (counters.malformed, "malformed frames"),
        (counters.bad_lines, "lines that are none of the known forms"),
        (counters.lost, "frames lost at least"),
        (counters.newer, "frames of a newer bridge than this program knows"),
    ]
    return ", ".join(f"{count} {what}" for count, what in parts if count)
