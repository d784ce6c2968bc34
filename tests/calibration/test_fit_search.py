"""The search: whatever the starts, the same parameters; and those of a plain search of an independent model."""

import time

import numpy as np
import pytest
from scipy.optimize import least_squares
from scipy.special import i0e, i1e

from calibration.bench import BenchRatings
from calibration.fit import fit, solve
from calibration.fit_model import BenchModel
from calibration.fit_search import first_minimum, jacobian_at, slopes_of
from calibration.fit_start import start_vectors
from calibration.laws import LAWS
from tests import benches, shed

SEEDS = [*range(5), *(pytest.param(n, marks=pytest.mark.long) for n in range(5, 30))]


def model_of(bits=12):
    """The model of the shed's bench."""
    sheet = shed.sheet(bits)
    return BenchModel(list(sheet.steps), sheet.ratings, 50.0, LAWS["diode"])


@pytest.fixture(scope="module")
def plain():
    """The solution from the starts as they are."""
    return solve(model_of())


@pytest.mark.parametrize("seed", SEEDS)
def test_solution_does_not_depend_on_the_starts(plain, seed):
    """From starts moved at random every parameter comes out the same within 1e-3 of its standard deviation."""
    moved = solve(model_of(), seed)
    off = np.abs(moved.vector - plain.vector) / np.sqrt(np.diag(plain.covariance))
    print(f"seed {seed}: at most {off.max():.1e} sd apart")
    assert off.max() < 1e-3


@pytest.mark.long
def test_single_starts_do_not_all_reach_the_best_minimum():
    """Of 30 single random starts only some end in the best minimum: several starts and mirror images are needed."""
    tries = 30
    model = model_of()
    best = solve(model)
    reached = 0
    for seed in range(tries):
        only = model_of()
        with pytest.MonkeyPatch.context() as patch:
            patch.setattr("calibration.fit_search.start_vectors", lambda m, s: start_vectors(m, s)[:1])
            found = first_minimum(only, seed)
        off = np.abs(only.turned(found.vector) - best.vector) / np.sqrt(np.diag(best.covariance))
        reached += bool(off.max() < 1e-2)
    print(f"{reached} of {tries} single random starts reach the best minimum")
    assert 1 <= reached < tries


def test_fit_of_the_shed_takes_five_seconds_at_most():
    """CPU time of the whole 57-step fit."""
    sheet = shed.sheet(12)
    began = time.process_time()
    fit(list(sheet.steps), name="x", full_scale=4095, ratings=sheet.ratings)
    took = time.process_time() - began
    print(f"{took:.1f} s of CPU")
    assert took < 5.0


def test_jacobian_by_bands_is_the_plain_one(plain):
    """Moving the parameters of all bands at once gives the same slopes as moving each alone."""
    model = model_of()
    np.testing.assert_allclose(
        slopes_of(model, plain.vector), jacobian_at(model.residuals, plain.vector), rtol=1e-6, atol=1e-6
    )


class PlainBench:
    """An independent model of a one-band bench: complex waves, Newton's inversion of the Bessel law, all priors."""

    def __init__(self, steps, scatter):
        self.steps, self.scatter = steps, scatter
        self.loads = sorted({s.load for s in steps if s.load})
        self.dummy_sd = 10 ** (-benches.RATINGS.dummy_return_loss_db / 20) / 2

    def square(self, counts, dark, scale, load_term):
        """Square of the wave and its slope."""
        u = (counts - dark) / scale
        level = u + np.log1p(u / load_term)
        x = max(2 * np.sqrt(abs(level)), level)
        for _ in range(60):
            x -= (np.log(i0e(x)) + x - level) / (i1e(x) / i0e(x))
        return x * x, 2 * x * i0e(x) / i1e(x) * (1 + 1 / (load_term + u)) / scale

    def residuals(self, v):
        """All residuals; v: dark, ln scale, ln load term of both; ln gains; d, c, dummy; own loss; loads' parts."""
        laws = [(v[0], np.exp(v[1]), np.exp(v[2])), (v[3], np.exp(v[4]), np.exp(v[5]))]
        gains = np.exp(2 * v[6:8])
        d, c, dummy = v[8] + 1j * v[9], v[10] + 1j * v[11], v[12] + 1j * v[13]
        found = []
        for s in self.steps:
            counting = [np.hypot(s.forward_sd / np.sqrt(s.samples), 5e-4 * n) for n in (s.forward, s.reflected)]
            if s.kind == "dark":
                sd = s.forward_sd / np.sqrt(s.samples)
                found += [(s.forward - v[0]) / sd, (s.reflected - v[3]) / sd]
                continue
            forward, forward_slope = self.square(s.forward, *laws[0])
            reflected, reflected_slope = self.square(s.reflected, *laws[1])
            if s.kind == "reversed":
                seen = reflected / gains[1] / 10 ** (v[14] / 10)
                found.append(
                    np.log(seen / s.power_w) / np.hypot(self.scatter, reflected_slope * counting[1] / reflected)
                )
                continue
            gamma = dummy if s.kind == "power" else self.reflection(v, s)
            noise = forward_slope * counting[0] / forward
            incident = forward / gains[0] / abs(1 + c * gamma) ** 2
            expected = incident * gains[1] * abs(gamma + d) ** 2
            if s.kind == "power":
                found.append(np.log(incident / s.power_w) / np.hypot(self.scatter, noise))
            found.append((reflected - expected) / np.hypot(reflected_slope * counting[1], noise * expected))
        return np.array([*found, *self.priors(v)])

    def reflection(self, v, step):
        """Reflection of a load with its error, inductance and capacitance."""
        error, nh, pf = v[15 + 3 * self.loads.index(step.load) :][:3]
        omega = 2 * np.pi * step.frequency_hz
        if step.load == "open":
            y = 1j * omega * pf * 1e-12
            return (1 - 50 * y) / (1 + 50 * y)
        ohm = 0.0 if step.load == "short" else float(step.load) * (1 + error)
        y = 1 / (ohm + 1j * omega * nh * 1e-9) + 1j * omega * pf * 1e-12
        return (1 / y - 50) / (1 / y + 50)

    def priors(self, v):
        """What is believed beforehand, over its sd."""
        yield from ((v[2] - np.log(1.5)) / 1.5, (v[5] - np.log(1.5)) / 1.5)
        yield from (v[8:12] / 0.1)
        yield from (v[12:14] / self.dummy_sd)
        yield from ((v[14] - 0.05) / 0.04, (v[4] - v[1]) / 0.15, (v[5] - v[2]) / 0.5, (v[7] - v[6]) / 0.35)
        for n in range(len(self.loads)):
            error, nh, pf = v[15 + 3 * n :][:3]
            yield from (error * np.sqrt(12) / 0.02, (nh - 1) * np.sqrt(12) / 2, (pf - 0.5) * np.sqrt(12))


def test_plain_search_of_an_independent_model_agrees():
    """scipy's own least squares with its own derivatives, on another model of the bench, ends at the same place."""
    chance = np.random.default_rng(3)
    truth = benches.random_truth(chance, [14.1e6])
    steps = benches.steps_of(truth, chance, [14.1e6], loads=benches.DIRECT)
    model = BenchModel(steps, BenchRatings(5.0, None, 36.0, 1.0), 50.0, LAWS["diode"])
    solution = solve(model)
    other = PlainBench(steps, model.scatter)
    start = solution.vector + 0.1 * np.sqrt(np.diag(solution.covariance)) * chance.standard_normal(model.size)
    found = least_squares(other.residuals, start, x_scale="jac", xtol=1e-12, ftol=1e-12, gtol=1e-12)
    off = np.abs(found.x - solution.vector) / np.sqrt(np.diag(solution.covariance))
    print(
        f"cost {found.cost:.6f} and {0.5 * np.sum(model.residuals(solution.vector) ** 2):.6f}; {off.max():.1e} sd apart"
    )
    assert found.cost == pytest.approx(0.5 * np.sum(model.residuals(solution.vector) ** 2), rel=1e-4)
    assert off.max() < 0.02
