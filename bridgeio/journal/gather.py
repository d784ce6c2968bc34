"""Blocks as columns: all tallies of minutes at once, and of the rare frames what decides how tallies are read.

One rule: it gives the frames that `unpack` gives, kind by kind; what came before what is told by their places.
"""

from __future__ import annotations

import itertools
import operator
import struct
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from bridgeio.frames import KIND_BY_NUMBER, KINDS, Conditions, Nameplate

from .columns import Columns, PackError, split
from .pack import (
    _CHECKED,
    _COUNTS,
    _HAS_MS,
    _LENGTH,
    _RUN,
    _STRANGE,
    _WHOLE,
    Micros,
    _rare_dtypes,
    _tally_dtypes,
    utc_of_runs,
)

__all__ = ["Counts", "Gathered", "gather"]

Places = npt.NDArray[np.intp]
#: Rows and bytes of tables of one shape.
Tables = list[tuple[int, bytes]]

#: A run as it is written.
_RUN_RECORD = np.dtype([("shape", "u1"), ("frames", "<u4"), ("offset_us", "<i8")])


@dataclass(frozen=True, slots=True)
class Counts:
    """n tallies of one mould in order: utc_us int64 [us since 1970]; counts of whole type where all are whole.

    place: rises with what stands in the blocks, the rare frames' places included; it tells what came before what.
    """

    place: Places
    utc_us: Micros
    forward: npt.NDArray[Any]
    reflected: npt.NDArray[Any]
    flags: npt.NDArray[np.uint8]
    checked: bool
    has_ms: bool

    def __len__(self) -> int:
        """How many tallies."""
        return len(self.utc_us)

    def part(self, rows: slice) -> Counts:
        """Some of them."""
        forward, reflected, flags = self.forward[rows], self.reflected[rows], self.flags[rows]
        return Counts(self.place[rows], self.utc_us[rows], forward, reflected, flags, self.checked, self.has_ms)


@dataclass(frozen=True, slots=True)
class Gathered:
    """The content of blocks of one stretch that follow each other.

    Conditions [m] in order: their places and times [us], temperature_c100 and frequency_hz as in `Conditions`; so for
    nameplates. frames: how many by number of kind; -1 are tallies, 0 frames of unknown kinds.
    """

    stretch: int
    counts: tuple[Counts, ...]
    conditions_place: Places
    conditions_us: Micros
    temperature_c100: npt.NDArray[np.int16]
    frequency_hz: npt.NDArray[np.uint32]
    plates_place: Places
    plates_us: Micros
    frames: dict[int, int]


def gather(stretch: int, contents: Sequence[bytes]) -> Gathered:
    """Columns of the blocks' contents. PackError where one is malformed."""
    try:
        return _gather(stretch, contents)
    except (struct.error, ValueError, LookupError, OverflowError) as error:
        raise PackError(f"a block's content is malformed: {error}") from error


def _gather(stretch: int, contents: Sequence[bytes]) -> Gathered:
    heads: list[bytes] = []
    tables: dict[int, Tables] = {}
    rows_of: dict[int, int] = {}
    for content in contents:
        head, found = _parted(content)
        heads.append(head)
        for shape, rows, table in found:
            rows_of[shape] = rows_of.get(shape, 0) + rows
            if shape & _COUNTS or shape in _WANTED:
                # The planes come first; the texts behind them are not wanted here.
                size = rows * _WANTED[shape] if shape in _WANTED else len(table)
                tables.setdefault(shape, []).append((rows, table[:size] if size < len(table) else table))
    runs = np.frombuffer(b"".join(heads), _RUN_RECORD)
    runs_of = {shape: _Runs.of(runs, shape) for shape in tables}
    moulds: dict[int, list[Counts]] = {}
    for shape in tables:
        if shape & _COUNTS:
            moulds.setdefault(shape & (_CHECKED | _HAS_MS), []).append(_counts(shape, tables[shape], runs_of[shape]))
    conditions, conditions_place, conditions_us = _rare(_CONDITIONS, tables, runs_of)
    _, plates_place, plates_us = _rare(_NAMEPLATE, tables, runs_of)
    return Gathered(
        stretch,
        tuple(_in_order(several) for several in moulds.values()),
        conditions_place,
        conditions_us,
        conditions["temperature_c100"].view("<i2"),
        conditions["frequency_hz"],
        plates_place,
        plates_us,
        _frames(rows_of),
    )


def _parted(content: bytes) -> tuple[bytes, list[tuple[int, int, bytes]]]:
    """The runs of one content as they are written, and its tables (shape, rows, bytes)."""
    number = content[0] | content[1] << 8
    at = 2 + number * _RUN.size
    head = content[2:at]
    rows: dict[int, int] = {}
    for shape, frames, _ in _RUN.iter_unpack(head):
        if not frames:
            raise ValueError("a run without frames")
        rows[shape] = rows.get(shape, 0) + frames
    tables = []
    for shape, frames in rows.items():
        start = at + _LENGTH.size
        length = int.from_bytes(content[at:start], "little")
        if frames > length:
            raise ValueError(f"{frames} frames in {length} bytes")
        at = start + length
        tables.append((shape, frames, content[start:at]))
    if at != len(content):
        raise ValueError(f"{len(content)} bytes; wanted {at}")
    return head, tables


@dataclass(frozen=True, slots=True)
class _Runs:
    """The runs of one shape: the place of each among all, its frames and its offset [us]."""

    place: Places
    frames: npt.NDArray[np.int64]
    offset_us: Micros

    @classmethod
    def of(cls, runs: npt.NDArray[Any], shape: int) -> _Runs:
        """Those of all runs that are of this shape."""
        place = np.flatnonzero(runs["shape"] == shape)
        return cls(place, runs["frames"][place].astype(np.int64), runs["offset_us"][place])

    def places(self) -> Places:
        """The place of each frame."""
        return np.repeat(self.place, self.frames)


def _counts(shape: int, pieces: Tables, runs: _Runs) -> Counts:
    widths = [np.dtype(code).itemsize for code in _tally_dtypes(shape)]
    _, time, forward, reflected, flags = _joined(pieces, widths)
    utc_us = utc_of_runs(time, runs.frames, runs.offset_us) if shape & _HAS_MS else time.view("<i8")
    whole = bool(shape & _WHOLE)
    pair = (forward, reflected) if whole else (forward.view("<f8"), reflected.view("<f8"))
    return Counts(runs.places(), utc_us, *pair, flags, bool(shape & _CHECKED), bool(shape & _HAS_MS))


def _in_order(several: list[Counts]) -> Counts:
    """Tallies that differ only in how they are packed as one, in the order in which they stand."""
    if len(several) == 1:
        return several[0]
    order = np.argsort(np.concatenate([counts.place for counts in several]), kind="stable")
    place, utc_us, forward, reflected, flags = (
        np.concatenate([getattr(counts, name) for counts in several])[order]
        for name in ("place", "utc_us", "forward", "reflected", "flags")
    )
    return Counts(place, utc_us, forward, reflected, flags, several[0].checked, several[0].has_ms)


def _rare(
    shape: int, tables: dict[int, Tables], runs: dict[int, _Runs]
) -> tuple[dict[str, npt.NDArray[Any]], Places, Micros]:
    """Columns by name, places and times of a rare kind; empty ones where there are none of it."""
    dtypes = _rare_dtypes(shape)
    if shape not in tables:
        return {name: np.empty(0, code) for name, code in dtypes}, np.empty(0, np.intp), np.empty(0, np.int64)
    columns = _joined(tables[shape], _widths(shape))
    named = {name: column for (name, _), column in zip(dtypes, columns, strict=False)}
    mine = runs[shape]
    return named, mine.places(), utc_of_runs(named["ms"], mine.frames, mine.offset_us)


def _joined(tables: Tables, widths: Sequence[int]) -> Columns:
    """The columns of tables one after the other; tables of one length are turned at once, as most are."""
    pieces = []
    for rows, group in itertools.groupby(tables, key=operator.itemgetter(0)):
        planes = np.frombuffer(b"".join([table for _, table in group]), np.uint8).reshape(-1, sum(widths), rows)
        pieces.append(planes.transpose(1, 0, 2).reshape(sum(widths), -1))
    return split(np.concatenate(pieces, axis=1), widths, np.cumsum([rows for rows, _ in tables]))


def _widths(shape: int) -> list[int]:
    """Widths of a wanted kind's columns [bytes], lengths of its texts included."""
    return [np.dtype(code).itemsize for _, code in _rare_dtypes(shape)] + [2] * (shape == _NAMEPLATE)


def _frames(rows: dict[int, int]) -> dict[int, int]:
    """Frames by number of kind, all moulds of tallies as -1."""
    found: dict[int, int] = {}
    for shape, number in rows.items():
        kind = -1 if shape & _COUNTS else shape
        if kind not in (-1, _STRANGE) and kind not in KIND_BY_NUMBER:
            raise LookupError(f"no kind {kind}")
        found[kind] = found.get(kind, 0) + number
    return found


_CONDITIONS = next(kind.number for kind in KINDS if kind.frame is Conditions)
_NAMEPLATE = next(kind.number for kind in KINDS if kind.frame is Nameplate)
_WANTED = {shape: sum(_widths(shape)) for shape in (_CONDITIONS, _NAMEPLATE)}
