"""Reading a journal, also while another process writes it: what is sound comes out, what is not is named by its time.

One rule: no count comes out of a block whose CRC, digest or content is wrong; all the others do.
"""

from __future__ import annotations

import hashlib
import itertools
import math
import operator
import sqlite3
import struct
import time
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any, Literal, NamedTuple

from bridgeio.errors import FileError
from bridgeio.frames import Nameplate, Tallies

from .book import DIGEST_START, Mark, Stretch
from .columns import LONGEST_CONTENT, PackError, inflate
from .gather import Gathered, gather
from .pack import Timed, unpack
from .schema import BLOCK_COLUMNS, MARK_COLUMNS, STRETCH_COLUMNS, block_crc, connect_to_read, row_crc

__all__ = ["Account", "BadBlock", "Journal", "KeptBlock"]

#: Blocks fetched and unpacked at a time.
_BATCH = 300
_US = 1_000_000
#: Times of losses that are told one by one.
_TIMES_TOLD = 3


@dataclass(frozen=True, slots=True)
class BadBlock:
    """Blocks that give nothing, the first and how many, about when [us since 1970; None: not known] and why."""

    first: int
    number: int
    utc_us: int | None
    words: str


class KeptBlock(NamedTuple):
    """One sound block: its account (see `BLOCK_COLUMNS`) and its content, unpacked when asked for."""

    id: int
    stretch: int
    utc_first_us: int
    utc_last_us: int
    ms_first: int
    ms_last: int
    frames: int
    tallies: int
    largest_forward: float
    missing: int
    unkept: int
    damaged: int
    content: bytes

    def timed(self) -> list[Timed]:
        """The items of the block in order, with their times. PackError where the content is malformed."""
        return unpack([self.content])


@dataclass(frozen=True, slots=True)
class Account:
    """Frames of a journal: sent = kept + missing + unkept; `losses`: seconds [us since 1970] in which any were lost.

    damaged: pieces of the line that could not be used; their frames are among the missing.
    """

    kept: int
    missing: int
    unkept: int
    damaged: int
    losses: tuple[int, ...]
    bad: tuple[BadBlock, ...]

    @property
    def sent(self) -> int:
        """Frames sent, at least."""
        return self.kept + self.missing + self.unkept

    @property
    def words(self) -> str:
        """Whether it is all there, as a report opens."""
        parts = []
        lost = self.missing + self.unkept
        if lost:
            parts.append(f"{lost} frame{'s' * (lost > 1)}, {_times(self.losses)}")
        blocks = sum(bad.number for bad in self.bad)
        if blocks:
            when = _times([bad.utc_us for bad in self.bad if bad.utc_us is not None])
            parts.append(f"{blocks} block{'s' * (blocks > 1)} that cannot be read, {when}")
        return "complete but for " + "; ".join(parts) if parts else "complete"


class Journal:
    """A journal open for reading; a context manager. Not for several threads at once."""

    def __init__(self, path: str | Path) -> None:
        """Open it. FileError where it is none, a damaged one or one of a newer schema."""
        self.path = Path(path).resolve()
        self._link = connect_to_read(self.path)
        #: What the last walk through the blocks found wrong.
        self.bad: list[BadBlock] = []
        #: What was found wrong in stretches and marks, in words.
        self.faults: list[str] = []
        #: Of the last sound block that the last walk came to: the digest over all before it. None before a walk.
        self.digest: bytes | None = None
        self._sum = _Sum()

    def __enter__(self) -> Journal:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """Close it."""
        self._link.close()

    @property
    def stretches(self) -> dict[int, Stretch]:
        """Stretches of recording by number; a damaged one is left out and told in `faults`."""
        found = {}
        for row in self._sound_rows("stretch", STRETCH_COLUMNS):
            number, started_us, source, simulated, _, packed, bridge_file = row
            plate = self._nameplate(number, packed)
            found[number] = Stretch(source, started_us, bool(simulated), plate, bridge_file)
        return found

    @property
    def marks(self) -> list[Mark]:
        """Marks in the order they were made; a damaged one is left out and told in `faults`."""
        return [mark for _, mark in self.placed_marks]

    @property
    def placed_marks(self) -> list[tuple[int, Mark]]:
        """The same, each with the number of the stretch in which it was made."""
        rows = self._sound_rows("mark", MARK_COLUMNS)
        return [(stretch, Mark(kind, utc_us, text, value)) for _, stretch, utc_us, kind, value, text in rows]

    def blocks(self) -> Iterator[KeptBlock]:
        """Sound blocks in order; what is not sound is gathered in `bad`."""
        for batch in self._batches():
            yield from batch

    def items(self) -> Iterator[Timed]:
        """All items in order, with times; tallies with nothing between them come together, minutes at a time."""
        for batch in self._batches():
            try:
                yield from unpack([block.content for block in batch])
            except PackError:
                yield from self._one_by_one(batch)

    def gathered(self, from_us: int | None = None, to_us: int | None = None) -> Iterator[Gathered]:
        """The content as columns, minutes at a time and one stretch in each; every block is checked.

        from_us, to_us: blocks that lie wholly before or after are left out [us since 1970].
        """
        low, high = -math.inf if from_us is None else from_us, math.inf if to_us is None else to_us
        for batch in self._batches():
            wanted = (block for block in batch if block.utc_last_us >= low and block.utc_first_us <= high)
            for stretch, group in itertools.groupby(wanted, key=operator.attrgetter("stretch")):
                blocks = list(group)
                try:
                    yield gather(stretch, [block.content for block in blocks])
                except PackError:
                    yield from self._gathered_singly(blocks)

    def tallies(self) -> Iterator[Timed]:
        """As `items`, the tallies only."""
        return (one for one in self.items() if isinstance(one.item, Tallies))

    def account(self) -> Account:
        """What is there and what is missing, all blocks checked."""
        for _ in self._batches():
            pass
        return self.walked

    @property
    def walked(self) -> Account:
        """The same of the last walk, by whatever it was made; whole once that has come to its end."""
        so_far = self._sum
        counts = so_far.kept, so_far.missing, so_far.unkept, so_far.damaged
        return Account(*counts, tuple(so_far.losses), tuple(self.bad))

    def _one_by_one(self, batch: Sequence[KeptBlock]) -> Iterator[Timed]:
        for block in batch:
            try:
                yield from block.timed()
            except PackError as error:
                self._name(block.id, block.utc_first_us, str(error))

    def _gathered_singly(self, blocks: Sequence[KeptBlock]) -> Iterator[Gathered]:
        for block in blocks:
            try:
                yield gather(block.stretch, [block.content])
            except PackError as error:
                self._name(block.id, block.utc_first_us, str(error))

    def _batches(self) -> Iterator[list[KeptBlock]]:
        """All sound blocks, added up on the way; what is not sound is gathered in `bad`."""
        self.bad, self._sum = [], _Sum()
        walk = _Walk(self._name)
        while rows := self._fetch(before := walk.last):
            # One short read transaction a batch: a long one would keep the writer's log from being folded in.
            for batch in _bounded(block for row in rows if (block := walk.step(row)) is not None):
                self._sum.add(batch)
                self.digest = walk.digest or self.digest
                yield batch
            if walk.last == before:
                # A damaged index may lead in a circle.
                self._name(before + 1, None, "and all after it lie in a damaged part of the file")
                return

    def _fetch(self, after: int) -> list[Any]:
        """The next rows, those that cannot be read as `_Unreadable`; none at the end."""
        try:
            return self._link.execute(_SELECT_BLOCKS, (after, _BATCH)).fetchall()
        except sqlite3.Error as error:
            self._demand_patience(error)
        try:
            last = int(self._link.execute("SELECT max(id) FROM block").fetchone()[0])
        except sqlite3.Error as error:
            self._name(after + 1, None, f"and all after it lie in a damaged part of the file: {error}")
            return []
        found = (self._fetch_one(number) for number in range(after + 1, min(after + _BATCH, last) + 1))
        return [row for row in found if row is not None]

    def _fetch_one(self, number: int) -> Any:
        try:
            return self._link.execute(_SELECT_BLOCK, (number,)).fetchone()
        except sqlite3.Error as error:
            return _Unreadable(number, f"lies in a damaged part of the file: {error}")

    def _demand_patience(self, error: sqlite3.Error) -> None:
        """FileError where the file is only busy: that is no damage."""
        if getattr(error, "sqlite_errorname", "") in ("SQLITE_BUSY", "SQLITE_LOCKED"):
            raise FileError(f"{self.path}: is busy: {error}; try again") from error

    def _sound_rows(self, table: Literal["stretch", "mark"], columns: Sequence[str]) -> list[tuple[Any, ...]]:
        try:
            rows = self._link.execute(f"SELECT {', '.join(columns)} FROM {table} ORDER BY id").fetchall()
        except sqlite3.Error as error:
            raise FileError(f"{self.path}: its {table} table is damaged: {error}") from error
        for row in rows:
            if row_crc(row[:-1]) != row[-1]:
                self._fault(f"{table} {row[0]} does not agree with its CRC-32 and is left out")
        return [row[:-1] for row in rows if row_crc(row[:-1]) == row[-1]]

    def _nameplate(self, stretch: int, packed: bytes) -> Nameplate | None:
        items = []
        try:
            items = [one.item for one in unpack([packed])] if packed else []
        except PackError as error:
            self._fault(f"the nameplate of stretch {stretch} cannot be read: {error}")
        return next((item for item in items if isinstance(item, Nameplate)), None)

    def _fault(self, words: str) -> None:
        if words not in self.faults:
            self.faults.append(words)

    def _name(self, block: int, utc_us: int | None, words: str, number: int = 1) -> None:
        before = self.bad[-1] if self.bad else None
        if before and before.first + before.number == block and (before.utc_us, before.words) == (utc_us, words):
            self.bad[-1] = replace(before, number=before.number + number)
        else:
            self.bad.append(BadBlock(block, number, utc_us, words))


@dataclass(slots=True)
class _Sum:
    """What sound blocks add up to."""

    kept: int = 0
    missing: int = 0
    unkept: int = 0
    damaged: int = 0
    losses: list[int] = field(default_factory=list)

    def add(self, blocks: Iterable[KeptBlock]) -> None:
        """Take these blocks in."""
        for block in blocks:
            self.kept += block.frames
            if block.missing or block.unkept or block.damaged:
                self.missing, self.unkept = self.missing + block.missing, self.unkept + block.unkept
                self.damaged += block.damaged
                if block.missing or block.unkept:
                    self.losses.append(block.utc_first_us)


@dataclass(frozen=True, slots=True)
class _Unreadable:
    """Stands for a row that SQLite cannot hand over."""

    number: int
    words: str


class _Walk:
    """Goes from block to block and checks each against its CRC and the chain of digests."""

    def __init__(self, name: Callable[..., None]) -> None:
        self.last = 0
        self._name = name
        self._utc_us: int | None = None
        # None where the block before is bad or absent: then the chain begins anew.
        self.digest: bytes | None = DIGEST_START

    def step(self, row: tuple[Any, ...] | _Unreadable) -> KeptBlock | None:
        """The block in a row, or None where it is bad, which is named then."""
        number = row.number if isinstance(row, _Unreadable) else row[0]
        if number <= self.last:
            return None
        if number > self.last + 1:
            absent = number - self.last - 1
            self._name(self.last + 1, self._utc_us, "is not in the journal any more", absent)
            self.digest = None
        self.last = number
        try:
            if isinstance(row, _Unreadable):
                raise PackError(row.words)
            return self._sound(row)
        except PackError as error:
            self._name(number, self._about_us(row), str(error))
            self.digest = None
            return None

    def _sound(self, row: tuple[Any, ...]) -> KeptBlock:
        *head, length, crc, digest, packed = row
        try:
            intact = block_crc((*head, length, digest, packed)) == crc
        except (struct.error, TypeError) as error:
            raise PackError(f"holds values that no writer wrote: {error}") from error
        if not intact:
            raise PackError("does not agree with its CRC-32")
        content = inflate(packed, length)
        if self.digest is not None and hashlib.sha256(self.digest + content).digest() != digest:
            raise PackError("does not follow the block before it: its digest is another")
        self.digest, self._utc_us = digest, head[3]
        return KeptBlock._make((*head, content))

    def _about_us(self, row: tuple[Any, ...] | _Unreadable) -> int | None:
        """The time of a bad block by the one before it, else by its own word [us since 1970]."""
        if self._utc_us is not None or isinstance(row, _Unreadable):
            return self._utc_us
        return row[2] if isinstance(row[2], int) else None


def _bounded(blocks: Iterable[KeptBlock]) -> Iterator[list[KeptBlock]]:
    """Blocks in lists, none of which holds more than twice the longest content."""
    batch, size = [], 0
    for block in blocks:
        batch.append(block)
        size += len(block.content)
        if size > LONGEST_CONTENT:
            yield batch
            batch, size = [], 0
    yield batch


def _times(times_us: Sequence[int]) -> str:
    """Times of day in UTC, the first few of them, each second once."""
    seconds = sorted({utc_us // _US for utc_us in times_us})
    if not seconds:
        return "time not known"
    told = ", ".join(time.strftime("%H:%M:%S", time.gmtime(s)) for s in seconds[:_TIMES_TOLD])
    more = len(seconds) - _TIMES_TOLD
    return f"{told} and {more} more times" if more > 0 else told


_SELECT = f"SELECT {', '.join(BLOCK_COLUMNS)} FROM block"
_SELECT_BLOCKS = f"{_SELECT} WHERE id > ? ORDER BY id LIMIT ?"
_SELECT_BLOCK = f"{_SELECT} WHERE id = ?"
