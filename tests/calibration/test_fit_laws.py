"""Log and table laws by the same fit: a data-sheet detector with ripple, and a diode treated as unknown."""

from dataclasses import replace

import numpy as np
import pytest

from calibration.bench import BenchRatings, BenchStep
from calibration.errors import SheetError
from calibration.fit import fit
from calibration.flags import names
from calibration.laws import LogLaw
from calibration.meter import Meter

HZ, D, C = 14.2e6, 0.03, 0.02
POWERS_W = 0.05 * 10 ** (0.3 * np.arange(12))  # twelve exact powers, 3 dB apart
RATINGS = BenchRatings(5.0, None, 36.0, 1.0)


def log_counts(watts, phase, period_db=14.0):
    """Counts of a logarithmic detector behind a 40 dB tap, 16 bit on 2.5 V.

    25 mV/dB and -84 dBm (AD8307 data sheet), a floor at -75 dBm, and 0.3 dB of ripple over the level.
    """
    dbm = 10 * np.log10(1e3 * np.asarray(watts, dtype=float) * 1e-4 + 10**-7.5)
    millivolts = 25 * (dbm + 84) + 25 * 0.3 * np.sin(2 * np.pi * dbm / period_db + phase)
    return millivolts / 2500 * 65520


def log_bench(phase):
    """Dark, powers, reversed powers and four loads, all exact."""

    def step(kind, forward_w, reflected_w, **told):
        counts = log_counts(forward_w, phase), log_counts(reflected_w, phase + 0.7)
        return BenchStep(kind, *map(float, counts), forward_sd=3.0, reflected_sd=3.0, samples=200, **told)

    steps = [step("dark", 0.0, 0.0)]
    steps += [step("power", p, p * D**2, frequency_hz=HZ, power_w=float(p)) for p in POWERS_W]
    steps += [step("reversed", p * C**2, p * 10**0.005, frequency_hz=HZ, power_w=float(p)) for p in POWERS_W]
    for ohm in (25.0, 100.0, 16.67, 150.0):
        rho = (ohm - 50) / (ohm + 50)
        waves = 5 * abs(1 + C * rho) ** 2, 5 * abs(rho + D) ** 2
        steps.append(step("load", *waves, frequency_hz=HZ, load=f"{ohm:g}"))
    return steps


def worst_db(bridge, phase):
    """Largest error of forward power inside the span [dB]."""
    watts = np.geomspace(POWERS_W[0], POWERS_W[-1], 400)
    readings = Meter(bridge).read(log_counts(watts, phase), log_counts(watts * 0.04, phase + 0.7), frequency_hz=HZ)
    return float(np.abs(10 * np.log10(readings.forward_w / watts)).max())


@pytest.mark.parametrize("phase", [0.0, 1.6, 3.2, 4.8])
def test_log_law_follows_ripple(phase):
    """+-0.3 dB of ripple with a period of 14 dB is followed within 0.1 dB, better than by the straight line."""
    bridge = fit(log_bench(phase), name="log", full_scale=65520, detector="log", ratings=RATINGS).bridge
    corrected = worst_db(bridge, phase)
    law = bridge.forward_law
    straight = worst_db(replace(bridge, forward_law=LogLaw(law.offset, law.slope_per_db)), phase)
    line = np.polyfit(log_counts(POWERS_W, phase), 10 * np.log10(POWERS_W), 1)
    dense = np.geomspace(POWERS_W[0], POWERS_W[-1], 400)
    best_line = np.abs(np.polyval(line, log_counts(dense, phase)) - 10 * np.log10(dense)).max()
    assert corrected < 0.1
    assert corrected < min(straight, best_line) / 2


def test_log_bridge_reads_swr_and_power():
    """With the log law fitted, SWR 1.5 and its power lie inside their intervals over the whole span."""
    bridge = fit(log_bench(0.8), name="log", full_scale=65520, detector="log", ratings=RATINGS).bridge
    watts = np.geomspace(0.1, 90.0, 40)
    angles = np.linspace(0, 6, 40)
    gamma = 0.2 * np.exp(1j * angles)
    readings = Meter(bridge).read(
        log_counts(watts * abs(1 + C * gamma) ** 2, 0.8), log_counts(watts * abs(gamma + D) ** 2, 1.5), frequency_hz=HZ
    )
    assert ((readings.swr_low <= 1.5) & (readings.swr_high >= 1.5)).all()
    assert ((readings.forward_low_w <= watts) & (readings.forward_high_w >= watts)).all()
    assert np.median(readings.swr_high - readings.swr_low) < 0.5


def test_log_law_without_enough_powers_stays_a_line_and_widens():
    """With four powers there is no correction, and the interval allows for what the line does not follow."""
    steps = [s for s in log_bench(0.0) if s.kind in ("dark", "load") or s.power_w in POWERS_W[[0, 4, 7, 11]]]
    few = fit(steps, name="log", full_scale=65520, detector="log", ratings=RATINGS).bridge
    many = fit(log_bench(0.0), name="log", full_scale=65520, detector="log", ratings=RATINGS).bridge
    assert not len(few.forward_law.knots)
    reads = [
        Meter(replace(bridge, reference_pct=0.0)).read(log_counts(5.0, 0.0), log_counts(0.2, 0.7), frequency_hz=HZ)
        for bridge in (few, many)
    ]
    widths = [float(r.forward_high_w[0] - r.forward_low_w[0]) for r in reads]
    assert widths[0] > 2 * widths[1]
    assert reads[0].forward_low_w[0] < 5.0 < reads[0].forward_high_w[0]


def test_table_law_is_refused_outside_its_span():
    """A table reads within its powers; above them it is counts only, below them reflected is only bounded."""
    bridge = fit(log_bench(0.0), name="table", full_scale=65520, detector="table", ratings=RATINGS).bridge
    assert worst_db(bridge, 0.0) < 0.1
    meter = Meter(bridge)
    above = meter.read(log_counts(3 * POWERS_W[-1], 0.0), log_counts(1.0, 0.7), frequency_hz=HZ)
    assert names(above.flags[0]) == ("uncalibrated",)
    assert np.isnan([above.forward_w[0], above.swr[0], above.forward_high_w[0]]).all()
    below = meter.read(log_counts(10.0, 0.0), log_counts(0.01, 0.7), frequency_hz=HZ)
    assert names(below.flags[0]) == ("below-reading",)
    assert np.isnan(below.swr[0])
    assert 1.05 < below.swr_high[0] < 1.4
    silent = meter.read(log_counts(0.0, 0.0), log_counts(0.0, 0.7), frequency_hz=HZ)
    assert names(silent.flags[0]) == ("no-carrier",)


def test_table_law_wants_its_own_reversed_steps():
    """Without four reversed steps the reflected detector has no table, and the fit says so."""
    steps = [s for s in log_bench(0.0) if s.kind != "reversed"]
    with pytest.raises(SheetError, match="reversed steps do not carry a table law: wanted at least 4"):
        fit(steps, name="table", full_scale=65520, detector="table", ratings=RATINGS)
