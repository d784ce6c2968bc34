"""Readings as sentences, one a line, for screen readers and terminals without a cursor.

One rule: a line says everything by itself; nothing depends on its place, its colour or the line before it.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from .readout import Field, read_out

if TYPE_CHECKING:
    from calibration.meter import Readings

__all__ = ["line"]


def line(reading: Readings) -> str:
    """One sentence for a reading of length one, such as "SWR 1.42, 1.36-1.49; net 47.9 W, 45-51; forward ..."."""
    readout = read_out(reading)
    parts = ["stale"] if readout.stale else []
    parts.append(_named("SWR", readout.swr, ""))
    if readout.swr.word not in ("no carrier", "uncalibrated"):
        parts += [
            _named("net", readout.net, " W"),
            _named("forward", readout.forward, " W"),
            _named("reflected", readout.reflected, " W"),
        ]
    parts += readout.remarks
    return "; ".join(parts) + "."


def _named(name: str, field: Field, unit: str) -> str:
    value = f"{field.text}{unit}" if field.text else field.word
    return f"{name} {value}" + (f", {field.interval}" if field.interval else "")
