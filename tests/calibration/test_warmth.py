"""Temperature of the box against published and independently solved figures."""

from dataclasses import replace

import numpy as np
import pytest

from calibration.bridge import Band, Bridge
from calibration.detector import Diode, detected_v, peak_v
from calibration.flags import names
from calibration.laws import DiodeLaw
from calibration.meter import Meter
from calibration.warmth import DIODES, DiodeKind, saturation_ratio, warmed

# Saturation current of a Schottky part (2.2e-8 A at 25 C, n 1.08, Eg 0.69 eV, XTI 2: Hewlett-Packard's RF diode SPICE
# page) by the SPICE model's equation, worked out apart.
SATURATION = {-10: 6.3918e-10, 0: 1.9212e-9, 40: 7.9286e-8, 60: 3.6835e-7}
# Power error in dB where the 25 C law is used at another temperature, RL 100 kohm, by RF volts at the diode.
PEAKS = (0.03, 0.1, 0.3, 1.0, 3.0, 10.0)
ERRORS_DB = {10: (-5.19, -3.36, -0.94, -0.23, -0.07, -0.02), 40: (3.96, 2.28, 0.81, 0.22, 0.07, 0.02)}
PART = DiodeKind(0.69, 2.0, 1.08)
LOAD_OHM, PER_VOLT = 100e3, 1000.0


def diode_at(celsius):
    """The part at a temperature."""
    return Diode(2.2e-8 * saturation_ratio(PART, 25.0, celsius), 1.08)


def law_at_25():
    """Its law in counts at 25 C, 1000 counts a volt."""
    nvt = 1.08 * 25.692579e-3
    return DiodeLaw(5.0, nvt * PER_VOLT, LOAD_OHM * 2.2e-8 / nvt), 1.0 / nvt


@pytest.mark.parametrize(("celsius", "ampere"), SATURATION.items())
def test_saturation_current_over_temperature(celsius, ampere):
    """The published saturation currents come out within their digits."""
    assert 2.2e-8 * saturation_ratio(PART, 25.0, celsius) == pytest.approx(ampere, rel=1e-4)


@pytest.mark.parametrize("celsius", ERRORS_DB)
def test_cold_law_on_a_warm_box_is_off_by_the_published_figures(celsius):
    """What a meter without temperature would be off by: up to 5 dB at 30 mV, 0.02 dB at 10 V."""
    volts = detected_v(PEAKS, diode_at(celsius), LOAD_OHM, celsius + 273.15)
    seen = peak_v(volts, diode_at(25.0), LOAD_OHM)
    assert 20 * np.log10(seen / np.array(PEAKS)) == pytest.approx(ERRORS_DB[celsius], abs=0.006)


@pytest.mark.parametrize("celsius", [-10.0, 10.0, 40.0, 60.0])
def test_warmed_law_is_the_circuit_at_that_temperature(celsius):
    """The law moved to another temperature equals the circuit solved there."""
    law, gain = law_at_25()
    warm, factor = warmed(law, PART, 25.0, celsius)
    counts = 5.0 + PER_VOLT * detected_v(PEAKS, diode_at(celsius), LOAD_OHM, celsius + 273.15)
    assert np.sqrt(warm.square(counts)) / (gain * factor) == pytest.approx(PEAKS, rel=1e-8)


def bridge(diode):
    """A leak-free bridge whose detectors are that part: gain so that 100 W are 4 V."""
    law, per_volt = law_at_25()
    gain = 0.4 * per_volt
    bands = (Band(14.1e6, gain, gain, 0.0, 0.0, 0.0, 0.0),)
    return Bridge("warm", 65520, law, law, bands, reference_pct=0.0, forward_sd=0.05, reflected_sd=0.05, diode=diode)


def warm_counts(watts, celsius):
    """Counts of powers [W] in a box at that temperature."""
    return 5.0 + PER_VOLT * detected_v(0.4 * np.sqrt(watts), diode_at(celsius), LOAD_OHM, celsius + 273.15)


WATTS = np.geomspace(0.1, 100.0, 25)


def test_named_diode_reads_right_in_a_warm_box():
    """Bench at 25, reading at 45 degrees with the diode named: within 2 % above 0.1 W, SWR 2 right."""
    readings = Meter(bridge(PART)).read(
        warm_counts(WATTS, 45.0), warm_counts(WATTS / 9, 45.0), frequency_hz=14.1e6, temperature_c=45.0
    )
    assert readings.forward_w == pytest.approx(WATTS, rel=0.02)
    assert readings.swr == pytest.approx(np.full(25, 2.0), abs=0.02)


def test_unnamed_diode_widens_until_it_holds_the_truth():
    """Without a name the interval spans all kinds of diode: it holds the truth and is wider than with one."""
    nameless, named = (
        Meter(bridge(kind)).read(
            warm_counts(WATTS, 45.0), warm_counts(WATTS / 9, 45.0), frequency_hz=14.1e6, temperature_c=45.0
        )
        for kind in (None, DIODES["schottky"])
    )
    assert ((nameless.forward_low_w <= WATTS) & (nameless.forward_high_w >= WATTS)).all()
    assert ((nameless.swr_low <= 2.0) & (nameless.swr_high >= 2.0)).all()
    assert (nameless.forward_high_w - nameless.forward_low_w > named.forward_high_w - named.forward_low_w).all()


def test_temperature_of_the_bench_changes_nothing():
    """At the bench's own temperature, told or not, the reading is the same."""
    meter = Meter(bridge(PART))
    told = meter.read(warm_counts(WATTS, 25.0), warm_counts(WATTS / 9, 25.0), frequency_hz=14.1e6, temperature_c=25.3)
    untold = meter.read(warm_counts(WATTS, 25.0), warm_counts(WATTS / 9, 25.0), frequency_hz=14.1e6)
    assert told.forward_w.tolist() == untold.forward_w.tolist()


def test_bench_that_spans_temperatures_flags_a_reading_without_one():
    """A bench over more than 10 K has no one temperature to fall back on: `no-temperature`."""
    wide = replace(bridge(PART), temperature_span_c=20.0)
    reading = Meter(wide).read(warm_counts(10.0, 25.0), warm_counts(1.0, 25.0), frequency_hz=14.1e6)
    assert "no-temperature" in names(reading.flags[0])
    told = Meter(wide).read(warm_counts(10.0, 25.0), warm_counts(1.0, 25.0), frequency_hz=14.1e6, temperature_c=30.0)
    assert "no-temperature" not in names(told.flags[0])
