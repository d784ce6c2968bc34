"""Bench loads against scikit-rf and plain circuit sums."""

import numpy as np
import pytest
import skrf

from calibration.bench import BenchRatings, BenchStep
from calibration.errors import UnitError
from calibration.loads import load_impedance_ohm, load_reflection, part_of


@pytest.mark.parametrize(
    ("text", "ohm"), [("100", 100), ("24.87", 24.87), ("25+3.5j", 25 + 3.5j), ("25 - 3j", 25 - 3j), ("short", 0)]
)
def test_load_texts(text, ohm):
    """Loads are read as a builder writes them."""
    assert load_impedance_ohm(text) == ohm


@pytest.mark.parametrize("text", ["", "100 W", "dummy", "-50", "25+j3", "nan"])
def test_load_refused_in_words(text):
    """What is no load is refused with what is wanted."""
    with pytest.raises(UnitError, match=r"wanted ohms like 100 or 24\.87"):
        load_impedance_ohm(text)


@pytest.mark.parametrize("hz", [3.7e6, 14.2e6, 50e6])
def test_reflection_with_parasitics_equals_scikit_rf(hz):
    """100 ohm with 8 nH in series and 3 pF across equals the cascade of scikit-rf's lumped parts."""
    line = skrf.media.DefinedGammaZ0(frequency=skrf.Frequency(hz, hz, 1, "Hz"), z0=50)
    circuit = line.shunt_capacitor(3e-12) ** line.inductor(8e-9) ** line.load(1 / 3)
    assert load_reflection(100.0, hz, nh=8.0, pf=3.0) == pytest.approx(complex(circuit.s[0, 0, 0]), abs=1e-9)


@pytest.mark.parametrize("degrees", [10.0, 45.0, 90.0, 200.0])
def test_reflection_behind_a_lossy_line_equals_scikit_rf(degrees):
    """25 ohm behind a line of some degrees and 0.3 dB equals scikit-rf's line."""
    frequency = skrf.Frequency(14e6, 14e6, 1, "Hz")
    gamma = 0.3 / 8.685889638 + 1j * np.radians(degrees)
    media = skrf.media.DefinedGammaZ0(frequency=frequency, z0=50, gamma=gamma)
    expected = complex((media.line(1, "m") ** media.load(-1 / 3)).s[0, 0, 0])
    assert load_reflection(25.0, 14e6, line_deg=degrees, line_loss_db=0.3) == pytest.approx(expected, abs=1e-9)


def test_open_and_short_and_tolerance():
    """An ideal open is +1, a short -1; 1 % in a 100 ohm resistor is 1.33 % in its reflection (a derivative)."""
    assert load_reflection(np.inf, 14e6) == 1.0
    assert load_reflection(0.0, 14e6) == -1.0
    plain, off = (abs(load_reflection(100.0, 14e6, error=error)) for error in (0.0, 0.01))
    assert off / plain - 1 == pytest.approx(0.0133, abs=2e-4)


def test_parts_are_shared_by_their_description():
    """Two steps with the same load and tolerance use one part; another tolerance makes another part."""
    ratings = BenchRatings(resistor_pct=1.0)
    step = BenchStep("load", 1.0, 1.0, 14e6, load="100")
    assert part_of(step, ratings) == part_of(BenchStep("load", 2.0, 2.0, 7e6, load="100"), ratings)
    assert part_of(step, ratings) != part_of(BenchStep("load", 1.0, 1.0, 14e6, load="100", load_pct=0.1), ratings)
