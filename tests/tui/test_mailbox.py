"""The mailbox: woken once, nothing lost, painted at once or at the deadline."""

import itertools
import threading

import pytest
from hypothesis import given
from hypothesis import strategies as st

from tests.tui.fakes import reading, snapshot
from tui.mailbox import Mailbox


class Numbered:
    """Stands for a reading: the mailbox never looks into one."""

    def __init__(self, n):
        self.n = n


class Clock:
    def __init__(self):
        self.now_s = 100.0

    def __call__(self):
        return self.now_s


@pytest.fixture
def clock():
    """A clock that the test moves."""
    return Clock()


@pytest.fixture
def wakes():
    """When the screen was woken."""
    return []


@pytest.fixture
def box(clock, wakes):
    """A mailbox of a screen that paints at most 30 times a second."""
    return Mailbox(lambda: wakes.append(clock()), 0.033, clock)


def test_put_many_before_a_take_wakes_once(box, wakes):
    """Any number of snapshots between two takes wakes the screen once."""
    for _ in range(50):
        box.put(snapshot(reading()))
    assert len(wakes) == 1


def test_put_after_take_wakes_again(box, wakes):
    """A snapshot after a take is announced anew."""
    for _ in range(3):
        box.put(snapshot(reading()))
        box.take()
    assert len(wakes) == 3


def test_take_many_readings_gives_all_in_order_and_the_newest_snapshot(box, clock):
    """Readings that were never painted still reach the trail, with their own arrival."""
    readings = [reading(0.01 * n) for n in range(5)]
    for each in readings:
        clock.now_s += 1.0
        box.put(snapshot(each))
    delivery = box.take()
    assert delivery.snapshot.reading is readings[-1]
    assert [(at_s, each) for at_s, each in delivery.readings] == list(
        zip((101.0, 102.0, 103.0, 104.0, 105.0), readings, strict=True)
    )


def test_put_same_reading_again_is_news_of_the_link_alone(box):
    """A snapshot that repeats the reading object changes the snapshot, not the readings, also across takes."""
    one = reading()
    box.put(snapshot(one))
    box.take()
    box.put(snapshot(one, lost=3))
    delivery = box.take()
    assert delivery.readings == ()
    assert delivery.snapshot.lost == 3


def test_take_with_nothing_waiting_gives_none(box):
    """Nothing waits at first, and nothing after a take."""
    assert box.take() is None
    box.put(snapshot(reading()))
    box.take()
    assert box.take() is None


def test_wait_long_after_a_paint_is_nothing(box, clock):
    """The first reading, and one after a pause, is painted at once."""
    assert box.wait_s() == 0.0
    box.put(snapshot(reading()))
    box.take()
    clock.now_s += 0.05
    assert box.wait_s() == 0.0


def test_wait_right_after_a_paint_is_the_rest_of_the_interval(box, clock):
    """A reading that comes too soon waits for the deadline, not for a full interval more."""
    box.put(snapshot(reading()))
    box.take()
    clock.now_s += 0.010
    assert box.wait_s() == pytest.approx(0.023)


def paints(box, clock, arrivals_s):
    """When a screen paints that does as it is told, while readings come at these moments."""
    painted_s = []
    for at_s in arrivals_s:
        due_s = clock.now_s + box.wait_s()
        if box._pending and due_s <= at_s:
            clock.now_s = due_s
            box.take()
            painted_s.append(due_s)
        clock.now_s = at_s
        box.put(snapshot(Numbered(at_s)))
        if box.wait_s() == 0.0:
            box.take()
            painted_s.append(at_s)
    return painted_s


def test_wait_under_a_flood_keeps_to_the_mean_interval(clock):
    """A thousand readings a second are painted hardly more often than the twenty a screen is made for."""
    box = Mailbox(lambda: None, 1 / 30, clock, mean_interval_s=1 / 22)
    painted_s = paints(box, clock, [100.0 + n / 1000 for n in range(10_000)])
    assert len(painted_s) == pytest.approx(220, abs=2)
    assert min(after - before for before, after in itertools.pairwise(painted_s)) >= 1 / 30 - 1e-9


@given(st.lists(st.floats(-0.005, 0.005), min_size=100, max_size=100))
def test_wait_a_jittered_feed_of_its_own_rate_is_painted_as_it_comes(jitter_s):
    """Twenty readings a second, each up to 5 ms early or late, never wait for a deadline."""
    clock = Clock()
    box = Mailbox(lambda: None, 1 / 30, clock, mean_interval_s=1 / 22)
    arrivals_s = [100.0 + n / 20 + late_s for n, late_s in enumerate(jitter_s)]
    assert paints(box, clock, arrivals_s) == arrivals_s


def test_take_of_a_batch_gives_all_its_readings(box):
    """What came together is handed on together, though only its last reading is shown."""
    newest, batch = reading(), [reading(), reading()]
    box.put(snapshot(newest, batch=batch))
    delivery = box.take()
    assert delivery.snapshot.reading is newest
    assert [each for _, each in delivery.readings] == [batch]


def test_put_while_the_screen_hangs_is_bounded(box):
    """A screen that never takes costs bounded memory, and keeps the newest."""
    for n in range(5000):
        box.put(snapshot(Numbered(n)))
    readings = box.take().readings
    assert len(readings) == 4096
    assert readings[-1][1].n == 4999


def test_put_from_four_threads_loses_no_reading():
    """Each reading arrives exactly once, and no wake is lost, however writers and the taker interleave."""
    woken = threading.Event()
    box = Mailbox(woken.set, 0.0)
    writers = [threading.Thread(target=_write, args=(box, name)) for name in range(4)]
    for writer in writers:
        writer.start()
    found = []
    while len(found) < 2000:
        assert woken.wait(5.0), f"{len(found)} of 2000 readings came, then no wake"
        woken.clear()
        delivery = box.take()
        found += [each.n for _, each in delivery.readings] if delivery else []
    assert len(set(found)) == 2000
    for writer in writers:
        writer.join(5.0)


def _write(box, name):
    for n in range(500):
        box.put(snapshot(Numbered((name, n))))
