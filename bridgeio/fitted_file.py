"""A bridge file together with what its [fit] table tells of the fit itself: when, by what, residuals, notes.

One rule: the id guards the numbers a meter needs; what only a report needs is looked at here before it is believed.
"""

from __future__ import annotations

import math
import shlex
import tomllib
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from calibration.bridge import Bridge

from .bridge_file import BridgeFile, parse_bridge_file, sheet_text
from .errors import FileError

__all__ = ["FitRecord", "FittedFile", "load_fitted"]


#: No detector comes near such a gain [law units per root watt], nor its inverse.
_LEAST_GAIN = 1e-12


@dataclass(frozen=True, slots=True)
class FitRecord:
    """When and by what a fit was made (outside text), the wattmeter's scatter [% sd], residuals, notes.

    residuals: (step from 1, "forward", "reflected" or "power", sd off the fit) each.
    """

    date: str
    program: str
    scatter_pct: float
    residuals: tuple[tuple[int, str, float], ...]
    notes: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class FittedFile:
    """A bridge file with its fit: as read, the calibrated bridge, and the fit's own record."""

    file: BridgeFile
    bridge: Bridge
    fit: FitRecord


def load_fitted(path: str | Path) -> FittedFile:
    """Read a bridge file with its fit. FileError with every fault in words, also for a sheet without [fit]."""
    text = sheet_text(path)
    file = parse_bridge_file(text, str(path))
    bridge = file.calibrated()
    try:
        _demand_gains(bridge)
        return FittedFile(file, bridge, _record(tomllib.loads(text)["fit"]))
    except (KeyError, TypeError, ValueError) as error:
        quoted = shlex.quote(str(path))
        raise FileError(
            f"{path}: fit: is not whole ({type(error).__name__}: {error}); "
            f"run `bridgewright fit {quoted} -o {quoted}` to write it anew"
        ) from error


def _demand_gains(bridge: Bridge) -> None:
    """ValueError where a band's gain is no gain, for which there are no decibels."""
    for number, band in enumerate(bridge.bands, 1):
        if not all(_LEAST_GAIN < gain < 1.0 / _LEAST_GAIN for gain in (band.gain_forward, band.gain_reflected)):
            raise ValueError(f"band {number} has a gain out of range")


def _record(table: dict[str, Any]) -> FitRecord:
    residuals = tuple((int(row["step"]), str(row["what"]), float(row["sigmas"])) for row in table["residual"])
    scatter = float(table["reference_scatter_pct"])
    if not all(map(math.isfinite, [scatter, *(sigmas for *_, sigmas in residuals)])):
        raise ValueError("a number that is not finite")
    notes = tuple(str(note) for note in table["notes"])
    return FitRecord(str(table["date"]), str(table["program"]), scatter, residuals, notes)
