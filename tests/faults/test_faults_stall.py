"""Promise: the live reading does not wait for the disk. A disk that stalls is told, marked, and costs no frame."""

import time
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest

from bridgeio.frames import Tallies
from bridgeio.journal import Journal, Stretch, Writer
from bridgeio.journal.book import Book
from tests.faults.rig import LAST_MOMENTS_MS, Keep, examine, missing_in, needs_strace, seeded, slow_disk, until

STRETCH = Stretch("steady", 0)


class SlowBook(Book):
    """The in-process double of a slow disk: the next write waits for `stall_s` [s] once it is set."""

    stall_s = 0.0

    def write(self, rows):
        """Write, late."""
        stall_s, self.stall_s = self.stall_s, 0.0
        time.sleep(stall_s)
        return super().write(rows)


class Stalled:
    """A writer over a slow book, fed a thousand tallies a second by `feed_until`."""

    def __init__(self, path, **more):
        self.books, self.phases = [], []
        self.writer = Writer(path, STRETCH, book=self._book, **more)
        self.began_s, self.made, self.most = time.monotonic(), 0, 0

    def _book(self, path):
        self.books.append(SlowBook(path))
        return self.books[-1]

    def feed_until(self, condition, timeout_s=30.0):
        """Feed at full rate until a condition holds; what waits and what is told is noted meanwhile."""
        until(lambda: self._feed() or condition(), timeout_s)

    def _feed(self):
        upto = int((time.monotonic() - self.began_s) * 1000) + 1
        ms = np.arange(self.made, upto)
        if len(ms):
            self.writer.put([Tallies.of(ms, ms, ms % 4093, ms % 1021)], time.time())
        self.made = upto
        self.most = max(self.most, self.writer._waiting)
        phase = self.writer.state.phase
        if self.phases[-1:] != [phase]:
            self.phases.append(phase)

    def run(self, stall_s):
        """A stall of so long [s], from the first block on until a block after it."""
        self.feed_until(lambda: self.books[0].last_block >= 1)
        before = self.books[0].last_block
        self.books[0].stall_s = stall_s
        self.feed_until(lambda: self.books[0].last_block >= before + 1, stall_s + 20)
        assert self.writer.stop(timeout_s=30)


def marks(path, kind):
    """Lengths of the marks of a kind [s]."""
    with Journal(path) as book:
        return [mark.value for mark in book.marks if mark.kind == kind]


def kept_of(path):
    """Device times of all tallies [ms] and the account; the journal must be sound."""
    with Journal(path) as book:
        ms = [ms for one in book.tallies() for ms in one.item.ms.tolist()]
        return ms, book.account()


@needs_strace
def test_disk_stalled_for_five_seconds_costs_keep_no_frame(board, tmp_path):
    """Told within two seconds, marked with its length, every frame kept; the double in the process agrees with it."""
    path, double = tmp_path / "a.journal", Stalled(tmp_path / "b.journal")
    Book(path).close()
    with ThreadPoolExecutor(1) as beside:
        doubled = beside.submit(double.run, 5.0)
        # The third sync of the writer's own thread waits; to open a journal that is there takes fewer in any thread.
        with Keep(board.path, path, before=slow_disk(5.0, when="3")) as keep:
            slow_s = keep.until_said("the disk has not answered for .* frames wait")
            began_s = keep.log_written()[1] / 1e9
            over_s = keep.until_said("the disk answers again")
            keep.until_keeping()
            at_ms = board.now_ms
            assert keep.end() == 0, keep.words
        doubled.result(30)
    assert slow_s - began_s < 2.0
    assert 4.5 < over_s - began_s < 6.5
    found = examine(path)
    lengths = [mark.value for mark in found.marks if mark.kind == "stall"]
    assert lengths == [pytest.approx(5.0, abs=0.7)]
    assert missing_in(found.ms) == found.account.missing == found.account.unkept == 0
    assert found.ms[-1] >= at_ms - LAST_MOMENTS_MS
    # No more than a terminal's buffer ever waited in front of the port: it was read on.
    assert board.most_waiting == 0

    assert double.phases == ["recording", "slow", "recording"]
    assert marks(tmp_path / "b.journal", "stall") == [pytest.approx(lengths[0], abs=0.7)]
    ms, account = kept_of(tmp_path / "b.journal")
    assert ms == list(range(double.made))
    assert account.unkept == 0


def test_stall_longer_than_the_queue_is_bounded_and_accounted(tmp_path):
    """Where more waits than may, the queue stays within its bound and every frame not kept is told, with a gap."""
    path = tmp_path / "a.journal"
    double = Stalled(path, most_waiting=300)
    double.run(1.2)
    ms, account = kept_of(path)
    assert double.most <= 300
    assert account.unkept > 0
    assert account.kept + account.unkept == double.made
    assert len(ms) == account.kept
    assert max(marks(path, "gap")) == pytest.approx(account.unkept / 1000, abs=0.5)


def test_disk_slow_at_the_last_write_is_marked_and_no_failure(tmp_path):
    """Told to stop while the disk stalls, the writer ends well, with a mark on the stall of its very last block."""
    double = Stalled(tmp_path / "a.journal")
    double.feed_until(lambda: double.books[0].last_block >= 1)
    double.books[0].stall_s = 1.2
    assert double.writer.stop()
    ms, _ = kept_of(tmp_path / "a.journal")
    assert ms == list(range(double.made))
    assert marks(tmp_path / "a.journal", "stall") == [pytest.approx(1.2, abs=0.5)]


def _stall(path, stall_s):
    double = Stalled(path)
    double.run(stall_s)
    ms, account = kept_of(path)
    assert ms == list(range(double.made))
    assert account.missing == account.unkept == 0
    assert ("slow" in double.phases) or stall_s < 1.2
    told = marks(path, "stall")
    assert (told == [pytest.approx(stall_s, abs=0.7)]) if stall_s > 1.0 else len(told) <= 1
    return double.most


@pytest.mark.long
def test_thirty_stalls_cost_no_frame(tmp_path, request, report):
    """Stalls of 0.2 to 10 s by the double: no frame lost, told and marked from a second on, the queue bounded."""
    chance, repeat = seeded(request)
    print(repeat)
    lengths = [0.2, 10.0, *(chance.uniform(0.2, 10.0) for _ in range(28))]
    began_s = time.monotonic()
    with ThreadPoolExecutor(3) as pool:
        most = max(pool.map(_stall, (tmp_path / f"{n}.journal" for n in range(30)), lengths))
    report(
        f"30 stalls, 0 failures, so below {3 / 30:.2f}; {most} frames and feeds waited at most; "
        f"{time.monotonic() - began_s:.0f} s; {repeat}"
    )
    # Ten seconds of frames, and one more for each of the feeds they came in, five frames long.
    assert most < 13_000
