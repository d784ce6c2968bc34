"""The journal's tables, how a file is known for a journal, and where none may lie.

One rule: a file is never changed unless it is a journal of a schema this program knows.
"""

from __future__ import annotations

import os
import sqlite3
import struct
import zlib
from pathlib import Path
from typing import Any

from bridgeio.errors import FileError

__all__ = [
    "APPLICATION_ID",
    "BLOCK_COLUMNS",
    "MARK_COLUMNS",
    "SCHEMA",
    "STRETCH_COLUMNS",
    "block_crc",
    "connect_to_read",
    "connect_to_write",
    "network_file_system",
    "row_crc",
]

#: "BWJl" in the file's header: a Bridgewright journal.
APPLICATION_ID = 0x42574A6C
SCHEMA = 1

#: One row a stretch of recording: one source, one start of one board, one bridge file. `nameplate` is packed as a
#: block's content is; empty where none has come. `bridge_file` is the whole text in force; empty where none is.
STRETCH_COLUMNS = ("id", "started_us", "source", "simulated", "device_id", "nameplate", "bridge_file", "crc")
#: One row a second. Times [us since 1970] and device times [ms]; -1 where there are no counts or device times. Frames
#: by account: kept = frames, missing by seq and ms, unkept because the disk was behind; damaged pieces of the line.
BLOCK_COLUMNS = (
    "id", "stretch", "utc_first_us", "utc_last_us", "ms_first", "ms_last", "frames", "tallies", "largest_forward",
    "missing", "unkept", "damaged", "unpacked", "crc", "digest", "packed",
)  # fmt: skip
#: What happened: `value` in the unit of its kind (frequency [Hz], gap, stall and clock [s]), 0 where there is none.
MARK_COLUMNS = ("id", "stretch", "utc_us", "kind", "value", "text", "crc")

_TABLES = f"""
CREATE TABLE stretch ({", ".join(STRETCH_COLUMNS).replace("id,", "id INTEGER PRIMARY KEY,", 1)});
CREATE TABLE block ({", ".join(BLOCK_COLUMNS).replace("id,", "id INTEGER PRIMARY KEY,", 1)});
CREATE TABLE mark ({", ".join(MARK_COLUMNS).replace("id,", "id INTEGER PRIMARY KEY,", 1)});
PRAGMA application_id = {APPLICATION_ID};
PRAGMA user_version = {SCHEMA};
"""
_BLOCK_HEAD = struct.Struct("<8qd4q")
#: File systems on which SQLite's shared memory, which WAL needs, does not hold between machines.
_NETWORK = ("nfs", "nfs4", "cifs", "smb3", "smbfs", "ncpfs", "afs", "coda", "9p", "ceph", "lustre", "glusterfs", "gfs2")
_NETWORK_FUSE = ("fuse.sshfs", "fuse.glusterfs", "fuse.rclone", "fuse.davfs2", "fuse.davfs", "fuse.s3fs", "fuse.ceph")


def block_crc(row: tuple[Any, ...]) -> int:
    """CRC-32 over a row of `BLOCK_COLUMNS` less the crc itself. struct.error or TypeError for a row of other types."""
    *head, digest, packed = row
    return zlib.crc32(packed, zlib.crc32(digest, zlib.crc32(_BLOCK_HEAD.pack(*head))))


def row_crc(row: tuple[Any, ...]) -> int:
    """CRC-32 over any other row less its crc, each value with its type."""
    return zlib.crc32(repr(row).encode("utf-8", "surrogatepass"))


def connect_to_write(path: Path) -> sqlite3.Connection:
    """A journal opened for writing, made where there is none. FileError with words where it may not be."""
    fault = network_file_system(path, _mounts())
    if fault:
        raise FileError(f"{path}: lies on a network file system ({fault}); wanted a local disk, give another path")
    try:
        os.close(os.open(path, os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC, 0o600))
    except FileExistsError:
        _demand_one_name(path)
    except OSError as error:
        raise FileError(f"{path}: no journal can be made: {error.strerror}") from error
    return _connected(path, path.as_uri() + "?mode=rw", write=True)


def connect_to_read(path: Path) -> sqlite3.Connection:
    """A journal opened for reading only. FileError with words where it is none."""
    if not path.is_file():
        raise FileError(f"{path}: no such file; wanted a journal")
    return _connected(path, path.as_uri() + "?mode=ro", write=False)


def network_file_system(path: Path, mounts: str) -> str | None:
    """The type of file system a path lies on if it is one over a network, by a text as in /proc/self/mountinfo."""
    where, kind = "", None
    for line in mounts.splitlines():
        left, _, right = line.partition(" - ")
        fields = left.split(" ")
        if len(fields) < 5 or not right:
            continue
        mount = fields[4].encode("ascii", "replace").decode("unicode_escape")
        if path.is_relative_to(mount) and len(mount) >= len(where):
            where, kind = mount, right.split(" ")[0]
    return kind if kind in _NETWORK + _NETWORK_FUSE else None


def _mounts() -> str:
    """The kernel's table of mounts; empty on systems that have none to read."""
    try:
        return Path("/proc/self/mountinfo").read_text("utf-8", "replace")
    except OSError:
        return ""


def _demand_one_name(path: Path) -> None:
    """FileError for a file with two names: the lock beside one would not be seen from the other."""
    names = path.stat().st_nlink
    if names > 1:
        raise FileError(f"{path}: the file has {names} names (hard links); wanted one: remove the others or copy it")


def _connected(path: Path, uri: str, write: bool) -> sqlite3.Connection:
    try:
        # The connection passes from the thread that opens to the one that writes; never are two at it at once.
        link = sqlite3.connect(uri, uri=True, timeout=5.0, isolation_level=None, check_same_thread=False)
    except sqlite3.Error as error:
        raise FileError(f"{path}: cannot be opened: {error}") from error
    try:
        _demand_journal(path, link, empty_will_do=write)
        if write:
            _settle(link)
    except sqlite3.Error as error:
        link.close()
        raise FileError(f"{path}: is no journal, or a damaged one: {error}") from error
    except FileError:
        link.close()
        raise
    return link


def _demand_journal(path: Path, link: sqlite3.Connection, empty_will_do: bool) -> None:
    application = _pragma(link, "application_id")
    version = _pragma(link, "user_version")
    tables = link.execute("SELECT count(*) FROM sqlite_master").fetchone()[0]
    if empty_will_do and (application, version, tables) == (0, 0, 0):
        return
    if application != APPLICATION_ID:
        raise FileError(f"{path}: is a database of another program (or an empty one); wanted a journal")
    if version > SCHEMA:
        raise FileError(
            f"{path}: has journal schema {version}, this program knows up to {SCHEMA}; it was written by a newer "
            "version: use that, the file is left as it is"
        )


def _settle(link: sqlite3.Connection) -> None:
    """Full synchronisation and WAL; tables in one transaction where there are none, so none is ever half made.

    The tables come first: until they are there a reader finds an empty file, after that a journal, never another one.
    """
    link.execute("PRAGMA synchronous = FULL")
    if _pragma(link, "user_version") == 0:
        link.executescript(f"BEGIN IMMEDIATE;{_TABLES}COMMIT;")
    link.execute("PRAGMA journal_mode = WAL")


def _pragma(link: sqlite3.Connection, name: str) -> int:
    return int(link.execute(f"PRAGMA {name}").fetchone()[0])
