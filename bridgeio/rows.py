"""Readings as text rows: JSON lines and CSV, for programs.

One rule: unknown is null (an empty cell in CSV), never NaN or infinity, and numbers keep full precision. A new column
is one line in COLUMNS.
"""

from __future__ import annotations

import json
import math
from collections.abc import Callable, Iterator
from datetime import UTC, datetime
from functools import lru_cache
from json.encoder import encode_basestring_ascii
from typing import Any

import numpy as np

from calibration import flags as flag

from .desk import TimedReadings
from .visible import visible

__all__ = ["COLUMNS", "FORMATS", "csv_header", "csv_rows", "json_rows", "rfc3339"]


def rfc3339(time_s: float) -> str | None:
    """RFC 3339 UTC with milliseconds and Z of seconds since 1970; None for NaN or infinity."""
    if not math.isfinite(time_s):
        return None
    second, ms = divmod(round(time_s * 1000.0), 1000)
    return f"{_second(second)}.{ms:03d}Z"


def json_rows(batch: TimedReadings, bridge: str | None) -> Iterator[str]:
    """One JSON object a reading, without line ends.

    They come by the thousand: keys are written once a batch, and numbers by Python's own shortest form.
    """
    form = "{" + ", ".join(f"{json.dumps(name)}: %s" for name in COLUMNS) + "}"
    columns = [_json_texts(column(batch, bridge)) for column in COLUMNS.values()]
    return (form % row for row in zip(*columns, strict=True))


def csv_header() -> str:
    """The header line, without line end."""
    return ",".join(COLUMNS)


def csv_rows(batch: TimedReadings, bridge: str | None) -> Iterator[str]:
    """One line a reading, without line ends: RFC 4180 quoting, empty for unknown, flags parted by a space.

    What cannot be printed is written as an escape, so that a line stays a line and drives no terminal.
    """
    columns = [column(batch, bridge) for column in COLUMNS.values()]
    for row in zip(*columns, strict=True):
        yield ",".join(_cell(value) for value in row)


def _json_texts(values: list[Any]) -> list[Any]:
    """What stands for values in a row: finite numbers as they are, all else as text."""
    if set(map(type, values)) == {float}:
        return values
    return [value if type(value) is float else _json(value) for value in values]


def _json(value: Any) -> str:
    # All but plain ASCII becomes an escape, and DEL, which JSON lets pass: no name drives a terminal.
    if isinstance(value, str):
        return encode_basestring_ascii(value).replace("\x7f", "\\u007f")
    return _repeated(value)


@lru_cache(maxsize=256)
def _repeated(value: Any) -> str:
    return json.dumps(value, allow_nan=False)


@lru_cache(maxsize=8)
def _second(second: int) -> str:
    return f"{datetime.fromtimestamp(second, UTC):%Y-%m-%dT%H:%M:%S}"


def _cell(value: Any) -> str:
    if value is None:
        return ""
    if not isinstance(value, str):
        return " ".join(value) if isinstance(value, tuple) else str(value)
    text = visible(value)
    if text.startswith(_FORMULA):
        text = f"'{text}"
    return f'"{text.replace(chr(34), chr(34) * 2)}"' if "," in text or '"' in text else text


#: What a cell must not begin with: a spreadsheet would run it as a formula (the last four are their wide forms).
_FORMULA = ("=", "+", "-", "@", "\uff1d", "\uff0b", "\uff0d", "\uff20")


_names = lru_cache(maxsize=256)(flag.names)

Column = Callable[[TimedReadings, str | None], list[Any]]


def _of(name: str) -> Column:
    def column(batch: TimedReadings, _bridge: str | None) -> list[Any]:
        found = getattr(batch.readings, name)
        values: list[Any] = found.tolist()
        if np.isfinite(found).all():
            return values
        return [value if math.isfinite(value) else None for value in values]

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
    "flags": lambda batch, _bridge: [_names(bits) for bits in batch.readings.flags.tolist()],
}

#: format -> rows of it.
FORMATS: dict[str, Callable[[TimedReadings, str | None], Iterator[str]]] = {"jsonl": json_rows, "csv": csv_rows}
