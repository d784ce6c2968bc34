"""The meter: intervals that hold the truth over the circuit-simulated loads, and every flag."""

import numpy as np
import pytest

from calibration.bridge import Band, Bridge, band_at
from calibration.flags import names
from calibration.laws import DiodeLaw
from calibration.meter import Meter, counting_sd, uncalibrated
from calibration.reflection import swr_from_rho
from tests import shed


def plain_bridge(bands=(14.1e6,), **band):
    """A 12-bit bridge without leakage unless told; gain 17 reads about 100 W at full scale."""
    made = {"directivity": 0.0, "directivity_limit": 0.0, "forward_leak": 0.0, "forward_leak_limit": 0.0} | band
    law = DiodeLaw(5.0, 20.0, 2.0)
    rows = tuple(Band(hz, 17.0, 17.0, **made) for hz in bands)
    return Bridge("plain", 4095, law, law, rows, forward_sd=0.8, reflected_sd=0.8, reference_pct=5.0)


def counts(watts, law=None, gain=17.0):
    """Counts of a power [W] by the law."""
    return (law or DiodeLaw(5.0, 20.0, 2.0)).counts(np.asarray(watts) * gain**2)


@pytest.mark.parametrize("bits", [12, 16])
def test_intervals_hold_the_truth_over_simulated_loads(bits):
    """Of 150 loads, 0 to 0.8 and 0.05 to 120 W, SWR and forward power lie inside at least 95 % of the intervals."""
    loads = shed.table("shed_loads")
    readings = Meter(shed.fitted(bits).bridge).read(
        loads[f"forward_{bits}"], loads[f"reflected_{bits}"], frequency_hz=loads["frequency_hz"], samples=50
    )
    high = np.where(np.isnan(readings.swr_high), np.inf, readings.swr_high)
    inside = (readings.swr_low <= loads["swr"]) & (loads["swr"] <= high)
    assert inside.mean() >= 0.95
    forward = (readings.forward_low_w <= loads["forward_w"]) & (loads["forward_w"] <= readings.forward_high_w)
    assert forward.mean() >= 0.95
    net = (readings.net_low_w <= loads["net_w"]) & (loads["net_w"] <= readings.net_high_w)
    assert net.mean() >= 0.95
    # An interval that is always wide would hold everything: half of them must be useful.
    assert np.nanmedian(readings.rho_high - readings.rho_low) < 0.15
    assert np.sqrt(np.nanmean((readings.rho - loads["rho"]) ** 2)) < 0.03


def test_columns_agree_with_each_other():
    """Net is forward less reflected, reflected is forward times rho squared, and each lies in its interval."""
    loads = shed.table("shed_loads")
    r = Meter(shed.fitted(12).bridge).read(
        loads["forward_12"], loads["reflected_12"], frequency_hz=loads["frequency_hz"], samples=50
    )
    known = ~np.isnan(r.rho)
    assert r.net_w == pytest.approx(r.forward_w - r.reflected_w)
    assert r.reflected_w[known] == pytest.approx((r.forward_w * r.rho**2)[known])
    for name in ("forward", "reflected", "net"):
        low, value, high = (getattr(r, f"{name}{end}_w") for end in ("_low", "", "_high"))
        assert (low <= value + 1e-9).all()
        assert (value <= high + 1e-9).all()
    assert (r.rho_low[known] <= r.rho[known]).all()
    assert (r.rho[known] <= r.rho_high[known]).all()
    assert r.swr == pytest.approx(swr_from_rho(r.rho), nan_ok=True)


def test_perfect_bridge_reads_what_was_put_in():
    """Without leakage the reading is the truth: 50 W forward, SWR 2, 44.4 W net."""
    r = Meter(plain_bridge()).read(counts(50.0), counts(50.0 / 9), frequency_hz=14.1e6, samples=1000)
    assert r.forward_w[0] == pytest.approx(50.0, rel=1e-4)
    assert r.swr[0] == pytest.approx(2.0, rel=1e-3)
    assert r.net_w[0] == pytest.approx(44.44, rel=1e-3)
    assert r.return_loss_db[0] == pytest.approx(9.542, abs=0.01)
    assert r.forward_low_w[0] == pytest.approx(47.5, rel=2e-3)  # the wattmeter's 5 %
    assert names(r.flags[0]) == ()


def test_no_carrier_reads_zero_and_a_bound():
    """Forward within 4 sd of dark: 0 W forward with an upper bound, SWR unknown."""
    r = Meter(plain_bridge()).read(7.0, 5.0, frequency_hz=14.1e6)
    assert names(r.flags[0]) == ("no-carrier",)
    assert r.forward_w[0] == 0.0
    assert r.forward_low_w[0] == 0.0
    assert 0.0 < r.forward_high_w[0] < 0.01
    assert r.net_w[0] == 0.0
    assert np.isnan([r.swr[0], r.rho[0], r.swr_low[0], r.swr_high[0], r.return_loss_db[0]]).all()


def test_below_reading_bounds_swr_from_above():
    """Reflected within 3 sd of dark: SWR unknown, at least 1, at most a bound; never 1.00."""
    r = Meter(plain_bridge()).read(counts(10.0), 6.0, frequency_hz=14.1e6)
    assert names(r.flags[0]) == ("below-reading",)
    assert np.isnan([r.swr[0], r.rho[0], r.return_loss_db[0]]).all()
    assert r.swr_low[0] == 1.0
    assert 1.0 < r.swr_high[0] < 1.3
    assert r.net_high_w[0] >= r.net_w[0] > 0


def test_over_unity_keeps_its_rho_and_has_no_upper_bound():
    """More back than out (legal near an open): rho as estimated, SWR unknown above."""
    bridge = plain_bridge(directivity=0.05, directivity_limit=0.05, forward_leak=0.05, forward_leak_limit=0.05)
    r = Meter(bridge).read(counts(10.0), counts(10.5), frequency_hz=14.1e6)
    assert r.rho[0] > 1.0
    assert np.isnan([r.swr[0], r.swr_high[0]]).all()
    assert r.swr_low[0] > 8
    assert "over-unity" in names(r.flags[0])


def test_clipped_detectors_are_lower_bounds():
    """At full scale or by the frame's flag: forward has no upper bound, reflected leaves only a lowest SWR."""
    meter = Meter(plain_bridge())
    by_count = meter.read(4094.0, counts(5.0), frequency_hz=14.1e6)
    by_flag = meter.read(counts(40.0), counts(5.0), frequency_hz=14.1e6, wire_flags=1)
    for r in (by_count, by_flag):
        assert names(r.flags[0]) == ("clipped",)
        assert np.isnan([r.forward_high_w[0], r.net_high_w[0]]).all()
        assert r.rho_low[0] == 0.0
        assert r.forward_low_w[0] > 30.0
    reflected = meter.read(counts(50.0), counts(40.0), frequency_hz=14.1e6, wire_flags=2)
    assert np.isnan([reflected.swr[0], reflected.swr_high[0]]).all()
    assert reflected.swr_low[0] > 10


def test_frequency_decides_the_band():
    """Within 10 % of a band it is read by it; beyond, counts only; unknown with several bands, the hull of all."""
    one = Meter(plain_bridge())
    two = Meter(plain_bridge(bands=(7.1e6, 14.1e6), directivity=0.03, directivity_limit=0.05))
    forward, reflected = counts(10.0), counts(1.0)
    assert names(one.read(forward, reflected, frequency_hz=15.4e6).flags[0]) == ()
    away = one.read(forward, reflected, frequency_hz=18.1e6)
    assert names(away.flags[0]) == ("uncalibrated",)
    assert np.isnan([away.forward_w[0], away.swr[0], away.forward_high_w[0], away.swr_high[0], away.net_low_w[0]]).all()
    assert names(one.read(forward, reflected).flags[0]) == ()
    hull = two.read(forward, reflected)
    assert names(hull.flags[0]) == ("band-unknown",)
    for hz in (7.1e6, 14.1e6):
        known = two.read(forward, reflected, frequency_hz=hz)
        assert hull.swr_low[0] <= known.swr_low[0]
        assert hull.swr_high[0] >= known.swr_high[0]
    assert band_at(7.0e6, two.bridge.bands) is two.bridge.bands[0]
    assert band_at(6.0e6, two.bridge.bands) is None
    assert band_at(16.0e6, two.bridge.bands) is None


def test_one_call_equals_one_by_one():
    """An array is read like its members, mixed frequencies and all; a member taken out is the same reading."""
    loads = shed.table("shed_loads")
    meter = Meter(shed.fitted(12).bridge)
    every = meter.read(loads["forward_12"], loads["reflected_12"], frequency_hz=loads["frequency_hz"], samples=50)
    for place in (0, 7, 88):
        one = meter.read(
            loads["forward_12"][place],
            loads["reflected_12"][place],
            frequency_hz=loads["frequency_hz"][place],
            samples=50,
        )
        for name in ("forward_w", "rho", "swr_low", "swr_high", "forward_high_w", "net_low_w"):
            assert getattr(one, name)[0] == pytest.approx(getattr(every, name)[place], nan_ok=True)
            assert getattr(every[place], name)[0] == pytest.approx(getattr(every, name)[place], nan_ok=True)
    with pytest.raises(IndexError):
        every[len(every)]


def test_noise_averages_away_in_power():
    """Means of counts around dark give power around zero, not a rectified bias (negative power is kept)."""
    noise = 5.0 + 0.8 * np.random.default_rng(3).normal(size=20000)
    law = DiodeLaw(5.0, 20.0, 2.0)
    watts = law.square(noise) / 17.0**2
    assert abs(watts.mean()) < 4 * watts.std() / np.sqrt(len(watts)) + 1e-5
    assert (watts < 0).mean() == pytest.approx(0.5, abs=0.02)


def test_uncalibrated_readings_are_counts_alone():
    """Where no calibration may be used there are counts and flags, and everything else is unknown."""
    r = uncalibrated([100.0, 200.0], [5.0, 6.0], checked=False, simulated=True)
    assert names(r.flags[1]) == ("uncalibrated", "unchecked", "simulated")
    assert r.forward_counts.tolist() == [100.0, 200.0]
    for name in ("forward_w", "net_w", "swr", "swr_low", "forward_high_w", "reflected_high_w", "net_low_w"):
        assert np.isnan(getattr(r, name)).all(), name


def test_counting_sd_keeps_the_converters_steps():
    """A mean of many readings is no better than the steps allow where the noise is too small to dither them."""
    assert counting_sd(0.8, 10000) == pytest.approx(0.008, rel=0.02)
    assert counting_sd(0.0, 10000) == pytest.approx(1 / np.pi)


def test_between_bands_a_reading_is_made_of_both_and_wider():
    """Between two bands the gain lies between, limits are the larger, the reading is flagged and no narrower."""
    low = Band(7.0e6, 16.0, 16.5, 0.02, 0.03, 0.02, 0.03)
    high = Band(14.0e6, 18.0, 18.0, 0.04, 0.05, 0.01, 0.02)
    law = DiodeLaw(5.0, 20.0, 2.0)
    meter = Meter(Bridge("two", 4095, law, law, (low, high), forward_sd=0.8, reflected_sd=0.8))
    between = band_at(10.0e6, (low, high))
    assert between.interpolated
    assert 16.0 < between.gain_forward < 18.0
    assert (between.directivity_limit, between.forward_leak_limit) == (0.05, 0.03)
    assert np.log(between.gain_forward) == pytest.approx(
        np.interp(np.log(10.0), np.log([7.0, 14.0]), np.log([16.0, 18.0]))
    )
    frequencies = np.array([7.0e6, 10.0e6, 14.0e6, 10.0e6, 20.0e6])
    readings = meter.read(np.full(5, 900.0), np.full(5, 300.0), frequency_hz=frequencies)
    flagged = [names(bits) for bits in readings.flags]
    assert flagged == [(), ("interpolated",), (), ("interpolated",), ("uncalibrated",)]
    assert readings.swr_low[1] < min(readings.swr_low[0], readings.swr_low[2])
    assert readings.forward_low_w[1] < readings.forward_w[2] < readings.forward_high_w[1]


def test_swapped_needs_two_readings_in_a_row():
    """More back than even an open returns, twice in a row, also across two calls: `swapped`, never by one alone."""
    leak = {"directivity": 0.03, "directivity_limit": 0.05, "forward_leak": 0.02, "forward_leak_limit": 0.04}
    meter = Meter(plain_bridge(**leak))
    forward, reflected = counts(10.0), counts(1.0)
    turned = meter.read([forward, reflected, reflected], [reflected, forward, forward], frequency_hz=14.1e6)
    assert ["swapped" in names(bits) for bits in turned.flags] == [False, False, True]
    one = meter.read(reflected, forward, frequency_hz=14.1e6)
    assert "swapped" not in names(one.flags[0])
    two = meter.read(reflected, forward, frequency_hz=14.1e6, after=one)
    assert "swapped" in names(two.flags[0])


def test_hard_bound_is_never_narrower():
    """With the same parts in both, the hard bound holds the 95 % interval, for SWR and for power."""
    loads = shed.table("shed_loads")
    meter = Meter(shed.fitted(12).bridge)
    soft, hard = (
        meter.read(
            loads["forward_12"], loads["reflected_12"], frequency_hz=loads["frequency_hz"], samples=50, hard=hard
        )
        for hard in (False, True)
    )
    assert (hard.rho_low <= soft.rho_low + 1e-9).all()
    assert (hard.rho_high >= soft.rho_high - 1e-9).all()
    assert (hard.forward_low_w <= soft.forward_low_w + 1e-9).all()
    assert (hard.forward_high_w >= soft.forward_high_w - 1e-9).all()


def test_moved_dark_count_widens_and_a_new_zero_corrects():
    """A dark count moved by 4 counts: flagged, the interval holds the truth; as a new zero it reads right."""
    meter = Meter(plain_bridge())
    forward, reflected = counts(10.0) + 4.0, counts(0.01) + 4.0
    plain = meter.read(forward, reflected, frequency_hz=14.1e6, samples=200)
    told = meter.read(forward, reflected, frequency_hz=14.1e6, samples=200, moved_zero=(9.0, 9.0))
    assert "dark-moved" in names(told.flags[0])
    truth = 10 ** (-30 / 20)
    assert not plain.rho_low[0] <= truth <= plain.rho_high[0]
    assert told.rho_low[0] <= truth <= told.rho_high[0]
    assert told.rho[0] == plain.rho[0]
    live = meter.read(forward, reflected, frequency_hz=14.1e6, samples=200, zero=(9.0, 9.0))
    assert live.rho[0] == pytest.approx(truth, rel=1e-3)
