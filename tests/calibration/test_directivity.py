"""What a leaking bridge can say: published bounds, and coverage of the interval over all load angles."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import integrate, optimize, special, stats

from calibration.directivity import hard_bound, rho_estimate, rho_interval, seen_directivity_limit, spread_quantile
from calibration.reflection import rho_from_swr, swr_from_rho

# SWR shown for a true SWR by directivity in dB, (rho - d)/(1 + d rho) to (rho + d)/(1 - d rho): the exact form of the
# usual directivity uncertainty (Agilent AN 1287-3 gives its first order), by Monte Carlo of 2e6 draws as well.
DIRECTIVITIES = (20, 25, 30, 35, 40)
TABLE = {
    1.0: ((1, 1.2222), (1, 1.1192), (1, 1.0653), (1, 1.0362), (1, 1.0202)),
    1.1: ((1, 1.3483), (1, 1.2325), (1.0325, 1.1724), (1.0615, 1.1401), (1.0781, 1.1223)),
    1.2: ((1, 1.4773), (1.0715, 1.3471), (1.1257, 1.2802), (1.1575, 1.2443), (1.1759, 1.2247)),
    1.5: ((1.2174, 1.8824), (1.3315, 1.6996), (1.4019, 1.6079), (1.4437, 1.5594), (1.4680, 1.5330)),
    2.0: ((1.5833, 2.6250), (1.7473, 2.3168), (1.8513, 2.1688), (1.9141, 2.0922), (1.9510, 2.0510)),
    3.0: ((2.2308, 4.4286), (2.5188, 3.6765), (2.7112, 3.3494), (2.8312, 3.1878), (2.9029, 3.1031)),
}
CELLS = [(swr, d, cell) for swr, row in TABLE.items() for d, cell in zip(DIRECTIVITIES, row, strict=True)]


@pytest.mark.parametrize(("swr", "directivity_db", "cell"), CELLS)
def test_hard_bound_table(swr, directivity_db, cell):
    """Thirty cells of the table, to the digits printed."""
    d = 10 ** (-directivity_db / 20)
    low, high = hard_bound(rho_from_swr(swr), d, d)
    assert swr_from_rho(low) == pytest.approx(cell[0], abs=6e-5)
    assert swr_from_rho(high) == pytest.approx(cell[1], abs=6e-5)


def test_hard_bound_against_an_application_note():
    """Return loss 20 dB, directivity 35 dB, source match 30 dB: 18.6 to 21.7 dB (after Agilent AN 1287-3)."""
    low, high = hard_bound(0.1, 10 ** (-35 / 20), 10 ** (-30 / 20))
    assert -20 * np.log10(high) == pytest.approx(18.6, abs=0.06)
    assert -20 * np.log10(low) == pytest.approx(21.7, abs=0.06)


@given(
    st.floats(0, 0.95),
    st.floats(0, 0.15),
    st.floats(0, 0.15),
    st.floats(0, 6.28),
    st.floats(0, 6.28),
    st.floats(0, 6.28),
)
def test_hard_bound_holds_the_truth(rho, d, c, load, arg_d, arg_c):
    """Whatever the three angles, the truth lies inside."""
    gamma = rho * np.exp(1j * load)
    m = abs(gamma + d * np.exp(1j * arg_d)) / abs(1 + c * np.exp(1j * arg_c) * gamma)
    low, high = hard_bound(m, d, c)
    assert low - 1e-12 <= rho <= high + 1e-12


def test_dummy_worse_than_its_reading():
    """Directivity 31 dB behind a 36 dB dummy may read 27.1 or 38.2 dB; the limit from either holds the 31."""
    d, dummy = 10 ** (-31 / 20), 10 ** (-36 / 20)
    for seen in (d + dummy, d - dummy):
        assert seen_directivity_limit(seen, dummy) >= d


@pytest.mark.parametrize(("swing", "noise"), [(1.0, 0.001), (1.0, 0.05), (1.0, 0.4), (0.3, 1.0), (0.0, 1.0)])
def test_spread_quantile_equals_scipy(swing, noise):
    """The table of quantiles of cosine plus normal agrees with scipy's integral and root within 1e-3."""

    def above(q):
        value, _ = integrate.quad(lambda t: stats.norm.sf((q - swing * np.cos(t)) / noise), 0, np.pi, limit=400)
        return value / np.pi - 0.025

    root = optimize.brentq(above, 0.0, swing + 3 * noise)
    assert spread_quantile(swing, noise)[0] == pytest.approx(root, rel=1e-3)


def coverage(swr, d, c, psi, *, known, noise=0.0, angles=20_000, seed=1):
    """Share of load angles at which the interval holds the truth; |d|, |c| given exactly, arg d + arg c = psi."""
    rho = (swr - 1) / (swr + 1)
    gamma = rho * np.exp(2j * np.pi * (np.arange(angles) + 0.5) / angles)
    random = np.random.default_rng(seed)
    forward = np.abs(1 + c * np.exp(1j * psi) * gamma) ** 2 + noise * random.normal(size=angles)
    ratio = (np.abs(gamma + d) ** 2 + noise * random.normal(size=angles)) / forward
    sd = noise * np.sqrt(1 + ratio**2) / forward
    low, high = rho_interval(ratio, ratio, sd, d, c, np.cos(psi) if known else -1.0)
    return float(np.mean((low <= rho) & (rho <= high)))


@pytest.mark.parametrize("swr", [1.5, 2.0, 3.0, 5.0])
def test_coverage_on_the_unkind_bridge(swr):
    """|d| = |c| = 0.05, arg d + arg c = 180 degrees: 95 +- 1 % with the angle known, at least 94.5 % without."""
    assert coverage(swr, 0.05, 0.05, np.pi, known=True) == pytest.approx(0.95, abs=0.01)
    assert coverage(swr, 0.05, 0.05, np.pi, known=False) >= 0.945


@pytest.mark.parametrize("psi", [0.0, 1.0, 2.5])
@pytest.mark.parametrize("swr", [1.5, 3.0])
def test_coverage_with_a_known_angle(swr, psi):
    """On any bridge with its angle known 95 +- 1 % of all load angles are covered, with converter noise as without."""
    assert coverage(swr, 0.05, 0.03, psi, known=True) == pytest.approx(0.95, abs=0.01)
    assert coverage(swr, 0.05, 0.03, psi, known=True, noise=0.003) == pytest.approx(0.95, abs=0.01)
    assert coverage(swr, 0.05, 0.03, psi, known=False) >= 0.945


@given(st.floats(0, 0.9), st.floats(0, 0.15), st.floats(0, 0.15))
def test_interval_is_never_wider_than_the_hard_bound(m, d, c):
    """Without noise the 95 % interval lies inside the hard bound."""
    low, high = rho_interval(m * m, m * m, 0.0, d, c)
    hard_low, hard_high = hard_bound(m, d, c)
    assert low >= hard_low - 1e-9
    assert high <= hard_high + 1e-9


def test_estimate_equals_the_mean_over_angles():
    """Well above the leakage the estimate is the plain mean of the solutions over the unknown angle (c = 0)."""
    d, m = 0.05, np.array([0.06, 0.2, 0.7])
    t = 2 * np.pi * (np.arange(4000) + 0.5) / 4000
    solutions = -d * np.cos(t) + np.sqrt(m[:, None] ** 2 - (d * np.sin(t)) ** 2)
    assert rho_estimate(m**2, d, 0.0) == pytest.approx(solutions.mean(axis=1), rel=1e-6)
    assert rho_estimate(m**2, d, 0.0) == pytest.approx(2 / np.pi * m * special.ellipe((d / m) ** 2), rel=1e-12)


def test_estimate_rises_evenly_from_zero():
    """More reflected never reads less, also across |d|; nothing reflected reads 0; NaN stays NaN."""
    estimate = rho_estimate(np.linspace(0.0, 1.3, 4001), 0.06, 0.05)
    assert estimate[0] == 0.0
    assert (np.diff(estimate) > 0).all()
    assert np.abs(np.diff(estimate)).max() < 0.02
    assert np.isnan(rho_estimate(np.nan, 0.05, 0.05))
