"""ln I0 and its inverse against scipy and mpmath-free identities."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.special import ive

from calibration.bessel import inverse_log_i0, log_i0, log_i0_slope


def test_log_i0_equals_scipy_from_foot_to_far_beyond_overflow():
    """ln I0 follows scipy.special.ive to 1e-12 from x = 0.1 to 5000, past where I0 itself overflows."""
    x = np.geomspace(0.1, 5000.0, 3000)
    assert log_i0(x) == pytest.approx(np.log(ive(0, x)) + x, rel=1e-12)


def test_log_i0_of_tiny_argument_keeps_its_digits():
    """At x = 1e-6 the series x^2/4 - x^4/64 (Abramowitz & Stegun 9.6.12) holds to 1e-9."""
    assert log_i0(1e-6) == pytest.approx(1e-12 / 4, rel=1e-9)


def test_slope_equals_scipy():
    """I1/I0 follows scipy to 1e-12."""
    x = np.geomspace(1e-2, 5000.0, 2000)
    assert log_i0_slope(x) == pytest.approx(ive(1, x) / ive(0, x), rel=1e-12)


@given(st.floats(1e-5, 5e3))
def test_inverse_undoes_log_i0(x):
    """The inverse gives x back to 1e-9 anywhere (no stall at rounding noise near zero)."""
    assert inverse_log_i0(log_i0(x)) == pytest.approx(x, rel=1e-9)


def test_nan_in_gives_nan_out():
    """NaN passes through all three."""
    for function in (log_i0, log_i0_slope, inverse_log_i0):
        assert np.isnan(function(np.array([np.nan, 1.0]))).tolist() == [True, False]
