"""Journals for tests: tallies of the simulated bridge's kind, with what a bridge says beside them."""

import time
from dataclasses import replace

import numpy as np

from bridgeio.bridge_file import load_bridge_file
from bridgeio.frames import Conditions, Nameplate, Tallies
from bridgeio.journal import Mark, Stretch
from bridgeio.journal.book import Block, Book
from bridgeio.journal.pack import Timed
from bridgeio.simulator import BRIDGE_FILE

START_US = 1_790_136_720_000_000  # 04:12:00 UTC
HZ = 14_100_000
FILE = load_bridge_file(BRIDGE_FILE)
PLATE = Nameplate(0, 0, 1, 7, FILE.device_id or 0, 20, 16, FILE.full_scale, 0, 2, 0, 1, "shed")
STRETCH = Stretch("/dev/ttyUSB0", START_US, False, PLATE, "")


def timed(item, ms, start_us=START_US):
    """An item with the UTC of device times [ms]."""
    return Timed(item, start_us + np.atleast_1d(np.asarray(ms, dtype=np.int64)) * 1000)


def counts(second, n=50, seed=0):
    """Forward and reflected counts of one second: a carrier of changing power and match."""
    rng = np.random.default_rng(1000 * seed + second)
    place = second * n + np.arange(n)
    forward = 33_000 + 2000 * np.sin(place / 30.0) + rng.normal(0.0, 0.8, n)
    return np.rint(forward), np.rint(5000 + 2500 * np.sin(place / 70.0) + rng.normal(0.0, 0.8, n))


def tallies(second, n=50, *, start_us=START_US, pair=None, flags=0, **marks):
    """The tallies of one second with their times."""
    ms = 1000 * second + np.arange(n) * (1000 // n)
    forward, reflected = counts(second, n) if pair is None else pair
    return timed(Tallies.of(np.arange(n), ms, forward, reflected, flags, **marks), ms, start_us)


def conditions(second, hz=HZ, c=25.0, start_us=START_US):
    """A conditions frame at the start of a second."""
    return timed(Conditions(0, 1000 * second, round(100 * c), 5000, hz), 1000 * second, start_us)


def plate(second, of=PLATE, start_us=START_US):
    """A nameplate at the start of a second."""
    return timed(replace(of, ms=1000 * second), 1000 * second, start_us)


def block(*items, missing=0):
    """A block of these."""
    return Block(list(items), int(items[0].utc_us[0]), missing=missing)


def told(hz=HZ, at_us=START_US, text="as told at the start"):
    """A mark with a frequency."""
    return Mark("frequency", at_us, text, float(hz))


def write(path, *rows):
    """A journal with these rows, or these rows more."""
    book = Book(path)
    book.write(rows)
    book.close()
    return path


def long_journal(path, seconds, rate=50):
    """Tallies as a contest has them, a minute's blocks in one transaction: how many, and the CPU to write them [s]."""
    book = Book(path)
    book.write([STRETCH, told()])
    spent_s, rng, ms, n = 0.0, np.random.default_rng(48), np.arange(rate) * (1000 // rate), 60 * rate
    place = np.arange(n)
    for minute in range(seconds // 60):
        keyed = (place // (8 * rate)) % 2 == minute % 2
        forward = np.where(keyed, 33_000 + 2000 * np.sin(place / 97.0), 5.0) + rng.normal(0.0, 0.8, n)
        reflected = np.where(keyed, 5000 + 2500 * np.sin(place / 41.0), 5.0) + rng.normal(0.0, 0.8, n)
        pairs = np.rint(np.maximum([forward, reflected], 0.0)).reshape(2, 60, rate)
        rows = []
        for second in range(60):
            at_ms = 1000 * (60 * minute + second) + ms
            made = Tallies.of(np.arange(rate) + second * rate, at_ms, pairs[0, second], pairs[1, second])
            rows.append(Block([Timed(made, START_US + at_ms * 1000)], START_US))
        began_s = time.process_time()
        book.write(rows)
        spent_s += time.process_time() - began_s
    book.close()
    return seconds // 60 * n, spent_s
