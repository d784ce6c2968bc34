"""Units, frequencies as people write them, digits, flags."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from calibration import figures, flags, units
from calibration.errors import UnitError


@pytest.mark.parametrize(
    ("text", "hz"),
    [
        ("14.1M", 14100000.0),
        ("14100k", 14100000.0),
        ("14100000", 14100000.0),
        ("14_100_000", 14100000.0),
        ("14.1 MHz", 14100000.0),
        ("20m", 14175000.0),
        ("6M", 6000000.0),
        ("160m", 1900000.0),
        ("1.85M", 1850000.0),
    ],
)
def test_frequency_forms(text, hz):
    """All forms a person types are read; 20m is a band, 6M are megahertz."""
    assert units.frequency_hz(text) == pytest.approx(hz)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("14.1", "did you mean 14.1M or 14.1k"),
        ("23m", "bands known: 160m"),
        ("fast", "wanted like 14.1M"),
        ("-7M", "no frequency"),
    ],
)
def test_frequency_refused_in_words(text, words):
    """What is no frequency is refused with what was wanted and a near miss."""
    with pytest.raises(UnitError, match=words):
        units.frequency_hz(text)


@pytest.mark.parametrize(("hz", "name"), [(14.1e6, "20m"), (7.3e6, "40m"), (50.1e6, "6m"), (13.0e6, None)])
def test_band_name(hz, name):
    """A frequency is in its amateur band (ADIF band limits, open specification)."""
    assert units.band_name(hz) == name


def test_decibels_of_powers_and_waves():
    """A factor 100 is 20 dB of power and 40 dB of waves."""
    assert units.power_db(100.0) == pytest.approx(20.0)
    assert units.wave_db(100.0) == pytest.approx(40.0)
    assert units.wave_ratio(units.wave_db(0.03)) == pytest.approx(0.03)
    assert units.power_ratio(units.power_db(0.03)) == pytest.approx(0.03)


def test_power_from_volts():
    """15.811 V rms and 22.36 V peak across 50 ohm are 5 W (P = V^2/R; common practice)."""
    assert units.power_from_volts_w(15.8114, "rms", 50.0) == pytest.approx(5.0, rel=1e-4)
    assert units.power_from_volts_w(22.3607, "peak", 50.0) == pytest.approx(5.0, rel=1e-4)
    with pytest.raises(UnitError, match="'rms' or 'peak'"):
        units.power_from_volts_w(1.0, "avg", 50.0)


@pytest.mark.parametrize(
    ("value", "low", "high", "text"),
    [
        (1.4237, 1.36, 1.49, "1.42"),
        (47.93, 45.0, 51.0, "48"),
        (1.4237, 1.42, 1.43, "1.424"),
        (1234.0, 900.0, 1500.0, "1200"),
        (math.nan, 1.0, 2.0, "-"),
        (-0.0004, -0.1, 0.1, "0.0"),
    ],
)
def test_shown_digits_follow_the_interval(value, low, high, text):
    """A value is shown to 10^floor(log10(half its interval)), not finer."""
    assert figures.shown(value, low, high) == text


@given(st.floats(0.001, 1e5), st.floats(1e-5, 0.5))
def test_shown_value_is_within_half_its_interval(value, part):
    """Rounding never moves a value by more than half the interval's half."""
    low, high = value * (1 - part), value * (1 + part)
    assert abs(float(figures.shown(value, low, high)) - value) <= (high - low) / 4 + 1e-6


def test_interval_words_for_open_ends():
    """An end that is not known is said in words."""
    assert figures.interval(1.36, 1.49) == "1.36-1.49"
    assert figures.interval(3.0, math.nan) == "at least 3.00"
    assert figures.interval(math.nan, 1.09) == "at most 1.09"


def test_flags_are_bits_and_names():
    """Names and bits are each other's inverse, in the order of FLAGS."""
    for name in flags.FLAGS:
        assert flags.names(flags.bit(name)) == (name,)
    assert flags.names(flags.bit("simulated") | flags.bit("clipped")) == ("clipped", "simulated")
    with pytest.raises(KeyError):
        flags.bit("perfect")
