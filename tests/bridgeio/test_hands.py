"""Hands at the simulated bench: the key, the band, the loads and the wattmeter."""

import numpy as np
import pytest

from bridgeio.frames import Conditions, Tallies
from bridgeio.receiver import Receiver
from bridgeio.simulator import bench
from bridgeio.simulator.hands import Hands
from bridgeio.simulator.source import SimulatedSource

MAIN_HZ = 14.1e6


class Clock:
    """Time that passes while somebody sleeps."""

    now_s = 0.0

    def __call__(self):
        return self.now_s

    def sleep(self, seconds):
        self.now_s += seconds


def opened():
    """A source with hands at it, its receiver, and its clock."""
    clock = Clock()
    source = SimulatedSource("", clock, clock.sleep)
    hands = source.at_the_bench()
    source.open()
    return source, Receiver(), hands, clock


def mean(source, receiver, clock, seconds):
    """Mean counts of both channels over the last half of so many seconds, and the last conditions frame."""
    until, forward, reflected, told = clock.now_s + seconds, [], [], None
    while clock.now_s < until:
        for item in receiver.feed(source.read()):
            if isinstance(item, Tallies) and clock.now_s > until - seconds / 2:
                forward += item.forward.tolist()
                reflected += item.reflected.tolist()
            told = item if isinstance(item, Conditions) else told
    return np.mean(forward), np.mean(reflected), told


def test_key_and_setup_reach_the_counts():
    """Key up gives the dark counts, key down the step's own as the simulated bench takes it, up the dark ones again."""
    source, receiver, hands, clock = opened()
    dark = mean(source, receiver, clock, 1.0)
    hands.set_up("power", MAIN_HZ, 10.0)
    assert hands.wattmeter_w is None
    still = mean(source, receiver, clock, 1.0)
    hands.key(True)
    lit = mean(source, receiver, clock, 2.0)
    hands.key(False)
    after = mean(source, receiver, clock, 1.0)
    steps = bench.bench_steps()
    theirs = next(s for s in steps if s.kind == "power" and s.frequency_hz == MAIN_HZ and 9.0 < s.power_w < 11.0)
    assert dark[:2] == pytest.approx((steps[0].forward, steps[0].reflected), abs=2.5)
    assert still[:2] == pytest.approx(dark[:2], abs=2.5)
    assert lit[:2] == pytest.approx((theirs.forward, theirs.reflected), abs=3.0)
    assert after[:2] == pytest.approx(dark[:2], abs=2.5)


def test_board_tells_the_band_the_hands_have_set():
    """The frequency in the conditions frame follows the step, one frame later at most."""
    source, receiver, hands, clock = opened()
    assert mean(source, receiver, clock, 1.2)[2].frequency_hz == 14_100_000
    hands.set_up("power", 7.1e6, 1.0)
    assert mean(source, receiver, clock, 1.2)[2].frequency_hz == 7_100_000


def test_wattmeter_reads_a_little_high_and_not_always_the_same():
    """Within its 5 % of what the transmitter gives, high on the mean, and only while the key is down."""
    hands = Hands(MAIN_HZ, 1)
    said = []
    hands.key(True)
    for _ in range(50):
        hands.set_up("power", MAIN_HZ, 10.0)
        said.append(hands.wattmeter_w)
    assert all(9.5 < watts < 10.5 for watts in said)
    assert 10.1 < np.mean(said) < 10.3
    assert len(set(said)) > 10


@pytest.mark.parametrize("load", ["25", "75", "open", "short", "30+20j"])
def test_any_load_can_be_made(load):
    """Loads of the drawer and others give more reflected wave than the dummy does."""
    chance = np.random.default_rng(1)
    dummy = bench.set_up("power", MAIN_HZ, 1.0, None, 0.0, chance)
    made = bench.set_up("load", MAIN_HZ, 1.0, load, 0.0, chance)
    assert made.ports_v[1] > 3.0 * dummy.ports_v[1]
    assert made.power_w is None


def test_a_load_that_is_none_is_refused():
    """A word that is no load raises, and nothing else is connected."""
    with pytest.raises(ValueError, match="complex"):
        Hands(MAIN_HZ, 1).set_up("load", MAIN_HZ, 1.0, "cat")
