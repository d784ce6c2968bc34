"""One journal, one writer: a lock file beside the journal, held open for as long as it is written.

One rule: the lock is `flock` on a file of its own, so it goes with its owner however that ends, and no descriptor of
the journal itself is ever opened and closed beside SQLite's (which would drop SQLite's locks).
"""

from __future__ import annotations

import fcntl
import os
import time
from pathlib import Path

from bridgeio.errors import FileError, JournalHeld

__all__ = ["JournalHeld", "JournalLock"]

#: A lock file deleted by its owner between our opening and our locking is tried again.
_TRIES = 50
#: Between our being refused and the owner's writing its pid pass microseconds; longer than this nobody waits [s].
_NAMELESS_S = 0.5


class JournalLock:
    """The right to write one journal, from construction to `release`."""

    def __init__(self, journal: Path) -> None:
        """Take it. JournalHeld, with the owner's pid, where it is taken; FileError where no file can be made."""
        self.path = journal.with_name(journal.name + "-lock")
        self._journal = journal
        for _ in range(_TRIES):
            self._fd = self._open()
            if self._take():
                return
        raise FileError(f"{self.path}: the lock file comes and goes; is another program deleting it?")

    def release(self) -> None:
        """Give it back and remove the file."""
        if self._fd < 0:
            return
        if self._is_ours():
            self.path.unlink(missing_ok=True)
        os.close(self._fd)
        self._fd = -1

    def _open(self) -> int:
        try:
            return os.open(self.path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC | os.O_NOFOLLOW, 0o600)
        except OSError as error:
            raise FileError(f"{self.path}: no lock file can be made beside the journal: {error.strerror}") from error

    def _take(self) -> bool:
        """Whether the lock is ours; False where the file was deleted under us."""
        try:
            fcntl.flock(self._fd, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError as error:
            owner = self._owner()
            os.close(self._fd)
            raise JournalHeld(
                f"{self._journal}: is being written by process {owner or 'unknown'}; wanted a journal nobody writes: "
                "end that process, or give another file"
            ) from error
        except OSError as error:
            os.close(self._fd)
            raise FileError(f"{self.path}: cannot be locked: {error.strerror}") from error
        if not self._is_ours():
            os.close(self._fd)
            return False
        os.ftruncate(self._fd, 0)
        os.pwrite(self._fd, f"{os.getpid()}\n".encode("ascii"), 0)
        return True

    def _owner(self) -> str:
        """The pid in the file; where it is none of a living process, the owner has only just taken the lock: wait."""
        end_s = time.monotonic() + _NAMELESS_S
        while True:
            owner = os.pread(self._fd, 20, 0).decode("ascii", "replace").strip()
            if _lives(owner) or time.monotonic() >= end_s:
                return owner
            time.sleep(0.005)

    def _is_ours(self) -> bool:
        """Whether the path still leads to the file we hold."""
        held = os.fstat(self._fd)
        try:
            found = os.stat(self.path, follow_symlinks=False)
        except OSError:
            return False
        return (held.st_dev, held.st_ino) == (found.st_dev, found.st_ino)


def _lives(pid: str) -> bool:
    """Whether a process with this pid is there, whoever owns it."""
    if not (pid.isascii() and pid.isdigit() and 0 < int(pid) < 1 << 31):
        return False
    try:
        os.kill(int(pid), 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        return True
    return True
