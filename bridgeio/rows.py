"""Readings as text rows: JSON lines and CSV, for programs.

One rule: unknown is null (an empty cell in CSV), never NaN or infinity, and numbers keep full precision. A new column
is one line in COLUMNS.
"""

from __future__ import annotations

import json
import math
from collections.abc import Callable, Iterator
from datetime import UTC, datetime
from typing import Any

from calibration import flags as flag

from .desk import TimedReadings

__all__ = ["COLUMNS", "FORMATS", "csv_header", "csv_rows", "json_rows", "rfc3339"]


def rfc3339(time_s: float) -> str | None:
    """RFC 3339 UTC with milliseconds and Z of seconds since 1970; None for NaN or infinity."""
    if not math.isfinite(time_s):
        return None
    stamp = datetime.fromtimestamp(round(time_s * 1000.0) / 1000.0, UTC)
    return f"{stamp:%Y-%m-%dT%H:%M:%S}.{stamp.microsecond // 1000:03d}Z"


def json_rows(batch: TimedReadings, bridge: str | None) -> Iterator[str]:
    """One JSON object a reading, without line ends."""
    names = list(COLUMNS)
    for row in _rows(batch, bridge):
        # All but plain ASCII becomes an escape, so that no name drives a terminal.
        yield json.dumps(dict(zip(names, row, strict=True)), allow_nan=False, ensure_ascii=True)


def csv_header() -> str:
    """The header line, without line end."""
    return ",".join(COLUMNS)


def csv_rows(batch: TimedReadings, bridge: str | None) -> Iterator[str]:
    """One line a reading, without line ends: RFC 4180 quoting, empty for unknown, flags parted by a space.

    What cannot be printed is written as an escape, so that a line stays a line and drives no terminal.
    """
    for row in _rows(batch, bridge):
        yield ",".join(_cell(value) for value in row)


def _rows(batch: TimedReadings, bridge: str | None) -> Iterator[tuple[Any, ...]]:
    columns = [column(batch, bridge) for column in COLUMNS.values()]
    return zip(*columns, strict=True)


def _cell(value: Any) -> str:
    if value is None:
        return ""
    if not isinstance(value, str):
        return " ".join(value) if isinstance(value, list) else str(value)
    text = "".join(char if char.isprintable() else char.encode("unicode_escape").decode("ascii") for char in value)
    if text.startswith(_FORMULA):
        text = f"'{text}"
    return f'"{text.replace(chr(34), chr(34) * 2)}"' if "," in text or '"' in text else text


#: What a cell must not begin with: a spreadsheet would run it as a formula (the last four are their wide forms).
_FORMULA = ("=", "+", "-", "@", "\uff1d", "\uff0b", "\uff0d", "\uff20")


Column = Callable[[TimedReadings, str | None], list[Any]]


def _of(name: str) -> Column:
    def column(batch: TimedReadings, _bridge: str | None) -> list[Any]:
        return [value if math.isfinite(value) else None for value in getattr(batch.readings, name).tolist()]

    return column


#: column -> how it is taken, in the order of output.
COLUMNS: dict[str, Column] = {
    "time": lambda batch, _bridge: [rfc3339(float(value)) for value in batch.time_s],
    **{
        name: _of(name)
        for name in (
            *("forward_w", "forward_low_w", "forward_high_w", "reflected_w", "reflected_low_w", "reflected_high_w"),
            *("net_w", "net_low_w", "net_high_w", "rho", "rho_low", "rho_high", "swr", "swr_low", "swr_high"),
            *("return_loss_db", "forward_counts", "reflected_counts", "frequency_hz"),
        )
    },
    "averaged": lambda batch, _bridge: batch.averaged.tolist(),
    "bridge": lambda batch, bridge: [bridge] * len(batch.readings),
    "flags": lambda batch, _bridge: [list(flag.names(bits)) for bits in batch.readings.flags],
}

#: format -> rows of it.
FORMATS: dict[str, Callable[[TimedReadings, str | None], Iterator[str]]] = {"jsonl": json_rows, "csv": csv_rows}
