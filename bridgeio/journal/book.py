"""The open journal: rows in, one transaction at a time, by whoever holds the lock.

One rule: `write` is whole or not at all, and the chain of digests moves on only with what has been committed.
"""

from __future__ import annotations

import hashlib
import itertools
import os
import sqlite3
import time
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from bridgeio.errors import FileError
from bridgeio.frames import Crest, Nameplate, Tallies

from .columns import deflate
from .lock import JournalLock
from .pack import Timed, contents_of, frames_in
from .schema import BLOCK_COLUMNS, MARK_COLUMNS, STRETCH_COLUMNS, block_crc, connect_to_write, row_crc

__all__ = ["DIGEST_START", "Block", "Book", "Mark", "Row", "Stretch"]

#: What the first block's digest is chained to.
DIGEST_START = bytes(32)
#: What SQLite calls it when the open file itself is out of reach, as after unmounting by force.
_UNREADABLE = ("SQLITE_IOERR_READ", "SQLITE_IOERR_SHORT_READ", "SQLITE_IOERR_CORRUPTFS", "SQLITE_CORRUPT")


@dataclass(frozen=True, slots=True)
class Stretch:
    """What is recorded from here on: `bridge_file` is the whole text in force, "" for none."""

    source: str
    started_us: int
    simulated: bool = False
    nameplate: Nameplate | None = None
    bridge_file: str = ""


@dataclass(frozen=True, slots=True)
class Block:
    """A second of frames and the account of the line in it; `utc_us` dates a block without frames [us]."""

    timed: Sequence[Timed]
    utc_us: int
    missing: int = 0
    unkept: int = 0
    damaged: int = 0


@dataclass(frozen=True, slots=True)
class Mark:
    """Something that happened: kind is one word; value [Hz or s, by the kind], 0 where there is none."""

    kind: str
    utc_us: int
    text: str = ""
    value: float = 0.0


Row = Stretch | Block | Mark


class Book:
    """A journal open for writing. Not for several threads at once."""

    def __init__(self, path: str | Path) -> None:
        """Open or make it. JournalHeld where another writes it, FileError where it may not be written."""
        self.path = Path(path).resolve()
        self._lock = JournalLock(self.path)
        try:
            self._link = connect_to_write(self.path)
            self._ids = {table: self._last_id(table) for table in ("stretch", "block", "mark")}
            self._digest = self._last_digest()
        except (FileError, sqlite3.Error) as error:
            self._lock.release()
            if isinstance(error, FileError):
                raise
            raise FileError(f"{self.path}: is a damaged journal: {error}; give another file") from error
        self._whereabouts = self._seen()
        #: The stretch that the blocks committed last belong to, by this writer.
        self.stretch: Stretch | None = None

    @property
    def last_block(self) -> int:
        """Number of the last block committed; 0 before the first."""
        return self._ids["block"]

    def write(self, rows: Sequence[Row]) -> int:
        """Commit rows, in order, in one transaction; returns the number of the last block.

        sqlite3.Error where the disk does not take them: then none is in the journal.
        """
        ids, digest = dict(self._ids), self._digest
        self._link.execute("BEGIN IMMEDIATE")
        try:
            for row in rows:
                if isinstance(row, Block):
                    digest = self._write_block(row, ids, digest)
                elif isinstance(row, Stretch):
                    self._write_stretch(row, ids)
                else:
                    self._write_mark(row, ids)
            self._link.execute("COMMIT")
        except BaseException:
            if self._link.in_transaction:
                self._link.execute("ROLLBACK")
            raise
        if self._whereabouts[1] is None:
            self._whereabouts = (self._whereabouts[0], self._seen()[1])
        self._ids, self._digest = ids, digest
        self.stretch = next((row for row in reversed(rows) if isinstance(row, Stretch)), self.stretch)
        return ids["block"]

    def in_place(self) -> bool:
        """Whether the path, and that of the write-ahead log, still lead to the files that are open."""
        now = self._seen()
        return now[0] == self._whereabouts[0] and self._whereabouts[1] in (None, now[1])

    def rescued(self) -> tuple[Book, bool]:
        """A new book beside this one's path with all that was committed, True; or an empty one, False.

        FileError or sqlite3.Error where not even an empty one can be made. This book is closed once there is another.
        """
        path = self._rescue_path()
        try:
            whole = self._copied(path)
            book = Book(path)
        except (FileError, sqlite3.Error):
            path.unlink(missing_ok=True)
            raise
        self.close()
        return book, whole

    def close(self) -> None:
        """Fold the write-ahead log into the file, close it and give the lock back."""
        try:
            # A renamed file gets what only the log held: under its new name it would not be looked for.
            self._link.execute("PRAGMA wal_checkpoint(TRUNCATE)")
        except sqlite3.Error:
            # The log stays beside the file and is folded in by whoever opens it next.
            pass
        finally:
            self._link.close()
            self._lock.release()

    def _write_block(self, block: Block, ids: dict[str, int], before: bytes) -> bytes:
        content = contents_of(block.timed)
        digest = hashlib.sha256(before + content).digest()
        packed = deflate(content)
        ids["block"] += 1
        row = (ids["block"], ids["stretch"], *_summary(block), len(content), digest, packed)
        self._link.execute(_INSERT_BLOCK, (*row[:-2], block_crc(row), digest, packed))
        return digest

    def _write_stretch(self, stretch: Stretch, ids: dict[str, int]) -> None:
        ids["stretch"] += 1
        plate = stretch.nameplate
        packed = contents_of([Timed(plate, np.array([stretch.started_us]))]) if plate else b""
        row = (
            ids["stretch"],
            stretch.started_us,
            stretch.source,
            int(stretch.simulated),
            plate.device_id if plate else 0,
            packed,
            stretch.bridge_file,
        )
        self._link.execute(_INSERT_STRETCH, (*row, row_crc(row)))

    def _write_mark(self, mark: Mark, ids: dict[str, int]) -> None:
        ids["mark"] += 1
        row = (ids["mark"], ids["stretch"], mark.utc_us, mark.kind, float(mark.value), mark.text)
        self._link.execute(_INSERT_MARK, (*row, row_crc(row)))

    def _last_id(self, table: str) -> int:
        return int(self._link.execute(f"SELECT coalesce(max(id), 0) FROM {table}").fetchone()[0])

    def _last_digest(self) -> bytes:
        found = self._link.execute("SELECT digest FROM block WHERE id = ?", (self._ids["block"],)).fetchone()
        return found[0] if found and isinstance(found[0], bytes) else DIGEST_START

    def _seen(self) -> tuple[tuple[int, int] | None, tuple[int, int] | None]:
        """Device and inode of the journal and of its write-ahead log; None where there is none."""
        return _identity(self.path), _identity(self.path.with_name(self.path.name + "-wal"))

    def _rescue_path(self) -> Path:
        """A free name beside the journal, in the home directory where that place is gone."""
        place = self.path.parent if os.access(self.path.parent, os.W_OK) else Path.home()
        stamp = time.strftime("%Y%m%d-%H%M%S", time.gmtime())
        for number in itertools.count(1):
            more = f"-{number}" if number > 1 else ""
            path = place / f"{self.path.stem}-rescue-{stamp}{more}{self.path.suffix}"
            if not path.exists():
                break
        return path

    def _copied(self, path: Path) -> bool:
        """Copy all that is committed, out of the open file, whatever its name is now; False where it cannot be read.

        sqlite3.Error where the copy cannot be written: the open file stays the only whole one and is not let go.
        """
        try:
            os.close(os.open(path, os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC, 0o600))
        except OSError as error:
            raise FileError(f"{path}: cannot be made: {error.strerror}") from error
        copy = sqlite3.connect(path)
        try:
            self._link.backup(copy)
        except sqlite3.Error as error:
            if getattr(error, "sqlite_errorname", "") not in _UNREADABLE:
                raise
            copy.close()
            path.unlink(missing_ok=True)
            return False
        finally:
            copy.close()
        return True


def _identity(path: Path) -> tuple[int, int] | None:
    try:
        found = os.stat(path, follow_symlinks=False)
    except OSError:
        return None
    return found.st_dev, found.st_ino


def _summary(block: Block) -> tuple[int | float, ...]:
    """The columns from utc_first_us to damaged."""
    timed = block.timed
    frames = tallies = 0
    largest = -1.0
    for one in timed:
        item = one.item
        frames += frames_in(item)
        if isinstance(item, Tallies):
            tallies += len(item)
            largest = max(largest, float(item.forward.max()))
        elif isinstance(item, Crest):
            largest = max(largest, float(item.forward_crest))
    first_us = int(timed[0].utc_us[0]) if timed else block.utc_us
    last_us = int(timed[-1].utc_us[-1]) if timed else block.utc_us
    ms = (_ms(timed[0], 0), _ms(timed[-1], -1)) if timed else (-1, -1)
    return first_us, last_us, *ms, frames, tallies, largest, block.missing, block.unkept, block.damaged


def _ms(one: Timed, at: int) -> int:
    if not isinstance(one.item, Tallies):
        return one.item.ms
    return int(one.item.ms[at]) if one.item.has_ms else -1


def _insert(table: str, columns: Sequence[str]) -> str:
    return f"INSERT INTO {table} ({', '.join(columns)}) VALUES ({', '.join('?' * len(columns))})"


_INSERT_STRETCH = _insert("stretch", STRETCH_COLUMNS)
_INSERT_BLOCK = _insert("block", BLOCK_COLUMNS)
_INSERT_MARK = _insert("mark", MARK_COLUMNS)
