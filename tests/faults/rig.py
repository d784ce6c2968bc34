"""A real `bridgewright keep` and all it said, with the faults that can be done to it.

One rule: the oracle is what keep acknowledged on its pipe after a commit, never what was sent to it.
"""

from __future__ import annotations

import functools
import os
import random
import re
import shutil
import signal
import sqlite3
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import IO

import numpy as np
import pytest

from bridgeio.journal import Account, Journal, Mark
from tests.faults.board import truth

__all__ = [
    "LAST_MOMENTS_MS",
    "ROOT",
    "Found",
    "Keep",
    "examine",
    "missing_in",
    "needs_strace",
    "refusing_disk",
    "seeded",
    "slow_disk",
    "snapshot",
    "until",
]

ROOT = Path(__file__).parents[2]
#: What reached the port in the last moments before keep was told to end it may leave unread [ms].
LAST_MOMENTS_MS = 100


def until(condition: Callable[[], object], timeout_s: float = 20.0, every_s: float = 0.005) -> None:
    """Wait for a condition."""
    end_s = time.monotonic() + timeout_s
    while not condition():
        assert time.monotonic() < end_s, f"waited {timeout_s} s in vain"
        time.sleep(every_s)


def seeded(request: pytest.FixtureRequest) -> tuple[random.Random, str]:
    """Chance for a test, and the command that repeats it; the seed is fixed at push, fresh in long runs.

    FAULT_SEED in the environment is a seed to repeat.
    """
    fresh = request.node.get_closest_marker("long") is not None
    seed = os.environ.get("FAULT_SEED") or (str(int.from_bytes(os.urandom(4), "big")) if fresh else "1")
    mark = "-m long " if fresh else ""
    return random.Random(seed), f"repeat: FAULT_SEED={seed} python -m pytest {mark}'{request.node.nodeid}'"


@functools.cache
def _why_no_strace() -> str:
    if not shutil.which("strace"):
        return "no strace: apt install strace"
    tried = subprocess.run([*slow_disk(0.0), "true"], capture_output=True, timeout=30)
    return "" if tried.returncode == 0 and not tried.stderr else f"strace may not trace here: {tried.stderr!r}"


def slow_disk(delay_s: float, when: str = "1+") -> list[str]:
    """Words before a command that make its disk slow: each thread's `when`-th syncs wait for `delay_s` [s]."""
    inject = f"inject=fdatasync:delay_enter={int(delay_s * 1e6)}:when={when}"
    # -D: the command keeps the pid that we start, strace stands beside it.
    return ["strace", "-D", "-f", "-qq", "-o", os.devnull, "-e", "trace=fdatasync", "-e", inject]


def refusing_disk(call: str, error: str, turn: int, journal: Path) -> list[str]:
    """Words before a command whose disk refuses each thread's `turn`-th `call` on a journal's files, once."""
    words = ["strace", "-D", "-f", "-qq", "-o", os.devnull, "-e", f"trace={call}"]
    for end in ("", "-wal", "-journal"):
        words += ["-P", f"{journal}{end}"]
    return [*words, "-e", f"inject={call}:error={error}:when={turn}"]


needs_strace = pytest.mark.skipif(bool(_why_no_strace()), reason=_why_no_strace())


class Keep:
    """The command as a process; open with `with`, which leaves none behind."""

    def __init__(self, source: str, journal: Path, *, before: Iterable[str] = ()) -> None:
        command = [sys.executable, "-m", "tui", "keep", source, str(journal), "--acknowledge"]
        self.journal = journal
        self._process = subprocess.Popen(
            [*before, *command], cwd=ROOT, stdout=subprocess.PIPE, stderr=subprocess.PIPE, stdin=subprocess.DEVNULL
        )
        #: (moment by the wall clock [s], number of a block), as acknowledged; the same of all that it said in words.
        self.blocks: list[tuple[float, int]] = []
        self.words: list[tuple[float, str]] = []
        self._ears = [
            threading.Thread(target=self._hear, args=(pipe,), daemon=True)
            for pipe in (self._process.stdout, self._process.stderr)
        ]
        for ear in self._ears:
            ear.start()

    def __enter__(self) -> Keep:
        return self

    def __exit__(self, *_: object) -> None:
        self.end(signal.SIGKILL)

    @property
    def pid(self) -> int:
        """Of keep itself, under strace too."""
        return self._process.pid

    @property
    def alive(self) -> bool:
        """Whether it runs."""
        return self._process.poll() is None

    @property
    def last(self) -> int:
        """The block acknowledged last; 0 before the first."""
        return self.blocks[-1][1] if self.blocks else 0

    def said(self, pattern: str) -> float | None:
        """When it first said something that matches [s]; None where it has not."""
        return next((at_s for at_s, words in list(self.words) if re.search(pattern, words)), None)

    def until_said(self, pattern: str, timeout_s: float = 20.0) -> float:
        """Wait for words; the moment they came [s]."""
        self.until(lambda: self.said(pattern) is not None, timeout_s)
        found = self.said(pattern)
        assert found is not None
        return found

    def until(self, condition: Callable[[], object], timeout_s: float = 20.0, every_s: float = 0.005) -> None:
        """Wait for a condition as long as it lives."""
        until(lambda: condition() or not self.alive, timeout_s, every_s)
        assert condition(), f"keep has ended: {self.words}"

    def until_keeping(self, more: int = 1) -> None:
        """Wait for so many further blocks."""
        before = len(self.blocks)
        self.until(lambda: len(self.blocks) >= before + more)

    def tell(self, number: signal.Signals) -> None:
        """Signal it and go on."""
        self._process.send_signal(number)

    def end(self, number: signal.Signals = signal.SIGTERM, timeout_s: float = 30.0) -> int:
        """Signal it, hear it out, return its exit code."""
        self.tell(number)
        code = self._process.wait(timeout_s)
        for ear in self._ears:
            ear.join(timeout_s)
        for pipe in (self._process.stdout, self._process.stderr):
            if pipe:
                pipe.close()
        return code

    def log_written(self) -> tuple[int, int]:
        """Size and time of the last write [ns] of the write-ahead log; zeros where there is none."""
        try:
            found = os.stat(f"{self.journal}-wal")
        except FileNotFoundError:
            return 0, 0
        return found.st_size, found.st_mtime_ns

    def _hear(self, pipe: IO[bytes]) -> None:
        for line in pipe:
            now_s, words = time.time(), line.decode().strip()
            if words.isdigit():
                self.blocks.append((now_s, int(words)))
            else:
                self.words.append((now_s, words))


@dataclass(frozen=True)
class Found:
    """What a journal holds: blocks 1 to `last` without a gap, device times of the tallies in order [ms]."""

    last: int
    ms: np.ndarray
    account: Account
    marks: list[Mark]


def snapshot(journal: Path, folder: Path) -> Path:
    """A copy of journal and logs as they lie there, so that looking does not mend the original before keep has to."""
    copy = folder / "copy"
    for end in ("", "-wal", "-journal"):
        Path(f"{copy}{end}").unlink(missing_ok=True)
        if Path(f"{journal}{end}").exists():
            shutil.copyfile(f"{journal}{end}", f"{copy}{end}")
    Path(f"{copy}-shm").unlink(missing_ok=True)
    return copy


def examine(journal: Path) -> Found:
    """Read all of it; anything damaged, out of order or untrue is a failure."""
    link = sqlite3.connect(journal)
    assert link.execute("PRAGMA integrity_check").fetchone() == ("ok",)
    link.close()
    with Journal(journal) as book:
        blocks = list(book.blocks())
        assert [block.id for block in blocks] == list(range(1, len(blocks) + 1))
        parts = [one.item for one in book.tallies()]
        account, marks, faults = book.account(), book.marks, book.faults
    assert not account.bad
    assert not faults
    empty = [np.zeros(0, dtype=np.int64)]
    ms, forward, reflected = (
        np.concatenate(empty + [getattr(part, name).astype(np.int64) for part in parts])
        for name in ("ms", "forward", "reflected")
    )
    assert (np.diff(ms) > 0).all()
    wanted = truth(ms)
    assert (forward == wanted[0]).all()
    assert (reflected == wanted[1]).all()
    return Found(len(blocks), ms, account, marks)


def missing_in(ms: np.ndarray) -> int:
    """Frames missing between the first and the last of these device times [ms]."""
    return int(ms[-1] - ms[0] + 1 - len(ms)) if len(ms) else 0
