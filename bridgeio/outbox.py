"""Gathers what a feed brings: rare frames as they are, counts as rows of bytes that become arrays in one go.

One rule: order is kept, and counts of one mould with nothing between them become one `Tallies`.
"""

from __future__ import annotations

import struct
from typing import Any

import numpy as np

from bridgeio.frames import KINDS, Item, Tallies

__all__ = ["MOULDS", "PLAIN", "PLAIN_TIMED", "Mould", "Outbox", "plain_row"]


class Mould:
    """What a run of counts is cast into."""

    def __init__(self, record: np.dtype[Any], **marks: bool) -> None:
        self.record, self.marks = record, marks


class Outbox:
    """Items of one feed; rows of counts of one mould gather until something else comes."""

    def __init__(self) -> None:
        self._items: list[Item] = []
        self._rows: list[bytes] = []
        self._mould: Mould | None = None

    def row(self, mould: Mould, rows: bytes) -> None:
        """Adds one row, or several end to end."""
        if mould is not self._mould:
            self._cast()
            self._mould = mould
        self._rows.append(rows)

    def item(self, item: Item) -> None:
        """Adds something rare, after all that came before."""
        self._cast()
        self._items.append(item)

    def empty(self) -> list[Item]:
        """Hands over all that gathered."""
        self._cast()
        items, self._items = self._items, []
        return items

    def _cast(self) -> None:
        if self._mould and self._rows:
            records = np.frombuffer(b"".join(self._rows), self._mould.record)
            self._items.append(Tallies.from_records(records, **self._mould.marks))
            self._rows.clear()


def plain_row(forward: float, reflected: float, ms: int | None) -> bytes:
    """A plain line as a row for `PLAIN` or `PLAIN_TIMED`: counts, device time [ms] or None."""
    return _PLAIN_ROW.pack(0, ms or 0, forward, reflected, 0)


_PLAIN_ROW = struct.Struct("<BIddB")
_PLAIN_RECORD = np.dtype([("seq", "u1"), ("ms", "<u4"), ("forward", "<f8"), ("reflected", "<f8"), ("flags", "u1")])
PLAIN = Mould(_PLAIN_RECORD, checked=False, has_ms=False)
PLAIN_TIMED = Mould(_PLAIN_RECORD, checked=False)
#: How each kind of counts is cast.
MOULDS: dict[int, Mould] = {kind.number: Mould(kind.record, wide=kind.wide) for kind in KINDS if kind.counted}
