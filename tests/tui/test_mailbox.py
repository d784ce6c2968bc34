"""The mailbox: woken once, nothing lost, painted at once or at the deadline."""

import threading

import pytest

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
