"""Where a fit begins: the first laws, and gains from the wattmeter.

One rule: leaks start small and not at zero, where a dummy's reading has no slope in them, once with each sign of
their imaginary parts.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from .fit_model import BenchModel
from .laws import Law

__all__ = ["start_vectors"]

Array = npt.NDArray[np.float64]

_START_LEAKS = np.array([0.02, 0.02, 0.01, 0.01])
_SIGNS = np.array([0.0, 1.0, 0.0, 1.0])


#: How far a seed moves starts: ln of scale, load term and gains, and each part of a leak or of the dummy.
_SPREAD_LOG, _SPREAD_LEAK, _SPREAD_DUMMY = 0.2, 0.02, 0.005


def start_vectors(model: BenchModel, seed: int | None = None) -> list[Array]:
    """Starting vectors; they differ in the sign of the leaks' imaginary parts. A seed moves them at random."""
    base = model.priors[0].copy()
    for side, law in enumerate(model.first_laws):
        base[model.law_slice(side)] = law.parameters
    for band in range(len(model.bands)):
        at = model.band_slice(band).start
        base[at] = _gain(model, "power", band, 0)
        own = _gain(model, "reversed", band, 1)
        base[at + 1] = base[at] if np.isnan(own) else own
    starts = [_with_leaks(model, base, sign) for sign in (1.0, -1.0)]
    return (
        starts
        if seed is None
        else [_moved(model, start, np.random.default_rng([seed, n])) for n, start in enumerate(starts)]
    )


def _moved(model: BenchModel, start: Array, chance: np.random.Generator) -> Array:
    vector = start.copy()
    for side in (0, 1):
        law = model.law_slice(side)
        vector[law.start + 1 : law.stop] += _SPREAD_LOG * chance.standard_normal(law.stop - law.start - 1)
    spread = np.repeat([_SPREAD_LOG, _SPREAD_LEAK, _SPREAD_DUMMY], [2, 4, 2])
    for band in range(len(model.bands)):
        at = model.band_slice(band).start
        vector[at : at + 8] += spread * chance.standard_normal(8)
    return vector


def _with_leaks(model: BenchModel, base: Array, sign: float) -> Array:
    vector = base.copy()
    for band in range(len(model.bands)):
        at = model.band_slice(band).start
        vector[at + 2 : at + 6] = np.where(_SIGNS > 0.0, sign, 1.0) * _START_LEAKS
    return vector


def _gain(model: BenchModel, kind: str, band: int, side: int) -> float:
    """ln gain of a side in a band by the wattmeter; NaN without such steps."""
    law: Law = model.first_laws[side]
    steps = [model.steps[at] for at in model.of_kind[kind] if model.band[at] == band and model.weights[at] > 0.0]
    counts = np.array([(s.forward, s.reflected)[side] for s in steps])
    watts = np.array([s.power_w for s in steps], dtype=float)
    squares = law.square(counts)
    good = squares > 0.0
    return float(0.5 * np.mean(np.log(squares[good] / watts[good]))) if good.any() else float("nan")
