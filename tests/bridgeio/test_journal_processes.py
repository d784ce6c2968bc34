"""The journal among processes: killed at any moment, fought over, and on a disk that is truly full."""

import fcntl
import os
import random
import select
import signal
import subprocess
import sys
import threading
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import pytest

from bridgeio.errors import FileError
from bridgeio.journal import Journal, JournalHeld, Stretch, Writer
from bridgeio.journal.assembly import BLOCK_S
from bridgeio.journal.book import Book

ROOT = Path(__file__).parents[2]
STRETCH = Stretch("sim:", 1_790_136_727_000_000, True)

#: Feeds tallies at full rate and says on stdout what it handed over ("put", last device ms) and what is safe ("safe").
CHILD = """
import os, resource, sys, time
import numpy as np
from bridgeio.frames import Tallies
from bridgeio.journal import Stretch, Writer, assembly, writer

def say(*words):
    os.write(1, (" ".join(map(str, words)) + "\\n").encode())

path, block_s, mode = sys.argv[1], float(sys.argv[2]), sys.argv[3]
assembly.BLOCK_S = block_s
writer._RETRY_S = 0.1
made = Writer(path, Stretch("sim:", 0, True), on_commit=lambda last: say("safe", last),
              on_state=lambda state: say("state", state.phase, state.words))
began, rng, put = time.monotonic(), np.random.default_rng(os.getpid()), 0
if mode == "full":
    hard = resource.getrlimit(resource.RLIMIT_FSIZE)[1]
    resource.setrlimit(resource.RLIMIT_FSIZE, (200_000, hard))
while True:
    upto = int((time.monotonic() - began) * 1000) + 1
    if upto > put:
        n = upto - put
        noise = rng.integers(0, 65536, (2, n)) if mode == "full" else np.ones((2, n))
        taken = made.put([Tallies.of(np.arange(put, upto), np.arange(put, upto), *noise)], time.time())
        say("put", upto - 1, int(taken))
        put = upto
    if mode == "full" and made.state.phase == "stopped":
        resource.setrlimit(resource.RLIMIT_FSIZE, (hard, hard))
    if mode == "full" and os.path.exists(path + ".end"):
        say("stopped", int(made.stop()))
        break
    time.sleep(0.005)
"""


class Child:
    """A writing process and what it has said."""

    def __init__(self, path, block_s=0.05, mode="run"):
        command = [sys.executable, "-c", CHILD, str(path), str(block_s), mode]
        self.process = subprocess.Popen(command, cwd=ROOT, stdout=subprocess.PIPE, bufsize=0)
        self._said = b""

    def said(self, word):
        """What followed `word` in all lines so far that began with it."""
        lines = self._said.decode().split("\n")[:-1]
        return [line.split(" ", 1)[1] for line in lines if line.startswith(word + " ")]

    def hear(self, until, timeout_s=15.0):
        """Listen until a condition holds."""
        end_s = time.monotonic() + timeout_s
        while not until():
            left_s = end_s - time.monotonic()
            assert left_s > 0, f"waited {timeout_s} s; heard {self._said[-300:]!r}"
            if select.select([self.process.stdout], [], [], min(0.05, left_s))[0]:
                data = os.read(self.process.stdout.fileno(), 65536)
                assert data, "the child ended"
                self._said += data

    def kill(self):
        """SIGKILL, and hear the rest."""
        self.process.send_signal(signal.SIGKILL)
        self._said += self.process.stdout.read()
        self.process.wait(10)
        self.process.stdout.close()


@pytest.fixture
def child():
    """Starts children, none of which outlives the test."""
    children = []

    def start(*args, **kwargs):
        children.append(Child(*args, **kwargs))
        return children[-1]

    yield start
    for one in children:
        if one.process.poll() is None:
            one.kill()


def stretch_times(path, stretch):
    """Blocks of a stretch and the device times of its tallies [ms]; the journal must be sound."""
    with Journal(path) as book:
        blocks = [block for block in book.blocks() if block.stretch == stretch]
        assert book.bad == []
    return blocks, [ms for b in blocks for one in b.timed() for ms in one.item.ms.tolist()]


def test_killed_at_random_moments_nothing_acknowledged_is_lost(tmp_path, child):
    """Killed and resumed again and again, a journal opens by itself, is sound and holds every block told as safe."""
    path, seed = tmp_path / "a.journal", int.from_bytes(os.urandom(4), "big")
    moments = random.Random(seed)
    for turn in range(1, 6):
        one = child(path)
        one.hear(lambda one=one: one.said("safe"))
        end_s = time.monotonic() + moments.uniform(0.0, 0.4)
        one.hear(lambda end_s=end_s: time.monotonic() >= end_s)
        one.kill()
        blocks, ms = stretch_times(path, turn)
        assert max(map(int, one.said("safe"))) <= blocks[-1].id, f"seed {seed}, turn {turn}"
        assert ms == list(range(len(ms))), f"seed {seed}, turn {turn}"
    book = Book(path)
    book.close()


def test_kill_costs_the_running_second_at_most(tmp_path, child):
    """With blocks as in use, what is lost by a kill just before a commit is a second by device time."""
    path = tmp_path / "a.journal"
    one = child(path, block_s=BLOCK_S)
    one.hear(lambda: one.said("safe") and int(one.said("put")[-1].split()[0]) >= 1750)
    one.kill()
    _, ms = stretch_times(path, 1)
    assert int(one.said("put")[-1].split()[0]) - ms[-1] <= 1000


def test_killed_while_it_is_made_the_journal_opens(tmp_path, child):
    """A kill while the file and its tables come into being leaves nothing that cannot be gone on with."""
    for turn in range(3):
        path = tmp_path / f"{turn}.journal"
        one = child(path)
        end_s = time.monotonic() + 15.0
        while not path.exists():
            assert time.monotonic() < end_s
        one.kill()
        book = Book(path)
        book.write([STRETCH])
        book.close()
        with Journal(path) as found:
            assert len(found.stretches) >= 1


def test_truly_full_disk_stops_and_resumes_without_a_loss(tmp_path, child):
    """With writes refused by the kernel, the reading goes on, and all is written once there is room."""
    path = tmp_path / "a.journal"
    one = child(path, mode="full")
    one.hear(lambda: [s for s in one.said("state") if s.startswith("stopped")])
    one.hear(lambda: [s for s in one.said("state") if s.startswith("recording")])
    (tmp_path / "a.journal.end").touch()
    one.hear(lambda: one.said("stopped"))
    assert one.said("stopped") == ["1"]
    assert {put.split()[1] for put in one.said("put")} == {"1"}
    _, ms = stretch_times(path, 1)
    assert ms == list(range(int(one.said("put")[-1].split()[0]) + 1))
    with Journal(path) as book:
        assert "stall" in [mark.kind for mark in book.marks]


def test_second_writer_is_refused_with_the_owner_s_pid(tmp_path, child):
    """One journal has one writer, by whatever path it is named; a reader may come meanwhile."""
    path, link, hard = (tmp_path / name for name in ("a.journal", "link.journal", "hard.journal"))
    one = child(path)
    one.hear(lambda: one.said("safe"))
    link.symlink_to(path)
    for name in (path, link, tmp_path / "." / ".." / tmp_path.name / "a.journal"):
        with pytest.raises(JournalHeld, match=f"by process {one.process.pid}"):
            Writer(name, STRETCH)
    os.link(path, hard)
    with pytest.raises(FileError, match="2 names"):
        Writer(hard, STRETCH)
    hard.unlink()
    with Journal(path) as book:
        assert list(book.blocks())


def test_lock_goes_with_a_killed_owner(tmp_path, child):
    """After a kill the next writer gets the journal at once, though the lock file is still there."""
    path = tmp_path / "a.journal"
    one = child(path)
    one.hear(lambda: one.said("safe"))
    one.kill()
    assert (tmp_path / "a.journal-lock").exists()
    writer = Writer(path, STRETCH)
    assert writer.stop()
    assert not (tmp_path / "a.journal-lock").exists()


def test_of_many_writers_at_once_one_wins(tmp_path):
    """Started together, all but one are refused; when it ends, the next may."""
    path, start = tmp_path / "a.journal", threading.Barrier(4)

    def race(_):
        start.wait(10)
        try:
            return Book(path)
        except JournalHeld:
            return None

    with ThreadPoolExecutor(4) as pool:
        for _ in range(25):
            won = [book for book in pool.map(race, range(4)) if book]
            assert len(won) == 1
            won[0].close()


def test_lock_on_a_file_that_was_just_deleted_does_not_count(tmp_path, monkeypatch):
    """Where the owner removes its lock file between our opening and our locking, the lock is taken on a new one."""
    path, lock, flock = tmp_path / "a.journal", tmp_path / "a.journal-lock", fcntl.flock

    def late(fd, how):
        monkeypatch.setattr(fcntl, "flock", flock)
        lock.unlink()
        flock(fd, how)

    monkeypatch.setattr(fcntl, "flock", late)
    first = Book(path)
    with pytest.raises(JournalHeld):
        Book(path)
    first.close()
