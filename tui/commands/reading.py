"""What `stream` and `watch` share: from options to a desk, and a link's damage in words."""

from __future__ import annotations

import argparse
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from pathlib import Path

    from bridgeio.account import Counters
    from bridgeio.bridge_file import BridgeFile
    from bridgeio.desk import Desk
    from bridgeio.ports import Source
    from bridgeio.receiver import Receiver

__all__ = ["bridge_paths", "damage_in_words", "desk_for", "receiver_for"]


def bridge_paths(args: argparse.Namespace, source: Source) -> list[str | Path]:
    """The bridge files to read by; the simulated bridge brings its own."""
    from bridgeio.simulator import BRIDGE_FILE

    return list(args.bridge) or ([BRIDGE_FILE] if source.simulated else [])


def desk_for(args: argparse.Namespace, source: Source) -> Desk:
    """The desk that reads `source` by the options given; the simulated bridge brings its own bridge file.

    FileError for a wrong bridge file, UnitError for a wrong frequency.
    """
    from bridgeio.bridge_file import load_bridge_file
    from bridgeio.desk import Desk, Reading

    files = [load_bridge_file(path) for path in bridge_paths(args, source)]
    how = Reading(
        frequency_hz=_frequency_hz(args.frequency, files),
        samples=getattr(args, "samples", 1),
        average=getattr(args, "average", 1),
        hard=args.hard,
        live_dark=args.dark == "live",
    )
    return Desk(files, how, simulated=source.simulated, live=source.live)


def _frequency_hz(text: str | None, files: list[BridgeFile]) -> float | None:
    """The frequency meant; a band's name means the calibrated frequency within that band, else its middle."""
    from calibration.errors import UnitError
    from calibration.units import BANDS, frequency_hz

    if text is None:
        return None
    low, high = BANDS.get(text.strip(), (0.0, 0.0))
    for file in files:
        for band in file.calibrated().bands:
            if low <= band.frequency_hz <= high:
                return band.frequency_hz
    try:
        return frequency_hz(text)
    except UnitError as error:
        raise UnitError(f"--frequency: {error}") from error


def receiver_for(args: argparse.Namespace, source: Source) -> Receiver:
    """The receiver for `source`; a file is read from its first byte, a port from somewhere within a frame.

    PatternError (a usage error) for a --pattern that cannot be used.
    """
    from bridgeio.receiver import Receiver

    return Receiver(wire=args.wire, pattern=args.pattern, from_start=not source.live)


def damage_in_words(counters: Counters) -> str:
    """What was damaged or lost on the line, "" where nothing was."""
    parts = [
        (counters.bad_crc, "frame", "with a bad checksum"),
        (counters.malformed, "malformed frame", ""),
        (counters.bad_lines, "line", "in none of the known forms"),
        (counters.lost, "frame", "lost at least"),
        (counters.newer, "frame", "of a newer bridge than this program knows"),
    ]
    return ", ".join(f"{n} {noun}{'s' if n > 1 else ''} {rest}".rstrip() for n, noun, rest in parts if n)
