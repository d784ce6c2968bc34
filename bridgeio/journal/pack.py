"""A second of frames as bytes, and back: each kind a table of columns, each column differences in planes of bytes.

One rule: what comes out is what went in, frame by frame and in order; only the UTC of frames with a device time is
told by that time and one offset a run. These bytes are what the digests are taken over: packing (zlib) lies outside.

Content: number of runs u16; a run is shape u8, frames u32, offset i64 [us] (UTC less device time; 0 where the frames
have none). Then, in the order in which shapes first appear, a table each: length u32 [bytes], columns, texts.
"""

from __future__ import annotations

import itertools
import struct
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any, TypeAlias

import numpy as np
import numpy.typing as npt

from bridgeio.frames import KIND_BY_NUMBER, KINDS, Item, Kind, Tallies, Unknown, kind_of

from .columns import Columns, PackError, coded, split

__all__ = ["Micros", "Timed", "contents_of", "frames_in", "unpack", "utc_of_runs"]

#: Runs of one shape join where their offsets differ by no more than this [us].
_SAME_OFFSET_US = 5_000
_RUN = struct.Struct("<BIq")
_LENGTH = struct.Struct("<I")
_US_PER_MS = 1000

# Shapes of tallies are bits beside 0x80; those of rare frames are the number of their kind; 0 is an unknown kind.
_COUNTS, _WIDE, _CHECKED, _HAS_MS, _WHOLE = 0x80, 1, 2, 4, 8
_STRANGE = 0

Micros: TypeAlias = npt.NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Timed:
    """An item and the UTC of its frames, int64[n] [us since 1970]; n is 1 for all but `Tallies`."""

    item: Item
    utc_us: Micros


def frames_in(item: Item) -> int:
    """How many frames an item is."""
    return len(item) if isinstance(item, Tallies) else 1


def contents_of(timed: Sequence[Timed]) -> bytes:
    """The items of one block as bytes. No item is empty, and no device time falls within one."""
    runs: list[tuple[int, int, int]] = []
    tables: dict[int, list[Item]] = {}
    columns: dict[int, list[Columns]] = {}
    for one in timed:
        shape, frames, offset_us = _shape(one.item), frames_in(one.item), _offset_us(one)
        if runs and runs[-1][0] == shape and abs(runs[-1][2] - offset_us) <= _SAME_OFFSET_US:
            runs[-1] = (shape, runs[-1][1] + frames, runs[-1][2])
        else:
            runs.append((shape, frames, offset_us))
        if isinstance(one.item, Tallies):
            columns.setdefault(shape, []).append(_tally_columns(one.item, shape, one.utc_us))
        tables.setdefault(shape, []).append(one.item)
    parts = [struct.pack("<H", len(runs)), *(_RUN.pack(*run) for run in runs)]
    for shape, items in tables.items():
        table = _counts_table(columns[shape]) if shape & _COUNTS else _rare_table(shape, items)
        parts += [_LENGTH.pack(len(table)), table]
    return b"".join(parts)


def unpack(contents: Sequence[bytes]) -> list[Timed]:
    """The items of blocks that follow each other; tallies of one shape with nothing between them are one `Tallies`.

    PackError where something is no content.
    """
    try:
        return list(_unpack(contents))
    except (struct.error, ValueError, LookupError, OverflowError) as error:
        raise PackError(f"a block's content is malformed: {error}") from error


# Tables of tallies.


def _shape(item: Item) -> int:
    if not isinstance(item, Tallies):
        kind = kind_of(item)
        return kind.number if kind else _STRANGE
    bits = _COUNTS | _WIDE * item.wide | _CHECKED * item.checked | _HAS_MS * item.has_ms
    return bits | _WHOLE * (_whole(item.forward, item.wide) and _whole(item.reflected, item.wide))


def _whole(counts: npt.NDArray[np.float64], wide: bool) -> bool:
    """Whether counts fit the wire's own width and come back the same, sign of zero included."""
    limit = 0xFFFF_FFFF if wide else 0xFFFF
    if not (counts.min() >= 0.0 and counts.max() <= limit):
        return False
    return bool((counts == np.floor(counts)).all()) and not np.signbit(counts).any()


def _tally_dtypes(shape: int) -> tuple[str, ...]:
    count = ("<u4" if shape & _WIDE else "<u2") if shape & _WHOLE else "<u8"
    return ("u1", "<u4" if shape & _HAS_MS else "<u8", count, count, "u1")


def _tally_columns(item: Tallies, shape: int, utc_us: Micros) -> Columns:
    count = _tally_dtypes(shape)[2]
    counts = [c.astype(count) if shape & _WHOLE else c.view(count) for c in (item.forward, item.reflected)]
    return [item.seq, item.ms if shape & _HAS_MS else utc_us.view("<u8"), *counts, item.flags]


def _counts_table(pieces: list[Columns]) -> bytes:
    columns = pieces[0] if len(pieces) == 1 else [np.concatenate(parts) for parts in zip(*pieces, strict=True)]
    return b"".join(coded(column) for column in columns)


# Tables of rare frames, known and unknown: columns, then lengths of texts u16 as one more column, then the texts.


def _rare_dtypes(shape: int) -> list[tuple[str, str]]:
    """Names and types of a shape's columns; LookupError for a shape that is none."""
    if shape == _STRANGE:
        return [("kind", "u1"), ("text", "u1")]
    kind = KIND_BY_NUMBER[shape]
    return [(name, kind.record.fields[name][0].str) for name in _numbers(kind)]  # type: ignore[index]


def _numbers(kind: Kind) -> list[str]:
    return [name for name, code in kind.fields[1:] if name != "length" and not code.endswith("s")]


def _text_name(shape: int) -> str | None:
    return "payload" if shape == _STRANGE else _TEXTS[shape]


def _rare_table(shape: int, items: Sequence[Item]) -> bytes:
    parts = []
    for name, code in _rare_dtypes(shape):
        column = np.array([getattr(item, name) for item in items], dtype=code)
        parts.append(coded(column.view(f"<u{column.itemsize}")))
    text_name = _text_name(shape)
    if text_name is not None:
        texts = [getattr(item, text_name) for item in items]
        raw = [text if isinstance(text, bytes) else text.encode() for text in texts]
        parts += [coded(np.array([len(text) for text in raw], dtype="<u2")), *raw]
    return b"".join(parts)


def _rare_items(shape: int, table: bytes, rows: int) -> Iterator[Item]:
    dtypes = _rare_dtypes(shape)
    text_name = _text_name(shape)
    widths = [np.dtype(code).itemsize for _, code in dtypes] + [2] * (text_name is not None)
    size = sum(widths) * rows
    columns = split(np.frombuffer(table[:size], np.uint8).reshape(-1, rows), widths, np.array([rows]))
    values = [c.view(code).tolist() for c, (_, code) in zip(columns, dtypes, strict=False)]
    names = [name for name, _ in dtypes]
    if text_name is not None:
        names.append(text_name)
        values.append(_texts(table[size:], columns[-1].tolist(), shape))
    elif len(table) != size:
        raise ValueError(f"{len(table) - size} bytes too many")
    for row in zip(*values, strict=True):
        yield _rare_item(shape, dict(zip(names, row, strict=True)))


def _texts(raw: bytes, lengths: list[int], shape: int) -> list[bytes] | list[str]:
    ends = [0, *itertools.accumulate(lengths)]
    if ends[-1] != len(raw):
        raise ValueError(f"{len(raw)} bytes of text; wanted {ends[-1]}")
    texts = [raw[at:end] for at, end in itertools.pairwise(ends)]
    return texts if shape == _STRANGE else [text.decode() for text in texts]


def _rare_item(shape: int, values: dict[str, Any]) -> Item:
    if shape == _STRANGE:
        return Unknown(values["kind"], values["payload"], bool(values["text"]))
    kind = KIND_BY_NUMBER[shape]
    return kind.frame(**values, wide=True) if kind.wide else kind.frame(**values)


# From contents to items.


@dataclass(slots=True)
class _Run:
    shape: int
    frames: int
    offset_us: int


def _unpack(contents: Sequence[bytes]) -> Iterator[Timed]:
    runs: list[_Run] = []
    counts: dict[int, list[npt.NDArray[np.uint8]]] = {}
    rare: dict[int, list[Iterator[Item]]] = {}
    for content in contents:
        fresh, tables = _parse(content)
        runs += fresh
        for shape, rows, table in tables:
            if shape & _COUNTS:
                counts.setdefault(shape, []).append(np.frombuffer(table, np.uint8).reshape(-1, rows))
            else:
                rare.setdefault(shape, []).append(_rare_items(shape, table, rows))
    queues = {shape: itertools.chain.from_iterable(tables) for shape, tables in rare.items()}
    whole = {shape: _Whole(shape, pieces, runs) for shape, pieces in counts.items()}
    for shape, group in itertools.groupby(runs, key=lambda run: run.shape):
        if shape & _COUNTS:
            yield whole[shape].take(sum(run.frames for run in group))
            continue
        for run in group:
            for item in itertools.islice(queues[shape], run.frames):
                yield Timed(item, np.array([run.offset_us + int(item.ms) * _US_PER_MS]))


def _parse(content: bytes) -> tuple[list[_Run], list[tuple[int, int, bytes]]]:
    """Runs and tables (shape, rows, bytes) of one content."""
    number = content[0] | content[1] << 8
    at = 2 + number * _RUN.size
    runs = [_Run(*values) for values in _RUN.iter_unpack(content[2:at])]
    rows: dict[int, int] = {}
    for run in runs:
        if not run.frames:
            raise ValueError("a run without frames")
        rows[run.shape] = rows.get(run.shape, 0) + run.frames
    tables = []
    for shape, number in rows.items():
        (length,) = _LENGTH.unpack_from(content, at)
        at += _LENGTH.size
        if number > length:
            raise ValueError(f"{number} frames in {length} bytes")
        tables.append((shape, number, content[at : at + length]))
        at += length
    if at != len(content):
        raise ValueError(f"{len(content)} bytes; wanted {at}")
    return runs, tables


class _Whole:
    """All tallies of one shape in the contents, handed out run after run."""

    def __init__(self, shape: int, pieces: list[npt.NDArray[np.uint8]], runs: Sequence[_Run]) -> None:
        ends = np.cumsum([piece.shape[1] for piece in pieces])
        widths = [np.dtype(code).itemsize for code in _tally_dtypes(shape)]
        seq, time, forward, reflected, flags = split(np.concatenate(pieces, axis=1), widths, ends)
        if shape & _HAS_MS:
            self._utc_us, ms = _utc_us(time, [run for run in runs if run.shape == shape]), time
        else:
            self._utc_us, ms = time.view("<i8"), np.zeros(len(time), np.uint32)
        counts = [c.astype(np.float64) if shape & _WHOLE else c.view("<f8") for c in (forward, reflected)]
        self._columns: Columns = [seq, ms, *counts, flags]
        self._shape = shape
        self._at = 0

    def take(self, frames: int) -> Timed:
        """The next tallies."""
        part = slice(self._at, self._at + frames)
        self._at += frames
        seq, ms, forward, reflected, flags = (column[part] for column in self._columns)
        marks = (bool(self._shape & bit) for bit in (_CHECKED, _HAS_MS, _WIDE))
        return Timed(Tallies(seq, ms, forward, reflected, flags, *marks), self._utc_us[part])


def _offset_us(one: Timed) -> int:
    """UTC less device time [us]; 0 where the frames have no device time."""
    item = one.item
    if not isinstance(item, Tallies):
        return int(one.utc_us[0]) - item.ms * _US_PER_MS
    return int(one.utc_us[0]) - int(item.ms[0]) * _US_PER_MS if item.has_ms else 0


def _utc_us(ms: npt.NDArray[np.uint32], runs: Sequence[_Run]) -> Micros:
    """UTC [us] by the device times [ms] of tallies in runs."""
    frames, offset_us = np.array([run.frames for run in runs]), np.array([run.offset_us for run in runs], np.int64)
    return utc_of_runs(ms, frames, offset_us)


def utc_of_runs(ms: npt.NDArray[np.uint32], frames: npt.NDArray[Any], offset_us: Micros) -> Micros:
    """UTC [us, n] by device times [ms, n] and runs' frames and offsets [us]; within a run they count from its first,
    across a wrap too."""
    first = np.cumsum(frames) - frames
    start_ms = ms[first]
    start_us = start_ms.astype(np.int64) * _US_PER_MS + offset_us
    since_ms = (ms - np.repeat(start_ms, frames)).view(np.int32)
    return np.asarray(np.repeat(start_us, frames) + since_ms.astype(np.int64) * _US_PER_MS)


#: Which field of a rare kind is a text.
_TEXTS = {
    kind.number: next((n for n in ("name", "text") if n in kind.frame.__annotations__), None)
    for kind in KINDS
    if not kind.counted
}
