"""The bridge's clock: device milliseconds in UTC, whatever delays, wraps, resets and drifts."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from bridgeio.clock import DeviceClock

START_S = 1_780_000_000.0


def one(clock, ms, arrival_s):
    """UTC of a single frame, against the start of the test [s]."""
    return float(clock.utc(np.array([ms], dtype=np.uint32), START_S + arrival_s)[0]) - START_S


def block(clock, ms, arrival_s):
    """UTC of frames that came together, against the start of the test [s]."""
    return clock.utc(np.array(ms, dtype=np.uint32), START_S + arrival_s) - START_S


def test_first_frame_is_dated_at_its_arrival():
    """With nothing else known, the delay is taken as none."""
    assert one(DeviceClock(), 123456, 7.0) == pytest.approx(7.0, abs=1e-6)


def test_spacing_within_a_block_is_the_bridges():
    """Frames that came together are apart by their own milliseconds, the last one at the arrival."""
    assert block(DeviceClock(), [1000, 1010, 1025], 7.0) == pytest.approx([6.975, 6.985, 7.0], abs=1e-6)


@given(st.lists(st.floats(0.0, 2.0), min_size=1, max_size=60))
def test_delays_only_ever_come_off(delays_s):
    """Times are the true ones plus the smallest delay so far: a stalled arrival moves no time."""
    clock, least = DeviceClock(), np.inf
    for number, delay_s in enumerate(delays_s):
        least = min(least, delay_s)
        true_s = 0.5 * number
        assert one(clock, 5000 + 500 * number, true_s + delay_s) == pytest.approx(true_s + least, abs=1e-5)


def test_delay_is_forgotten_after_a_minute():
    """A lucky arrival counts for a minute; then the next best one does, so that a drifting clock is followed."""
    clock = DeviceClock()
    assert one(clock, 0, 0.0) == pytest.approx(0.0, abs=1e-6)
    for second in range(1, 61):
        assert one(clock, 1000 * second, second + 0.05) == pytest.approx(second, abs=1e-5)
    assert one(clock, 61_000, 61.05) == pytest.approx(61.05, abs=1e-5)


@pytest.mark.parametrize("ppm", [-200, 200])
def test_clock_that_runs_off_stays_within_50_ms(ppm):
    """A bridge's clock 200 ppm off is dated within 50 ms over an hour."""
    clock = DeviceClock()
    for second in range(3600):
        ms = round(1000.0 * second * (1.0 + ppm * 1e-6))
        assert abs(one(clock, ms, second + 0.002) - second) < 0.05


def test_milliseconds_go_round_after_49_days():
    """Where u32 milliseconds wrap, between blocks or within one, time goes on evenly."""
    clock, top = DeviceClock(), 2**32
    assert one(clock, top - 20, 0.0) == pytest.approx(0.0, abs=1e-6)
    assert block(clock, [top - 10, 0, 10], 0.03) == pytest.approx([0.01, 0.02, 0.03], abs=1e-6)
    assert one(clock, 20, 0.04) == pytest.approx(0.04, abs=1e-6)


def test_reset_starts_afresh():
    """Milliseconds that fall are a bridge that has started again: the delay of before no longer counts."""
    clock = DeviceClock()
    one(clock, 100_000, 0.0)
    assert one(clock, 100_500, 0.7) == pytest.approx(0.5, abs=1e-6)
    assert one(clock, 30, 3.0) == pytest.approx(3.0, abs=1e-6)
    assert one(clock, 40, 3.2) == pytest.approx(3.01, abs=1e-6)


def test_reset_within_a_block_dates_both_sides():
    """Frames before a reset keep the old time though they came with those after it."""
    clock = DeviceClock()
    one(clock, 100_000, 0.0)
    assert block(clock, [100_010, 100_020, 5, 15], 0.5) == pytest.approx([0.01, 0.02, 0.49, 0.5], abs=1e-6)


def test_restart_forgets():
    """After a restart the next frame is dated at its arrival, though its milliseconds go on."""
    clock = DeviceClock()
    one(clock, 1000, 0.0)
    clock.restart()
    assert one(clock, 1010, 5.0) == pytest.approx(5.0, abs=1e-6)


@pytest.mark.parametrize("step_s", [3600.0, 100.0, -3600.0])
def test_our_clock_set_anew_is_followed(step_s):
    """When our own clock is set forward by more than a minute, or back, times follow it at once."""
    clock = DeviceClock()
    for second in range(100):
        one(clock, 1000 * second, second)
    assert one(clock, 100_000, 100.0 + step_s) == pytest.approx(100.0 + step_s, abs=1e-5)


def test_memory_is_bounded():
    """A thousand frames a second, each in a read of its own, for ten minutes leave a minute of minima."""
    clock = DeviceClock()
    for number in range(0, 600_000, 50):
        one(clock, number, number / 1000.0)
    assert len(clock._minima) <= 61


@given(st.lists(st.tuples(st.integers(0, 2**32 - 1), st.floats(0.0, 1e9)), min_size=1, max_size=30))
def test_any_milliseconds_give_finite_times(frames):
    """Whatever milliseconds a damaged line claims, times are finite and no later than their arrival."""
    clock, arrival_s = DeviceClock(), 0.0
    for ms, wait_s in frames:
        arrival_s += wait_s % 100.0
        assert one(clock, ms, arrival_s) <= arrival_s + 1e-5
