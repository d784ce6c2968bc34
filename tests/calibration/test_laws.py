"""One battery for every detector law: a new line in LAWS is found here by itself."""

import numpy as np
import pytest
from scipy.interpolate import PchipInterpolator

from calibration.detector import Diode, detected_v, thermal_v
from calibration.law_table import LawTable
from calibration.laws import LAWS, DiodeLaw, LogLaw, TableLaw


def rippled_log():
    """A logarithmic detector with 0.3 dB of ripple, as its correction knows it."""
    knots = np.linspace(3000.0, 60000.0, 25)
    angle = knots / 4000.0
    return LogLaw(2500.0, 900.0, knots, 0.3 * np.sin(angle), 0.3 / 4000.0 * np.cos(angle))


def table_of(law, knots):
    """A table law through points of another law."""
    values = np.log(law.square(knots))
    return TableLaw(law.offset, knots, values, PchipInterpolator(knots, values).derivative()(knots))


EXAMPLES = {
    "diode": [DiodeLaw(5.2, 20.5, 2.09), DiodeLaw(83.0, 328.0, 0.05), DiodeLaw(0.0, 3.0, 60.0)],
    "log": [LogLaw(400.0, 31.0), rippled_log()],
    "table": [table_of(DiodeLaw(5.2, 20.5, 2.09), np.geomspace(20.0, 60000.0, 12))],
}
CASES = [(name, law) for name in LAWS for law in EXAMPLES[name]]
COUNTS = np.concatenate([np.linspace(-8.0, 12.0, 41), np.geomspace(12.5, 65520.0, 300)])


def scaled(law, full_scale):
    """The logarithmic law on a converter of that full scale: 90 dB from dark to the top."""
    part = full_scale / (law.offset + 90.0 * law.slope_per_db)
    knots, slopes = law.knots * part, law.correction_slopes / part
    return LogLaw(law.offset * part, law.slope_per_db * part, knots, law.corrections, slopes)


def covered(law):
    """The counts at which the law may be used."""
    return COUNTS[law.covers(COUNTS)]


@pytest.mark.parametrize(("name", "law"), CASES)
def test_law_counts_undoes_square(name, law):
    """Counts to the wave's square and back is where it started, from below dark to full scale."""
    counts = covered(law)
    assert law.counts(law.square(counts)) == pytest.approx(counts, rel=1e-9, abs=1e-6)


@pytest.mark.parametrize(("name", "law"), CASES)
def test_law_rises_and_keeps_its_slope_below_dark(name, law):
    """The law rises everywhere and goes straight on below dark, so that averages of noise stay unbiased."""
    assert (np.diff(law.square(covered(law))) > 0).all()
    if not law.covers(law.offset):
        return  # such a law is not used near dark at all
    assert law.square(law.offset) == pytest.approx(0.0, abs=1e-12)
    assert law.square(law.offset - 0.01) == pytest.approx(-law.square(law.offset + 0.01), rel=1e-3)


@pytest.mark.parametrize(("name", "law"), CASES)
def test_law_slope_is_the_derivative(name, law):
    """slope equals central differences of square."""
    step = 1e-4
    counts = covered(law)[1:-1]
    numeric = (law.square(counts + step) - law.square(counts - step)) / (2 * step)
    away = np.abs(counts - law.offset) > step
    assert law.slope(counts)[away] == pytest.approx(numeric[away], rel=1e-5)


@pytest.mark.parametrize(("name", "law"), CASES)
def test_law_sensitivity_is_the_derivative(name, law):
    """sensitivity equals central differences of square in each parameter, and parameters make the law again."""
    vector = law.parameters
    assert law.with_parameters(vector).square(COUNTS) == pytest.approx(law.square(COUNTS), rel=1e-12)
    many = law.with_parameters(np.stack([vector, vector])).square(COUNTS)
    assert many[1] == pytest.approx(law.square(COUNTS), rel=1e-12)
    counts = covered(law)[1:-1]
    counts = counts[np.abs(counts - law.offset) > 0.3]
    for place in range(0 if law.covers(law.offset) else 1, len(vector)):
        step = np.zeros(len(vector))
        step[place] = 1e-5
        high, low = (law.with_parameters(vector + sign * step).square(counts) for sign in (1, -1))
        found = law.sensitivity(counts)[:, place]
        assert found == pytest.approx((high - low) / 2e-5, rel=1e-4, abs=1e-4 * np.abs(found).max() * 1e-6 + 1e-6)


@pytest.mark.parametrize(("name", "law"), CASES)
@pytest.mark.parametrize("full_scale", [1023, 4095, 65520, 16 * 65535])
def test_law_table_follows_the_law(name, law, full_scale):
    """Between codes the look-up is off by less than a twentieth of a count; at codes it is the law."""
    if name == "log":
        law = scaled(law, full_scale)
    table = LawTable(law, full_scale)
    counts = law.offset + np.geomspace(2.0, full_scale - law.offset - 1.0, 500)
    counts = counts[(counts > 0) & law.covers(counts)]
    off = (table.square(counts) - law.square(counts)) / law.slope(counts)
    assert np.abs(off).max() < 0.05
    whole = np.unique(np.round(counts[counts < 65535]))
    if full_scale <= 65535:
        assert table.square(whole) == pytest.approx(law.square(whole), rel=1e-12)
    assert np.isnan(table.square(np.array([np.nan]))).all()


@pytest.mark.parametrize(("name", "law"), CASES)
@pytest.mark.parametrize("full_scale", [4095, 65520, 16 * 65535])
def test_law_table_looks_up_slope_and_sensitivity_too(name, law, full_scale):
    """Slope and derivatives by parameters, which only intervals need, are within two percent of the law's own."""
    if name == "log":
        law = scaled(law, full_scale)
    table = LawTable(law, full_scale)
    # Not quite at the ends of a span, where one-sided slopes differ.
    counts = law.offset + np.geomspace(30.0, 0.99 * (full_scale - law.offset), 300)
    counts = counts[law.covers(counts - 1.0) & law.covers(counts + 1.0)]
    found = table.look_up(counts)
    assert found.square.tolist() == table.square(counts).tolist()
    assert found.slope == pytest.approx(law.slope(counts), rel=0.02)
    wanted = law.sensitivity(counts)
    assert np.abs(found.sensitivity - wanted).max(axis=0) == pytest.approx(0.0, abs=0.01 * np.abs(wanted).max())
    for column in (found.square, table.look_up(np.array([np.nan])).square):
        assert np.isnan(column).all() == (len(column) == 1)


@pytest.mark.parametrize(("name", "law"), CASES)
def test_law_survives_its_table(name, law):
    """Written as plain numbers and read back the law is the same; half a table is refused."""
    again = LAWS[name].from_table(law.table())
    assert again.square(COUNTS).tolist() == law.square(COUNTS).tolist()
    with pytest.raises((KeyError, ValueError)):
        LAWS[name].from_table({"offset": 1.0})


def test_table_law_is_refused_outside_its_span():
    """A table says nothing below its lowest and above its highest power, and does not invent."""
    (law,) = EXAMPLES["table"]
    assert law.covers([5.2, 19.9, 20.0, 5000.0, 60001.0]).tolist() == [False, False, True, True, False]
    assert law.square(7.0) == law.square(20.0)


def test_diode_law_is_the_circuit_in_counts():
    """The three-parameter law equals the circuit (part A, 100 kohm, 3.3 V on 12 bit) at every level."""
    diode, load = Diode(2.2e-8, 1.08), 1e5
    per_volt = 4095 / 3.3
    nvt = diode.ideality * thermal_v(298.15)
    law = DiodeLaw(7.0, nvt * per_volt, load * diode.saturation_a / nvt)
    peak = np.geomspace(0.01, 3.5, 40)
    counts = 7.0 + per_volt * detected_v(peak, diode, load)
    assert np.sqrt(law.square(counts)) * nvt == pytest.approx(peak, rel=1e-8)
