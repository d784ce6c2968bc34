"""The bridge file that `sim:` is read by belongs to the simulator as it stands."""

import numpy as np
import pytest

from bridgeio.bridge_file import load_bridge_file
from bridgeio.simulator import BRIDGE_FILE, coupler
from bridgeio.simulator.bench import bench_steps
from calibration.fit import fit


def test_sim_bridge_file_has_the_simulators_own_bench():
    """Its steps are those that the simulated bench gives today, to the digit."""
    assert load_bridge_file(BRIDGE_FILE).steps == tuple(bench_steps())


def test_sim_bridge_file_is_the_fit_of_its_steps():
    """Fitting its steps anew gives its numbers again, within a hundredth of their standard deviations."""
    shipped = load_bridge_file(BRIDGE_FILE)
    again = fit(
        list(shipped.steps),
        name=shipped.name,
        full_scale=shipped.full_scale,
        ratings=shipped.ratings,
        match_return_loss_db=shipped.match_return_loss_db,
    ).bridge
    before = shipped.calibrated()
    for old, new in zip(before.bands, again.bands, strict=True):
        sds = np.sqrt(np.diag(old.covariance))
        assert abs(np.log(old.gain_forward / new.gain_forward)) < 0.01 * sds[0]
        assert abs(np.log(old.gain_reflected / new.gain_reflected)) < 0.01 * sds[1]
        assert new.directivity_limit == pytest.approx(old.directivity_limit, rel=1e-3)
        assert new.forward_leak_limit == pytest.approx(old.forward_leak_limit, rel=1e-3)


def test_sim_bridge_file_bounds_the_simulators_true_leaks():
    """In every band the limits lie above the coupler's true |d| and |c|, which the fit never saw."""
    for band in load_bridge_file(BRIDGE_FILE).calibrated().bands:
        truth = coupler.looking_forward(band.frequency_hz)
        assert band.directivity_limit > abs(complex(truth.d))
        assert band.forward_leak_limit > abs(complex(truth.c))
