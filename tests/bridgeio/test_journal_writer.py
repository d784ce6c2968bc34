"""The journal's thread: the reading never waits, and nothing that the disk or the user does to the file is silent."""

import sqlite3
import threading
import time

import numpy as np
import pytest

from bridgeio.account import Counters
from bridgeio.errors import FileError
from bridgeio.frames import Nameplate, Tallies, Unknown
from bridgeio.journal import Journal, Stretch, Writer
from bridgeio.journal.book import Book

START_S = 1_790_136_727.0
STRETCH = Stretch("sim:", int(START_S * 1e6), True)
PLATE = Nameplate(0, 0, 1, 7, 0xABCD, 10, 16, 65535, 2500, 1, 0, 5, "one")


def until(condition, what, timeout_s=10.0):
    """Wait for a condition; fails with `what` when it does not come."""
    end_s = time.monotonic() + timeout_s
    while not condition():
        assert time.monotonic() < end_s, f"waited {timeout_s} s for {what}"
        time.sleep(0.005)


def some(first, n=10):
    """n tallies, device times from `first` on [ms], one a millisecond."""
    ms = first + np.arange(n)
    return Tallies.of(ms, ms, 1000 + ms % 7, 10 + ms % 3)


def times(path):
    """Device times of all tallies in a journal [ms], which must be sound."""
    with Journal(path) as book:
        found = [ms for one in book.tallies() for ms in one.item.ms.tolist()]
        assert book.bad == []
    return found


def marks(path, kind):
    """Marks of one kind in a journal."""
    with Journal(path) as book:
        return [mark for mark in book.marks if mark.kind == kind]


class Fault:
    """A disk that can be held up or full."""

    def __init__(self):
        self.free = threading.Event()
        self.free.set()
        self.full = False
        self.refused = 0

    def __call__(self, path):
        fault = self

        class Faulty(Book):
            def write(self, rows):
                assert fault.free.wait(20)
                if fault.full:
                    fault.refused += 1
                    raise sqlite3.OperationalError("database or disk is full")
                return super().write(rows)

        return Faulty(path)


@pytest.fixture
def fault(monkeypatch):
    """A disk with faults, tried again at once, and blocks of a few milliseconds."""
    monkeypatch.setattr("bridgeio.journal.writer._RETRY_S", 0.02)
    monkeypatch.setattr("bridgeio.journal.writer._POLL_S", 0.005)
    monkeypatch.setattr("bridgeio.journal.assembly.BLOCK_S", 0.02)
    return Fault()


def test_what_is_put_is_in_the_journal_when_it_is_stopped(tmp_path):
    """All frames, marks and the account of the line are written by `stop`, and the lock is gone."""
    path, counters = tmp_path / "a.journal", Counters()
    writer = Writer(path, STRETCH)
    for k in range(20):
        counters.lost, counters.bad_crc = k // 10, k // 5
        assert writer.put([some(10 * k), Unknown(0x1A, b"\x1a\0" + bytes(4))], START_S + k / 100, counters)
    assert writer.mark("frequency", value=7.03e6, utc_s=START_S)
    assert writer.stop()
    assert writer.state.phase == "closed"
    assert times(path) == list(range(200))
    assert [mark.value for mark in marks(path, "frequency")] == [7.03e6]
    with Journal(path) as book:
        account = book.account()
    assert (account.kept, account.missing, account.damaged) == (220, 1, 3)
    assert [one.name for one in tmp_path.iterdir() if "lock" in one.name] == []


def test_block_is_committed_within_a_second_while_frames_go_on(tmp_path):
    """What came is safe about a second later, without anybody asking."""
    path, safe = tmp_path / "a.journal", []
    writer = Writer(path, STRETCH, on_commit=safe.append)
    began_s, k = time.monotonic(), 0
    while not (safe and safe[-1] >= 1):
        assert time.monotonic() - began_s < 5.0
        writer.put([some(10 * k)], START_S + k / 100)
        k += 1
        time.sleep(0.01)
    assert 0.75 < time.monotonic() - began_s < 2.5
    with Journal(path) as book:
        assert len(list(book.blocks())) == 1
    assert writer.stop()


def test_stretch_begins_where_a_nameplate_says_something_new(tmp_path):
    """Frames before the first nameplate, of one board and of the next lie in stretches of their own."""
    path = tmp_path / "a.journal"
    other = Nameplate(9, 5, 1, 8, 0xEEEE, 10, 16, 65535, 2500, 1, 0, 5, "two")
    again = Nameplate(5, 15, 1, 7, 0xABCD, 10, 16, 65535, 2500, 1, 0, 5, "one")
    writer = Writer(path, Stretch("/dev/ttyUSB0", 5, bridge_file="schema = 1"))
    writer.put([some(0), PLATE, some(10), again, some(20), other, some(0)], START_S)
    assert writer.stop()
    with Journal(path) as book:
        assert [s.nameplate for s in book.stretches.values()] == [None, PLATE, other]
        assert {(s.source, s.bridge_file) for s in book.stretches.values()} == {("/dev/ttyUSB0", "schema = 1")}
        assert [(b.stretch, b.tallies) for b in book.blocks()] == [(1, 10), (2, 20), (3, 10)]


def test_times_go_on_across_a_wrap_and_start_anew_after_a_reset(tmp_path):
    """UTC rises by the device's milliseconds across 2^32, and a fall of the device time is a new beginning."""
    path = tmp_path / "a.journal"
    writer = Writer(path, STRETCH)
    wrap = Tallies.of(np.arange(8), np.arange(8) + 2**32 - 4, 5, 5)
    writer.put([wrap], START_S)
    writer.put([Tallies.of(np.arange(8), [4, 5, 6, 7, 0, 1, 2, 3], 5, 5)], START_S + 1.0)
    assert writer.stop()
    with Journal(path) as book:
        utc_us = np.concatenate([one.utc_us for one in book.tallies()])
    assert np.diff(utc_us[:8]).tolist() == [1000] * 7
    assert utc_us[7] == pytest.approx(START_S * 1e6, abs=1)
    assert np.diff(utc_us[12:]).tolist() == [1000] * 3
    assert utc_us[15] == pytest.approx((START_S + 1.0) * 1e6, abs=1)


def test_put_does_not_wait_while_the_disk_does(tmp_path, fault):
    """With the disk held up, ten seconds of a thousand frames a second are taken at once and none is lost."""
    path = tmp_path / "a.journal"
    writer = Writer(path, STRETCH, book=fault)
    fault.free.clear()
    took_s = []
    for k in range(1000):
        began_s = time.perf_counter()
        assert writer.put([some(10 * k)], START_S + k / 100)
        took_s.append(time.perf_counter() - began_s)
    # All are taken and the disk is still held up. A busy machine may stop us ourselves for a while, once or twice.
    assert not fault.free.is_set()
    assert sorted(took_s)[990] < 0.02
    fault.free.set()
    assert writer.stop()
    assert times(path) == list(range(10_000))


def test_slow_disk_is_told_and_marked(tmp_path, fault):
    """A commit that takes more than a second shows while it lasts and leaves a mark with its length."""
    path, now_s = tmp_path / "a.journal", [100.0]
    writer = Writer(path, STRETCH, book=fault, steady=lambda: now_s[0], wall=lambda: now_s[0] + 1e9)
    fault.free.clear()
    writer.put([some(0)], START_S)
    until(lambda: writer._writing_since_s is not None, "a write to begin")
    now_s[0] += 3.0
    assert writer.state.phase == "slow"
    assert "has not answered for 3 s" in writer.state.words
    fault.free.set()
    until(lambda: writer.state.phase == "recording", "the disk to answer")
    assert writer.stop()
    assert [mark.value for mark in marks(path, "stall")] == [3.0]


def test_frames_beyond_the_queue_are_counted_and_the_gap_is_marked(tmp_path, fault):
    """What finds no room is refused at once, counted, and told with the length of the gap; what follows is kept."""
    path = tmp_path / "a.journal"
    writer = Writer(path, STRETCH, book=fault, most_waiting=200)
    fault.free.clear()
    taken = [writer.put([some(10 * k)], START_S + k / 100) for k in range(60)]
    assert any(taken)
    assert False in taken
    fault.free.set()
    until(lambda: writer._waiting == 0, "the queue to empty")
    assert writer.put([some(5000)], START_S + 5.0)
    assert writer.stop()
    kept = [10 * k + i for k in range(60) if taken[k] for i in range(10)]
    assert times(path) == kept + list(range(5000, 5010))
    with Journal(path) as book:
        account = book.account()
    assert (account.sent, account.unkept) == (610, 610 - len(kept) - 10)
    assert account.words.startswith(f"complete but for {account.unkept} frames, 04:12:0")
    (gap,) = marks(path, "gap")
    first, last = taken.index(False), 59 - taken[::-1].index(False)
    assert gap.value == pytest.approx((last - first) / 100, abs=1e-3)
    assert f"{account.unkept} frames not kept" in gap.text


def test_full_disk_stops_the_journal_and_it_resumes_when_there_is_room(tmp_path, fault):
    """The state says that the disk is full; what waited is written once there is room, and the time away is marked."""
    path, told = tmp_path / "a.journal", []
    writer = Writer(path, STRETCH, book=fault, on_state=told.append)
    writer.put([some(0)], START_S)
    until(lambda: writer._book.last_block, "a first block")
    fault.full = True
    writer.put([some(10)], START_S + 0.01)
    until(lambda: fault.refused > 2, "several refusals")
    assert writer.state.phase == "stopped"
    assert "database or disk is full; the reading goes on" in writer.state.words
    assert writer.put([some(20)], START_S + 0.02)
    fault.full = False
    until(lambda: writer.state.phase == "recording", "recording to resume")
    assert writer.stop()
    assert [state.phase for state in told] == ["stopped", "recording", "closed"]
    assert times(path) == list(range(30))
    assert len(marks(path, "stall")) == 1


def test_stop_with_a_full_disk_says_how_much_is_lost(tmp_path, fault):
    """A journal that cannot be ended does not pretend."""
    writer = Writer(tmp_path / "a.journal", STRETCH, book=fault)
    fault.full = True
    writer.put([some(0)], START_S)
    assert not writer.stop()
    assert "10 frames could not be written" in writer.state.words
    assert "disk is full" in writer.state.words


def rename(path):
    """Another name."""
    path.rename(path.with_name("moved.journal"))


def delete(path):
    """No name."""
    path.unlink()


def replace(path):
    """A copy in its place."""
    copy = path.with_name("copy.journal")
    copy.write_bytes(path.read_bytes())
    copy.replace(path)


def delete_log(path):
    """Only the write-ahead log goes."""
    path.with_name(path.name + "-wal").unlink()


@pytest.mark.parametrize("happens", [rename, delete, replace, delete_log])
def test_journal_taken_away_is_noticed_and_nothing_is_lost(tmp_path, fault, happens):
    """Moved, deleted, replaced or robbed of its log: the state names a rescue file, which holds every frame."""
    path, told = tmp_path / "a.journal", []
    writer = Writer(path, STRETCH, book=fault, on_state=told.append)
    for k in range(30):
        writer.put([some(10 * k)], START_S + k / 100)
        until(lambda k=k: writer._book.last_block > k, "a block")
    happens(path)
    for k in range(30, 60):
        writer.put([some(10 * k)], START_S + k / 100)
    until(lambda: told, "the alarm", 3.0)
    assert told[0].phase == "moved"
    assert str(writer.path) in told[0].words
    assert writer.path.name.startswith("a-rescue-")
    writer.put([some(600)], START_S + 0.6)
    assert writer.stop()
    assert times(writer.path) == list(range(610))
    assert len(marks(writer.path, "moved")) == 1
    if happens is rename:
        assert times(tmp_path / "moved.journal")[:300] == list(range(300))


def test_journal_taken_away_while_nothing_comes_is_noticed(tmp_path):
    """The look at the path does not wait for frames."""
    path = tmp_path / "a.journal"
    writer = Writer(path, STRETCH)
    until(lambda: path.with_name(path.name + "-wal").stat().st_size, "the stretch to be written")
    path.unlink()
    until(lambda: writer.state.phase == "moved", "the alarm", 3.0)
    assert writer.stop()


def test_step_of_our_clock_is_marked_with_its_size(tmp_path, fault):
    """A clock that is set leaves a mark, and times follow it; a clock that is not leaves none."""
    path, ahead_s = tmp_path / "a.journal", [0.0]
    writer = Writer(path, STRETCH, book=fault, wall=lambda: time.monotonic() + ahead_s[0])
    writer.put([some(0)], START_S)
    until(lambda: writer._book.last_block, "a block")
    ahead_s[0] = 5.0
    until(lambda: writer._clock_offset_s == pytest.approx(5.0, abs=0.5), "the step to be seen")
    until(lambda: not writer._assembly.rows, "its mark to be written")
    writer.put([some(10)], START_S + 5.01)
    assert writer.stop()
    assert [mark.value for mark in marks(path, "clock")] == [pytest.approx(5.0, abs=0.1)]
    with Journal(path) as book:
        utc_us = [int(u) for one in book.tallies() for u in one.utc_us]
    assert utc_us[-1] == pytest.approx((START_S + 5.01) * 1e6, abs=1)


def test_plain_lines_keep_the_time_of_their_arrival(tmp_path):
    """Tallies without a device time are dated by when they came, each feed its own."""
    path = tmp_path / "a.journal"
    writer = Writer(path, STRETCH)
    plain = Tallies.of(0, 0, 12.5, 0.25, checked=False, has_ms=False)
    for k in range(3):
        writer.put([plain], START_S + k / 4)
    assert writer.stop()
    with Journal(path) as book:
        (one,) = book.items()
        (block,) = book.blocks()
    assert one.utc_us.tolist() == [int((START_S + k / 4) * 1e6) for k in range(3)]
    assert one.item.forward.tolist() == [12.5] * 3
    assert (one.item.checked, one.item.has_ms, block.ms_first) == (False, False, -1)


def test_noise_without_a_frame_is_in_the_account(tmp_path):
    """Damage on the line is told even where no good frame came."""
    path, counters = tmp_path / "a.journal", Counters()
    counters.bad_crc = 7
    writer = Writer(path, STRETCH)
    writer.put([], START_S, counters)
    assert writer.stop()
    with Journal(path) as book:
        assert book.account().damaged == 7


def test_writer_refuses_what_is_no_journal_before_it_starts(tmp_path):
    """The caller hears at once, not from the thread."""
    path = tmp_path / "notes.txt"
    path.write_text("not a journal " * 100)
    with pytest.raises(FileError, match="no journal"):
        Writer(path, STRETCH)
    assert [one.name for one in tmp_path.iterdir()] == ["notes.txt"]


def test_fault_of_the_program_is_told_and_raised_by_stop(tmp_path):
    """An error in the thread is never silent: the state tells it and `stop` raises it."""

    def broken(block):
        raise RuntimeError(f"listener broke at block {block}")

    writer = Writer(tmp_path / "a.journal", STRETCH, on_commit=broken)
    until(lambda: writer.state.phase == "stopped", "the fault to be told")
    assert "listener broke" in writer.state.words
    with pytest.raises(RuntimeError, match="listener broke at block 0"):
        writer.stop()


def test_long_feed_becomes_many_blocks(tmp_path):
    """What comes faster than any bridge is cut by number, so that no block is too long to be read."""
    path = tmp_path / "a.journal"
    writer = Writer(path, STRETCH)
    assert writer.put([some(0, 55_000)], START_S)
    assert writer.put([some(55_000, 5)], START_S)
    assert writer.stop()
    assert times(path) == list(range(55_005))
    with Journal(path) as book:
        assert [block.frames for block in book.blocks()] == [10_000] * 5 + [5_005]


class Uncopied:
    """A connection whose `backup` fails as SQLite names it."""

    def __init__(self, link, name):
        self._link, self._name = link, name

    def __getattr__(self, name):
        return getattr(self._link, name)

    def backup(self, _):
        error = sqlite3.OperationalError(f"failed as {self._name}")
        error.sqlite_errorname = self._name
        raise error


@pytest.mark.parametrize("name", ["SQLITE_FULL", "SQLITE_IOERR_WRITE"])
def test_rescue_without_room_keeps_the_open_file(tmp_path, fault, name):
    """Deleted on a full disk, the journal is not let go: it is copied once there is room."""
    path, told = tmp_path / "a.journal", []
    writer = Writer(path, STRETCH, book=fault, on_state=told.append)
    writer.put([some(0)], START_S)
    until(lambda: writer._book.last_block, "a block")
    link, writer._book._link = writer._book._link, Uncopied(writer._book._link, name)
    path.unlink()
    writer.put([some(10)], START_S + 0.01)
    until(lambda: told, "the alarm")
    assert f"no rescue file can be made: failed as {name}" in told[0].words
    assert not list(tmp_path.glob("*rescue*"))
    writer._book._link = link
    writer.put([some(20)], START_S + 0.02)
    until(lambda: writer.state.phase == "moved", "the rescue")
    assert writer.stop()
    assert times(writer.path) == list(range(30))


def test_rescue_of_a_journal_out_of_reach_goes_on_in_an_empty_one(tmp_path, fault):
    """Where the open file cannot be read, as after unmounting, what follows is kept with its stretch, and told."""
    path, told = tmp_path / "a.journal", []
    writer = Writer(path, STRETCH, book=fault, on_state=told.append)
    writer.put([some(0)], START_S)
    until(lambda: writer._book.last_block, "a block")
    writer._book._link = Uncopied(writer._book._link, "SQLITE_IOERR_READ")
    path.unlink()
    writer.put([some(10)], START_S + 0.01)
    until(lambda: told, "the alarm")
    assert "what came before is in the moved file only" in told[0].words
    assert writer.stop()
    assert times(writer.path) == list(range(10, 20))
    with Journal(writer.path) as book:
        assert book.stretches == {1: STRETCH}


def test_receiver_made_anew_counts_from_zero(tmp_path):
    """Counters that fall are those of another receiver: the account adds what it counted, and nothing twice."""
    path, counters = tmp_path / "a.journal", Counters()
    writer = Writer(path, STRETCH)
    for lost in (5, 7, 2, 2):
        counters.lost = lost
        writer.put([some(0)], START_S, counters)
    assert writer.stop()
    with Journal(path) as book:
        assert book.account().missing == 9
