"""From a fitted vector to one band's leakage with limits that hold.

One rule: a limit is used only where the steps have identified what it bounds; elsewhere a wider bound stands in, and
a sentence says which and why.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import numpy.typing as npt

from .bridge import Band
from .directivity import NORMAL_DEVIATE, seen_directivity_limit
from .fit_model import BenchModel
from .reflection import rho_from_return_loss

__all__ = ["band_of_fit", "with_neighbours"]

Array = npt.NDArray[np.float64]

#: The bridge's own match where nobody has said it: return loss [dB] of a plain homebuilt coupler (common practice).
_OWN_MATCH_DB = 20.0


def band_of_fit(
    model: BenchModel, vector: Array, covariance: Array, band: int, match_return_loss_db: float | None
) -> tuple[Band, bool]:
    """Band number `band` of a fit, and whether its loads have identified the forward port's leak."""
    d, _, dummy = (complex(value[0]) for value in model.leaks(vector, np.array([band])))
    at = model.band_slice(band).start
    leak, leak_limit, identified = _forward_leak(model, vector, covariance, band, match_return_loss_db)
    seen = abs(d + dummy)
    limit = float(
        seen_directivity_limit(seen + NORMAL_DEVIATE * _seen_sd(d + dummy, covariance, at), model.dummy_limit)
    )
    by_loads = _outer_limit(d, covariance[at + 2 : at + 4, at + 2 : at + 4])
    laws = [range(model.law_slice(side).start, model.law_slice(side).stop) for side in (0, 1)]
    own = [at, at + 1, *laws[0], *laws[1]]
    return Band(
        frequency_hz=model.bands[band],
        gain_forward=float(np.exp(vector[at])),
        gain_reflected=float(np.exp(vector[at + 1])),
        directivity=min(abs(d) if by_loads < limit else seen, limit),
        directivity_limit=min(limit, by_loads),
        forward_leak=leak,
        forward_leak_limit=leak_limit,
        covariance=covariance[np.ix_(own, own)],
    ), identified


def with_neighbours(bands: list[Band], identified: list[bool]) -> tuple[Band, ...]:
    """Bands whose loads say nothing of the forward leak take the larger limit of their neighbours, if smaller."""
    sure = [band for band, known in zip(bands, identified, strict=True) if known]
    return tuple(band if known else _bounded_by(band, sure) for band, known in zip(bands, identified, strict=True))


def _bounded_by(band: Band, sure: list[Band]) -> Band:
    below = [other for other in sure if other.frequency_hz < band.frequency_hz]
    above = [other for other in sure if other.frequency_hz > band.frequency_hz]
    beside = below[-1:] + above[:1]
    if not beside:
        return band
    limit = max(other.forward_leak_limit for other in beside)
    if limit >= band.forward_leak_limit:
        return band
    return replace(band, forward_leak_limit=limit, forward_leak=max(other.forward_leak for other in beside))


def _forward_leak(
    model: BenchModel, vector: Array, covariance: Array, band: int, match_return_loss_db: float | None
) -> tuple[float, float, bool]:
    """|c|, its limit, and whether the loads bound it better than reversed step, dummy and own match together."""
    at = model.band_slice(band).start + 4
    c = complex(model.leaks(vector, np.array([band]))[1][0])
    by_loads = _outer_limit(c, covariance[at : at + 2, at : at + 2])
    bound = _leak_bound(model, vector, band, match_return_loss_db)
    if by_loads < bound:
        return abs(c), by_loads, True
    return bound / 2.0, bound, False


def _leak_bound(model: BenchModel, vector: Array, band: int, match_return_loss_db: float | None) -> float:
    """|c| from a reversed step: the leak seen, the dummy's own reflection and the bridge's own match added."""
    seen = model.reversed_leaks(vector).get(band, 0.0)
    match = float(rho_from_return_loss(_OWN_MATCH_DB if match_return_loss_db is None else match_return_loss_db))
    return seen + model.dummy_limit + match


def _outer_limit(value: complex, covariance: Array) -> float:
    """95 % limit of a complex value's magnitude: each part at its own limit, away from zero."""
    reach = NORMAL_DEVIATE * np.sqrt(np.diag(covariance))
    return float(np.hypot(abs(value.real) + reach[0], abs(value.imag) + reach[1]))


def _seen_sd(seen: complex, covariance: Array, at: int) -> float:
    """Sd of |d + dummy|."""
    way = np.array([seen.real, seen.imag, seen.real, seen.imag]) / max(abs(seen), 1e-12)
    own = [at + 2, at + 3, at + 6, at + 7]
    return float(np.sqrt(way @ covariance[np.ix_(own, own)] @ way))
