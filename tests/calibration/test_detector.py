"""The diode detector's physics against published parts and independently solved values."""

import numpy as np
import pytest

from calibration.detector import Diode, detected_v, peak_v, thermal_v

# Is and n of the parts: A HSMS-282x (data sheet and SPICE page of its maker), B HSMS-285x (from memory), C 1N4148,
# common SPICE values (from memory). Columns A, B, C at 100 kohm and 1 Mohm; the voltages solve the Bessel law of
# D. W. Knight, Diode detectors for RF measurement, Part 1 (2016), by scipy brentq and by mpmath findroot, which agree
# to 2.3e-12.
PARTS = {"A": Diode(2.2e-8, 1.08), "B": Diode(3e-6, 1.06), "C": Diode(2.52e-9, 1.752)}
COLUMNS = [("A", 100e3), ("A", 1e6), ("B", 100e3), ("B", 1e6), ("C", 100e3), ("C", 1e6)]
TABLE = {
    0.001: (6.61894683e-7, 3.98421178e-6, 8.41497851e-6, 9.09630675e-6, 3.09204278e-8, 2.94449288e-7),
    0.01: (6.65707864e-5, 3.97221480e-4, 8.34677092e-4, 9.02155659e-4, 3.10128690e-6, 2.95163082e-5),
    0.03: (6.26833869e-4, 3.49360765e-3, 7.07358873e-3, 7.63901956e-3, 2.85915552e-5, 2.70854621e-4),
    0.1: (0.0101088212, 0.0326426083, 0.0538863998, 0.0578650020, 4.14872803e-4, 3.68186975e-3),
    0.3: (0.128479187, 0.180251844, 0.227268477, 0.240526161, 0.0198176456, 0.0673280207),
    1.0: (0.762511707, 0.823613374, 0.888508878, 0.918725642, 0.543542780, 0.639701473),
    3.0: (2.71205377, 2.77511148, 2.84696708, 2.89259319, 2.45086456, 2.55264047),
    10.0: (9.66009526, 9.72374872, 9.79879636, 9.85493337, 9.36337645, 9.46651972),
    30.0: (29.6137667, 29.6775805, 29.7541292, 29.8144451, 29.2873033, 29.3907882),
}
ROWS = [(peak, dc, part, load) for peak, row in TABLE.items() for dc, (part, load) in zip(row, COLUMNS, strict=True)]


@pytest.mark.parametrize(("peak", "dc", "part", "load"), ROWS)
def test_diode_law_both_ways(peak, dc, part, load):
    """54 published operating points: volts out of RF within 1e-8, and RF back out of volts."""
    assert detected_v(peak, PARTS[part], load) == pytest.approx(dc, rel=1e-8)
    assert peak_v(dc, PARTS[part], load) == pytest.approx(peak, rel=1e-8)


def test_thermal_voltage():
    """kT/q at 298.15 K and 300 K from the SI's exact constants (CODATA)."""
    assert thermal_v(298.15) == pytest.approx(25.692579e-3, rel=1e-7)
    assert thermal_v(300.0) == pytest.approx(25.852000e-3, rel=1e-7)


@pytest.mark.parametrize(
    ("part", "load", "coefficient"),
    [("A", 1e5, 0.661856164), ("A", 1e6, 3.98433396), ("B", 1e5, 8.41567774), ("B", 1e6, 9.09707309)],
)
def test_square_law_foot(part, load, coefficient):
    """At its foot a detector gives Vdc = coefficient Vp^2, 1/(4 nVt) divided by 1 + Rj0/RL (Hewlett-Packard AN 986)."""
    assert detected_v(1e-5, PARTS[part], load) / 1e-10 == pytest.approx(coefficient, rel=1e-5)


def test_exponent_in_the_knee_exceeds_two():
    """With a load below the junction resistance the exponent passes 2 in the knee: 2.573 at 0.1 V, 1.248 at 1 V."""

    def exponent(v):
        step = 1e-4
        high, low = (np.log(detected_v(v * np.exp(s), PARTS["A"], 1e5)) for s in (step, -step))
        return (high - low) / (2 * step)

    assert exponent(0.1) == pytest.approx(2.573, abs=1e-3)
    assert exponent(1.0) == pytest.approx(1.248, abs=1e-3)
    assert exponent(0.01) == pytest.approx(2.012, abs=1e-3)


@pytest.mark.parametrize(
    ("true", "seen_1v", "seen_10v"), [(1.5, 1.1600, 1.4364), (2.0, 1.5109, 1.9187), (3.0, 2.2842, 2.8871)]
)
def test_swr_from_raw_volts_is_optimistic(true, seen_1v, seen_10v):
    """What a meter without a detector law shows (part A, 100 kohm, forward 1 V and 10 V): always too good."""
    rho = (true - 1) / (true + 1)
    for forward, seen in ((1.0, seen_1v), (10.0, seen_10v)):
        ratio = detected_v(forward * rho, PARTS["A"], 1e5) / detected_v(forward, PARTS["A"], 1e5)
        assert (1 + ratio) / (1 - ratio) == pytest.approx(seen, abs=1e-4)


@pytest.mark.parametrize(
    ("peak", "part"), [(0.005, 0.5002), (0.03, 0.5062), (0.1, 0.5390), (1.0, 0.4277), (10.0, 0.4068)]
)
def test_two_tone_mean_of_averaged_volts_is_wrong(peak, part):
    """Volts averaged before the law misread two tones, whose true mean is PEP/2; each sample linearised does not."""
    envelope = peak * np.abs(np.cos((np.arange(20000) + 0.5) * np.pi / 20000))
    volts = detected_v(envelope, PARTS["A"], 1e5)
    assert (peak_v(volts.mean(), PARTS["A"], 1e5) / peak) ** 2 == pytest.approx(part, abs=2e-4)
    assert np.mean(peak_v(volts, PARTS["A"], 1e5) ** 2) / peak**2 == pytest.approx(0.5, rel=1e-8)
