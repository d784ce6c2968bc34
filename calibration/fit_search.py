"""The search of a fit: least squares from several starts, and other minima that explain the steps as well.

One rule: a minimum counts as found only when mirror images of each band's leaks have been tried too; those that fit
as well as the best one are kept, since the truth may lie in any of them.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from functools import partial

import numpy as np
import numpy.typing as npt

from .fit_model import BAND_SIZE, BenchModel
from .fit_start import start_vectors

__all__ = [
    "Solution",
    "covariance_at",
    "explored",
    "first_minimum",
    "freedom",
    "in_band",
    "jacobian_at",
    "robust",
    "scatter_of",
    "settle",
    "solve",
]

Array = npt.NDArray[np.float64]
Places = npt.NDArray[np.intp]

#: A bench that determines its parameters settles in some tens of steps; one that does not would wander for ever.
_MOST_STEPS = 80
#: A descent rests where what is still to go is less than this, in standard deviations of the parameters.
_RESTING = 1e-5
_NO_WAY_DOWN = 1e12
#: A wattmeter repeats no better than this from step to step [relative sd of power]; nor, unknown, worse.
_SCATTER_FLOOR = 0.002
_SCATTER_MOST = 0.05
_SCATTER_START = 0.01
#: Weightings of a robust search, and the sd beyond which a step loses its weight.
_WEIGHTINGS, _FAR = 8, 2.5
#: Parameters are moved by this part of themselves for a derivative.
_DIFFERENCE = 1e-6
#: Rounds of mirror images: bands depend on each other through laws and loads only, so few are ever needed.
_MOST_ROUNDS = 4
#: Half of 3.84, the 95 % point of chi-square with one degree of freedom: minima as close as that both stand.
_AS_GOOD = 1.92
#: A band's leaks alone are moved first; what then lies this far above the best is not followed further.
_HOPELESS = 6.0
#: Two minima closer than this in every leak are one.
_SAME_LEAK = 1e-3
#: Signs of the imaginary parts of (d, c, dummy): all mirrored, only c, only d and dummy.
_MIRRORS = np.array([(-1.0, -1.0, -1.0), (1.0, -1.0, 1.0), (-1.0, 1.0, -1.0)])


@dataclass(frozen=True, slots=True)
class Solution:
    """Best vector of a model, its covariance, and whether the search came to rest.

    others: vectors and covariances of further minima that the steps cannot tell from the best.
    """

    vector: Array
    covariance: Array
    settled: bool
    others: tuple[tuple[Array, Array], ...] = ()


@dataclass(frozen=True, slots=True)
class Minimum:
    """Where a descent ended: vector, residuals, half the sum of their squares, and whether it came to rest."""

    vector: Array
    sigmas: Array
    cost: float
    settled: bool = False


def solve(model: BenchModel, seed: int | None = None) -> Solution:
    """Best vector over all starts; the laws and the wattmeter's scatter of `model` are refined on the way.

    seed: starts are moved at random by it; None leaves them where `start_vectors` puts them.
    """
    return explored(model, first_minimum(model, seed))


def first_minimum(model: BenchModel, seed: int | None = None) -> Minimum:
    """The best minimum from the starts alone."""
    best = min((_minimum(model, start) for start in start_vectors(model, seed)), key=_cost)
    return settle(model, best.vector)


def explored(model: BenchModel, best: Minimum) -> Solution:
    """The solution, once mirror images of each band's leaks have been tried from a minimum, as long as one is lower."""
    others = list(_mirrored(model, best))
    for _ in range(_MOST_ROUNDS):
        if min(map(_cost, others), default=np.inf) >= best.cost - 1e-6:
            break
        best = settle(model, min(others, key=_cost).vector)
        others = list(_mirrored(model, best))
    vector = model.turned(np.asarray(best.vector))
    distinct: list[Array] = [vector]
    for other in others:
        if other.cost < best.cost + _AS_GOOD and all(_differ(model, other.vector, known) for known in distinct):
            distinct.append(np.asarray(other.vector))
    return Solution(
        vector,
        covariance_at(model, vector),
        best.settled,
        tuple((other, covariance_at(model, other)) for other in distinct[1:]),
    )


def settle(model: BenchModel, vector: Array) -> Minimum:
    """The minimum near `vector`, with the laws and the wattmeter's scatter of `model` brought into step with it."""
    best = _minimum(model, vector)
    for _ in range(4):
        before = model.scatter
        model.refine_laws(best.vector)
        model.scatter = scatter_of(model, best.vector)
        best = _minimum(model, best.vector)
        if abs(model.scatter - before) < 0.02 * before or not best.settled:
            break
    return best


def robust(model: BenchModel, vector: Array) -> Array:
    """The vector that most steps agree on: those far off it lose their weight, as with Cauchy's distribution.

    By repeated weighting (P. J. Huber, Robust Statistics, 1981; from memory); weights and scatter of `model` are
    afterwards as they were.
    """
    weights, scatter = model.weights, model.scatter
    model.scatter = min(scatter, _SCATTER_START)
    steps = np.array([step for step, _ in model.residual_steps])
    for _ in range(_WEIGHTINGS):
        model.weights = weights
        off = np.zeros(len(model.steps))
        np.maximum.at(off, steps, np.abs(model.residuals(vector)[: len(steps)]))
        model.weights = weights / np.sqrt(1.0 + (off / _FAR) ** 2)
        vector = _minimum(model, vector).vector
    model.weights, model.scatter = weights, scatter
    return vector


def scatter_of(model: BenchModel, vector: Array) -> float:
    """The wattmeter's scatter from its residuals, less the freedom they have given to laws and gains."""
    sigmas = model.residuals(vector)[: len(model.residual_steps)]
    of_power = np.array([what == "power" and model.weights[step] > 0.0 for step, what in model.residual_steps])
    free = float(np.sum(freedom(model, vector)[of_power]))
    if free < 1.0:
        return model.scatter
    return float(np.clip(model.scatter * np.sqrt(np.sum(sigmas[of_power] ** 2) / free), _SCATTER_FLOOR, _SCATTER_MOST))


def freedom(model: BenchModel, vector: Array) -> Array:
    """What part of each step residual the fit has left free, 0..1 (one less its leverage)."""
    slopes = slopes_of(model, vector)
    leverage = np.einsum("ij,jk,ik->i", slopes, np.linalg.inv(slopes.T @ slopes), slopes)
    return np.asarray(1.0 - leverage[: len(model.residual_steps)])


def covariance_at(model: BenchModel, vector: Array) -> Array:
    """Covariance of the parameters at a minimum."""
    slopes = slopes_of(model, vector)
    covariance = np.linalg.inv(slopes.T @ slopes)
    return np.asarray((covariance + covariance.T) / 2.0)


def slopes_of(model: BenchModel, vector: Array) -> Array:
    """Jacobian of a model's residuals, shape (m, size).

    A residual depends on the own parameters of one band at most, so those of all bands are moved at once.
    """
    step = _DIFFERENCE * np.maximum(np.abs(vector), 1e-2)
    first, last = model.band_slice(0).start, model.loads_slice.start
    alone = [*range(first), *range(last, model.size)]
    places = first + BAND_SIZE * np.arange(len(model.bands))
    moved = np.zeros((len(alone) + BAND_SIZE, model.size))
    moved[np.arange(len(alone)), alone] = step[alone]
    for member in range(BAND_SIZE):
        moved[len(alone) + member, places + member] = step[places + member]
    rise = model.residuals(vector + moved) - model.residuals(vector - moved)
    found = np.zeros((rise.shape[1], model.size))
    found[:, alone] = rise[: len(alone)].T
    own = model.residual_bands[:, None] == np.arange(len(model.bands))
    for member in range(BAND_SIZE):
        found[:, places + member] = np.where(own, rise[len(alone) + member][:, None], 0.0)
    return np.asarray(found / (2.0 * step))


def jacobian_at(residuals: Callable[[Array], Array], vector: Array) -> Array:
    """Jacobian of any function of a vector, all parameters in one evaluation, shape (m, size)."""
    step = _DIFFERENCE * np.maximum(np.abs(vector), 1e-2)
    moved = np.diag(step)
    rise = residuals(vector + moved) - residuals(vector - moved)
    return np.asarray((rise / (2.0 * step[:, None])).T)


def _minimum(model: BenchModel, start: Array) -> Minimum:
    return _descend(model.residuals, partial(slopes_of, model), start)


def _descend(residuals: Callable[[Array], Array], slopes_at: Callable[[Array], Array], start: Array) -> Minimum:
    """The minimum near `start` by damped Gauss-Newton steps (D. W. Marquardt, J. SIAM 11, 431, 1963).

    It rests where the step still to go is less than _RESTING sd, or where no step leads lower.
    """
    here = Minimum(start, *_cost_of(residuals, start))
    damping, scale = 1e-3, np.zeros(len(start))
    for _ in range(_MOST_STEPS):
        slopes = slopes_at(here.vector)
        curvature, fall = slopes.T @ slopes, -slopes.T @ here.sigmas
        scale = np.maximum(scale, np.maximum(np.diag(curvature), 1e-12))
        before = here
        while here is before:
            step = np.linalg.solve(curvature + damping * np.diag(scale), fall)
            if (damping < 1e-3 and fall @ step < _RESTING**2) or damping > _NO_WAY_DOWN:
                return replace(here, settled=True)
            there = Minimum(here.vector + step, *_cost_of(residuals, here.vector + step))
            if there.cost < here.cost:
                here, damping = there, damping / 10.0
            else:
                damping *= 2.0
    return here


def _cost_of(residuals: Callable[[Array], Array], vector: Array) -> tuple[Array, float]:
    sigmas = residuals(vector)
    cost = 0.5 * float(sigmas @ sigmas)
    return sigmas, cost if np.isfinite(cost) else np.inf


def _mirrored(model: BenchModel, best: Minimum) -> Iterator[Minimum]:
    """Minima from mirror images of each band's leaks: its own and the loads first, then all parameters."""
    # Steps that do not determine a best place determine no other one.
    for band in np.flatnonzero(model.has_loads & best.settled):
        start = model.band_slice(int(band)).start
        for signs in _MIRRORS:
            vector = np.array(best.vector)
            vector[start + 3 : start + 8 : 2] *= signs
            near = in_band(model, vector, int(band))
            apart = np.abs(near.vector - best.vector)[start + 2 : start + 6].max()
            if near.cost < best.cost + _HOPELESS and apart > _SAME_LEAK:
                yield _minimum(model, near.vector)


def in_band(model: BenchModel, vector: Array, band: int, *, with_loads: bool = True) -> Minimum:
    """The minimum over the leaks of one band, and load parts and lines; all else stays as in `vector`."""
    start = model.band_slice(band).start
    own = np.arange(start + 2, start + 8)
    if with_loads:
        own = np.r_[own, model.loads_slice]
    part = _of_part(model, vector, own)
    near = _descend(part, partial(jacobian_at, part), vector[own])
    whole = vector.copy()
    whole[own] = near.vector
    return replace(near, vector=whole)


def _of_part(model: BenchModel, vector: Array, part: Places) -> Callable[[Array], Array]:
    """Residuals as a function of some parameters, the others held."""

    def residuals(own: Array) -> Array:
        whole = np.broadcast_to(vector, (*own.shape[:-1], len(vector))).copy()
        whole[..., part] = own
        return model.residuals(whole)

    return residuals


def _differ(model: BenchModel, one: Array, other: Array) -> bool:
    """Whether two minima have other leaks in a band with loads."""
    for band in np.flatnonzero(model.has_loads):
        start = model.band_slice(int(band)).start
        if np.abs(one[start + 2 : start + 6] - other[start + 2 : start + 6]).max() > _SAME_LEAK:
            return True
    return False


def _cost(found: Minimum) -> float:
    return float(found.cost)
