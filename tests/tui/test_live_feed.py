"""The feed of the screens: one snapshot for what came together, and the rate at which it came."""

import threading

import pytest

from bridgeio.desk import Desk
from bridgeio.frames import Tallies
from bridgeio.framing import pack
from bridgeio.ports import EndOfSource
from bridgeio.receiver import Receiver
from tui.live_feed import LiveFeed


class Pieces:
    """A source that gives prepared pieces, and ends when it is told to."""

    name, simulated, live = "pieces", False, True

    def __init__(self, *pieces):
        self._pieces, self.ended = list(pieces), threading.Event()

    def open(self):
        """Nothing to open."""

    def read(self):
        if self._pieces:
            return self._pieces.pop(0)
        self.ended.set()
        raise EndOfSource("no more")

    def close(self):
        """Nothing to close."""


def snapshots(*sizes):
    """What a feed posts where so many tallies come in each read, up to the end of the source."""
    pieces, first = [], 0
    for size in sizes:
        numbers = range(first, first + size)
        pieces.append(pack(Tallies.of(numbers, [10 * n for n in numbers], [1000 + n for n in numbers], 50)))
        first += size
    posted, source = [], Pieces(b"\0", *pieces)
    feed = LiveFeed(lambda: (source, Receiver(), Desk()))
    feed.start(posted.append)
    assert source.ended.wait(10.0)
    feed.stop()
    return posted


def test_batch_is_one_snapshot_with_its_last_reading_to_show():
    """Fifty readings of one read are one snapshot: all of them to judge, the newest to show."""
    (found,) = [each for each in snapshots(50) if each.link.phase == "open" and each.reading is not None]
    assert len(found.batch) == 50
    assert len(found.reading) == 1
    assert found.reading.forward_counts[0] == found.batch.forward_counts[-1] == 1049.0


def test_reading_that_came_alone_is_its_own_batch():
    """A slow bridge's readings come one by one, each a new object."""
    found = [each for each in snapshots(1, 1, 1) if each.link.phase == "open" and each.reading is not None]
    assert [each.reading.forward_counts.tolist() for each in found] == [[1000.0], [1001.0], [1002.0]]
    assert all(each.batch is each.reading for each in found)


def test_rate_counts_readings_not_batches():
    """The rate is that of the readings since the first batch of the last two seconds."""
    found = [each for each in snapshots(1, 40, 40, 40) if each.link.phase == "open" and each.reading is not None]
    assert found[0].rate_hz == 0.0
    # The reader rests 30 ms after each batch: 40 readings in each such time, or less where the machine is busy.
    assert 0.0 < found[-1].rate_hz == pytest.approx(40 / 0.03, rel=0.9)
