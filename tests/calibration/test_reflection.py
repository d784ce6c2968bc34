"""Reflection arithmetic against tables, safe forms and scikit-rf."""

import numpy as np
import pytest
import skrf
from hypothesis import given
from hypothesis import strategies as st

from calibration import reflection as r

# SWR, rho, return loss dB, mismatch loss dB, reflected %, net power of 100 W. The usual handbook table, from the
# definitions in Pozar, Microwave Engineering, ch. 2 (from memory), worked to 40 digits with mpmath.
TABLE = [
    (1.05, 0.0243902439, 32.255677, 0.0025843171, 0.0594884, 99.940512),
    (1.1, 0.0476190476, 26.444386, 0.0098591298, 0.22675737, 99.773243),
    (1.2, 0.0909090909, 20.827854, 0.036041243, 0.82644628, 99.173554),
    (1.25, 0.1111111111, 19.08485, 0.053950319, 1.2345679, 98.765432),
    (1.5, 0.2, 13.9794, 0.17728767, 4.0, 96.0),
    (2.0, 0.3333333333, 9.5424251, 0.51152522, 11.111111, 88.888889),
    (3.0, 0.5, 6.0205999, 1.2493874, 25.0, 75.0),
    (5.0, 0.6666666667, 3.5218252, 2.5527251, 44.444444, 55.555556),
    (10.0, 0.8181818182, 1.7430035, 4.8072538, 66.942149, 33.057851),
    (20.0, 0.9047619048, 0.86931388, 7.413486, 81.85941, 18.14059),
]
# Return loss dB -> SWR, the same sources.
BACK = [(3, 5.84804359), (6, 3.00952048), (10, 1.92495059), (14, 1.49852035), (20, 11 / 9), (26, 1.10552629)]
BACK += [(30, 1.06531086), (40, 1.02020202)]


@pytest.mark.parametrize(("swr", "rho", "loss", "mismatch", "percent", "net"), TABLE)
def test_reflection_table_row(swr, rho, loss, mismatch, percent, net):
    """Each row of the handbook table comes out to the digits printed."""
    assert r.rho_from_swr(swr) == pytest.approx(rho, rel=1e-9)
    assert r.swr_from_rho(rho) == pytest.approx(swr, rel=1e-8)
    assert r.return_loss_db(rho) == pytest.approx(loss, rel=2e-8)
    assert r.mismatch_loss_db(rho) == pytest.approx(mismatch, rel=1e-7)
    assert 100 * rho**2 == pytest.approx(percent, rel=2e-8)
    assert r.swr_from_powers(100.0, 100.0 - net) == pytest.approx(swr, rel=1e-6)


@pytest.mark.parametrize(("loss", "swr"), BACK)
def test_swr_from_return_loss(loss, swr):
    """Return loss to SWR gives the published pairs."""
    assert r.swr_from_rho(r.rho_from_return_loss(loss)) == pytest.approx(swr, rel=1e-8)


def test_swr_from_nearly_equal_powers_keeps_its_digits():
    """Near rho = 1 the safe form agrees with 40-digit arithmetic where the plain form is off in the 8th digit."""
    assert r.swr_from_powers(100.0, 99.9999999) == pytest.approx(4000000235.47272, rel=1e-12)


def test_mismatch_loss_of_a_tiny_reflection_is_not_lost():
    """rho^2 = 1e-17 has a loss; 1 - rho^2 would have rounded it away (value by log1p and mpmath)."""
    assert r.mismatch_loss_db(np.sqrt(1e-17)) == pytest.approx(4.342944819e-17, rel=1e-9)


def test_impossible_powers_are_nan_and_open_is_infinite():
    """More coming back than went out is unknown, never clamped; equal powers are an open."""
    assert np.isnan(r.swr_from_powers([1.0, 0.0, -1.0, 1.0], [1.1, 0.0, 0.5, -0.1])).all()
    assert np.isinf(r.swr_from_powers(1.0, 1.0))
    assert np.isnan(r.swr_from_rho([1.2, -0.1, np.nan])).all()
    assert np.isnan(r.return_loss_db([0.0, -0.1])).all()


@given(st.complex_numbers(min_magnitude=0.1, max_magnitude=1e4, allow_nan=False, allow_infinity=False))
def test_reflection_of_an_impedance_equals_scikit_rf(z):
    """Complex reflection and SWR of any passive impedance equal scikit-rf's."""
    z = complex(abs(z.real) + 1e-3, z.imag)
    gamma = complex(r.reflection_of(z, 50.0))
    assert gamma == pytest.approx(complex(skrf.tlineFunctions.zl_2_Gamma0(50.0, z)[0]), rel=1e-9, abs=1e-12)
    swr = float(skrf.tlineFunctions.zl_2_swr(50.0, z)[0])
    assert r.swr_from_rho(abs(gamma)) == pytest.approx(swr, rel=1e-6 * max(1.0, swr))


def test_reflection_of_open_and_short():
    """An infinite impedance reflects +1, zero ohms -1."""
    assert r.reflection_of([np.inf, 0.0]).tolist() == [1.0, -1.0]


@pytest.mark.parametrize(("swr", "rms"), [(1, 70.7), (3, 122.5), (10, 223.6)])
def test_line_voltage_at_100_w(swr, rms):
    """sqrt(P S Z0) at 100 W in 50 ohm (common practice)."""
    assert r.line_voltage_v(100.0, swr) == pytest.approx(rms, abs=0.05)
