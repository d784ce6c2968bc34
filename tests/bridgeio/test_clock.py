"""The bridge's clock: device milliseconds in UTC, whatever delays, wraps, resets and drifts."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from bridgeio.clock import DeviceClock, utc_less_steady_s

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


@given(st.lists(st.floats(0.0, 2.0), min_size=1, max_size=9))
def test_delays_only_ever_come_off(delays_s):
    """At first times are the true ones plus the smallest delay so far: a stalled arrival moves no time."""
    clock, least = DeviceClock(), np.inf
    for number, delay_s in enumerate(delays_s):
        least = min(least, delay_s)
        true_s = 0.5 * number
        assert one(clock, 5000 + 500 * number, true_s + delay_s) == pytest.approx(true_s + least, abs=1e-5)


@given(st.lists(st.floats(0.0, 0.1), min_size=120, max_size=120))
def test_delays_of_any_kind_bound_the_error(delays_s):
    """Whatever delays of up to 100 ms do, a frame is dated no later than it came and no earlier than they allow."""
    clock = DeviceClock()
    for number, delay_s in enumerate(delays_s):
        true_s = 0.5 * number
        assert -0.1 <= one(clock, 500 * number, true_s + delay_s) - true_s <= delay_s + 1e-5


def test_stale_bytes_at_opening_are_forgotten():
    """What had waited two seconds in a buffer is dated late; the first fresh frame puts the line right at once."""
    clock = DeviceClock()
    one(clock, 1000, 2.0)
    assert one(clock, 3010, 2.01) == pytest.approx(2.01, abs=1e-6)
    for number in range(1, 90):
        assert one(clock, 3010 + 500 * number, 2.01 + 0.5 * number) == pytest.approx(2.01 + 0.5 * number, abs=1e-5)


def lumped(ppm, period_s, seed, seconds=90):
    """Frames of a clock `ppm` off that come in lumps of 16 ms: true times, device ms, arrivals [s]."""
    rng = np.random.default_rng(seed)
    true_s = rng.uniform(0.0, 1.0) + np.arange(seconds / period_s) * period_s / (1.0 + ppm * 1e-6)
    ms = np.floor((true_s - true_s[0]) * (1000.0 + ppm * 1e-3) + 1e-6) + 2**32 - 30_000
    return true_s, ms.astype(np.int64) % 2**32, np.ceil(true_s / 0.016) * 0.016


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize("period_s", [0.01, 0.1, 0.35])
@pytest.mark.parametrize("ppm", [-5000, -200, 0, 200, 5000])
def test_lumps_and_a_wrong_rate_stay_within_5_ms(ppm, period_s, seed):
    """After a minute frames are dated within 5 ms, and the rate is told, for lumps of 16 ms, a bad clock and a wrap."""
    clock, worst_s = DeviceClock(lambda: 0.0), 0.0
    for true_s, ms, arrival_s in zip(*lumped(ppm, period_s, seed), strict=True):
        error_s = clock.utc(np.array([ms], dtype=np.uint32), arrival_s)[0] - true_s
        if true_s > 60.0:
            worst_s = max(worst_s, abs(error_s))
    assert worst_s < 0.005
    assert clock.ppm == pytest.approx(ppm, abs=100)


def test_rate_is_told_after_half_a_minute():
    """A few seconds say nothing on the rate of a clock, and a bridge that starts anew is asked anew."""
    clock = DeviceClock()
    told = []
    for second in range(40):
        one(clock, 1001 * second, second)
        told.append(clock.ppm)
    assert told[20] is None
    assert told[39] == pytest.approx(1000, abs=5)
    one(clock, 3, 41.0)
    assert clock.ppm is None


@pytest.mark.parametrize("ppm", [-200, 200])
def test_clock_that_runs_off_is_followed(ppm):
    """A bridge's clock 200 ppm off is dated within 5 ms over an hour."""
    clock = DeviceClock()
    for second in range(3600):
        ms = round(1000.0 * second * (1.0 + ppm * 1e-6))
        assert abs(one(clock, ms, second + 0.002) - second) < 0.005


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


class OurClock:
    """UTC that can be set, over a clock that goes on; both in seconds."""

    def __init__(self):
        self.steady_s, self.offset_s = 500.0, START_S

    @property
    def utc_s(self):
        return self.steady_s + self.offset_s


@pytest.mark.parametrize("step_s", [0.1, -0.1, 3600.0, -3600.0, 1e5, -1e8])
def test_step_of_our_clock_moves_no_duration(step_s):
    """When our UTC is set, the step is told once, times follow at once, and device seconds go on evenly."""
    ours = OurClock()
    clock, spacings_s, told_s = DeviceClock(lambda: ours.offset_s), [], []
    for number in range(1200):
        if number == 700:
            ours.offset_s += step_s
        before_s = clock.device_s[-1:]
        utc = clock.utc(np.array([7000 + 100 * number], dtype=np.uint32), ours.utc_s + 0.003)
        assert utc[0] == pytest.approx(ours.utc_s + 0.003, abs=1e-6)
        spacings_s += (clock.device_s[-1] - before_s).tolist()
        told_s.append(clock.step_s)
        ours.steady_s += 0.1
    assert np.flatnonzero(told_s).tolist() == [700]
    assert told_s[700] == pytest.approx(step_s, abs=1e-6)
    assert spacings_s == pytest.approx([0.1] * len(spacings_s), abs=1e-9)


@pytest.mark.parametrize("step_s", [0.1, -0.1, 3600.0, -3600.0])
def test_frame_that_came_just_before_a_step_bends_nothing(step_s):
    """A frame whose arrival was noted before our UTC was set, and dated after it, does no harm to it or the next."""
    ours = OurClock()
    clock = DeviceClock(lambda: ours.offset_s)
    for number in range(300):
        arrival_s = ours.utc_s
        if number == 200:
            ours.offset_s += step_s
        utc = clock.utc(np.array([100 * number], dtype=np.uint32), arrival_s)
        assert utc[0] == pytest.approx(ours.utc_s, abs=1e-6)
        ours.steady_s += 0.1


def test_coarse_ticks_of_our_clock_are_no_steps():
    """A UTC read in ticks of 16 ms is not taken for one that is set, and times stay within two ticks."""
    ours = OurClock()
    clock = DeviceClock(lambda: np.floor(ours.utc_s / 0.016) * 0.016 - ours.steady_s)
    for number in range(2000):
        utc = clock.utc(np.array([37 * number], dtype=np.uint32), np.floor(ours.utc_s / 0.016) * 0.016)
        assert abs(utc[0] - ours.utc_s) < 0.032
        assert clock.step_s == 0.0
        ours.steady_s += 0.037


def test_offset_of_the_real_clocks_is_even():
    """UTC less the steady clock, read twice, is the same within a millisecond, and leads from one to the other."""
    readings = [utc_less_steady_s() for _ in range(50)]
    assert np.median(np.abs(np.diff(readings))) < 1e-3


def test_device_seconds_go_on_over_a_wrap():
    """Device seconds do not wrap with the milliseconds; with a reset they start anew."""
    clock, top = DeviceClock(), 2**32
    block(clock, [top - 10, 5], 0.0)
    assert np.diff(clock.device_s) == pytest.approx([0.015], abs=1e-6)
    block(clock, [6, 2], 0.1)
    assert clock.device_s == pytest.approx([top / 1000.0 + 0.006, 0.002], abs=1e-6)


def test_frozen_milliseconds_are_dated():
    """A bridge whose milliseconds stand still is dated no later than its frames come, and nothing fails."""
    clock = DeviceClock()
    for second in range(200):
        assert one(clock, 77, float(second)) <= second + 1e-5


def test_memory_is_bounded():
    """Twenty reads a second for ten minutes leave a minute of points."""
    clock = DeviceClock()
    for number in range(0, 600_000, 50):
        one(clock, number, number / 1000.0)
    assert len(clock._line._points) <= 62


@given(st.lists(st.tuples(st.integers(0, 2**32 - 1), st.floats(0.0, 1e9)), min_size=1, max_size=30))
def test_any_milliseconds_give_finite_times(frames):
    """Whatever milliseconds a damaged line claims, times are finite and no later than their arrival."""
    clock, arrival_s = DeviceClock(), 0.0
    for ms, wait_s in frames:
        arrival_s += wait_s % 100.0
        assert one(clock, ms, arrival_s) <= arrival_s + 1e-5
