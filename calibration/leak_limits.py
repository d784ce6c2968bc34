"""From a fitted vector to one band's leakage with limits that hold.

One rule: a limit is used only where the steps have identified what it bounds; elsewhere a wider bound stands in, and
a sentence says which and why.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from .bridge import Band
from .directivity import NORMAL_DEVIATE, seen_directivity_limit
from .fit_model import LEAK_SD, BenchModel
from .reflection import rho_from_return_loss

__all__ = ["band_of_fit", "dummy_bound", "with_neighbours"]

Array = npt.NDArray[np.float64]

#: The bridge's own match where nobody has said it: return loss [dB] of a plain homebuilt coupler (common practice).
_OWN_MATCH_DB = 20.0
#: Leak of a forward port that no turned bridge has shown: a directivity of 20 dB, as the fit's own prior has it.
_UNSEEN_LEAK = LEAK_SD
#: 5 % of a plane normal distribution lie beyond so many sd.
_PLANE_DEVIATE = float(np.sqrt(-2.0 * np.log(0.05)))
#: Loads have identified c where they leave less than this part of what the turned bridge left open.
_OWN_PART = 0.6
#: With the dummy as the fifth: balance and both parts of d and c are five unknowns, and ask for as many loads in
#: general position (C. A. Hoer, IEEE Trans. IM-21, 466, 1972; from memory). Fewer explain themselves by leaks that are
#: not there.
_LEAST_LOADS = 4
#: An angle known no better than this (its sine at the 95 % limit) counts as not known.
_WIDEST_SINE = 0.9


def band_of_fit(
    model: BenchModel,
    vector: Array,
    covariance: Array,
    band: int,
    match_return_loss_db: float | None,
    others: tuple[tuple[Array, Array], ...] = (),
) -> tuple[Band, bool]:
    """Band number `band` of a fit, and whether its loads have identified the forward port's leak.

    others: further minima (vector, covariance) that explain the steps as well; limits then hold for all of them.
    """
    at = model.band_slice(band).start
    seen, by_dummy = dummy_bound(model, vector, covariance, band)
    by_turning = _leak_bound(model, vector, band, match_return_loss_db)
    leaks = [_Leaks.of(model, *minimum, band, by_turning) for minimum in ((vector, covariance), *others)]
    enough = bool(model.load_kinds[band] >= _LEAST_LOADS)
    by_loads = [max(values) if enough else np.inf for values in zip(*(x.limits for x in leaks), strict=True)]
    identified = enough and all(x.leak_identified for x in leaks)
    directivity_limit, leak_limit = min(by_dummy, by_loads[0]), min(by_turning, by_loads[1])
    # Without the bridge turned a few loads explain themselves by leaks of almost any angle, and more than one.
    sure = identified and band in model.reversed_leaks(vector)
    cosine = min(x.angle_cosine(directivity_limit, leak_limit) for x in leaks) if sure else -1.0
    laws = [range(model.law_slice(side).start, model.law_slice(side).stop) for side in (0, 1)]
    own = [at, at + 1, *laws[0], *laws[1]]
    return Band(
        frequency_hz=model.bands[band],
        gain_forward=float(np.exp(vector[at])),
        gain_reflected=float(np.exp(vector[at + 1])),
        directivity=min(abs(leaks[0].d) if by_loads[0] < by_dummy else seen, directivity_limit),
        directivity_limit=directivity_limit,
        forward_leak=min(abs(leaks[0].c), leak_limit) if identified else leak_limit / 2.0,
        forward_leak_limit=leak_limit,
        angle_cosine=cosine,
        covariance=covariance[np.ix_(own, own)],
    ), identified


def dummy_bound(model: BenchModel, vector: Array, covariance: Array, band: int) -> tuple[float, float]:
    """What the dummy load shows in a band, |d + dummy|, and the 95 % limit of |d| that follows from its return loss."""
    d, _, dummy = (complex(value[0]) for value in model.leaks(vector, np.array([band])))
    seen = abs(d + dummy)
    noise = NORMAL_DEVIATE * _seen_sd(d + dummy, covariance, model.band_slice(band).start)
    return seen, float(seen_directivity_limit(seen + noise, model.dummy_limit))


@dataclass(frozen=True, slots=True)
class _Leaks:
    """d and c of a band at one minimum, with the covariance of their real and imaginary parts."""

    d: complex
    c: complex
    covariance: Array
    leak_identified: bool

    @classmethod
    def of(cls, model: BenchModel, vector: Array, covariance: Array, band: int, by_turning: float) -> _Leaks:
        """At this minimum, with the bound on |c| from the turned bridge in place of the fit's wide prior."""
        own = slice(model.band_slice(band).start + 2, model.band_slice(band).start + 6)
        mean, wide = vector[own], covariance[own, own]
        sd = by_turning / _PLANE_DEVIATE
        told = max(1.0 / sd**2 - 1.0 / LEAK_SD**2, 0.0) * np.diag([0.0, 0.0, 1.0, 1.0])
        # A normal prior of c around nothing, of precision `told`, updates mean and covariance.
        gain = np.linalg.inv(np.eye(4) + wide @ told)
        mean, narrow = gain @ mean, gain @ wide
        largest = float(np.sqrt(np.linalg.eigvalsh(narrow[2:, 2:])[-1]))
        return cls(complex(*mean[:2]), complex(*mean[2:]), narrow, largest < _OWN_PART * min(sd, LEAK_SD))

    @property
    def limits(self) -> tuple[float, float]:
        """95 % limits of |d| and |c|."""
        return _outer_limit(self.d, self.covariance[:2, :2]), _outer_limit(self.c, self.covariance[2:, 2:])

    def angle_cosine(self, d_limit: float, c_limit: float) -> float:
        """cos(arg d + arg c), the least favourable within its own 95 % limits; -1 where these do not confine it.

        It goes with |d| and |c| at their limits, where a positive cosine would promise that one leak takes much of the
        other away: it is made smaller by as much as both might be smaller than these limits.
        """
        least = [_inner_limit(self.d, self.covariance[:2, :2]), _inner_limit(self.c, self.covariance[2:, 2:])]
        if min(least) <= 0.0:
            return -1.0
        # d(arg z) = (x dy - y dx)/|z|^2
        by_parts = [part / abs(z) ** 2 for z in (self.d, self.c) for part in (-z.imag, z.real)]
        sine = NORMAL_DEVIATE * float(np.sqrt(np.array(by_parts) @ self.covariance @ np.array(by_parts)))
        if sine >= _WIDEST_SINE:
            return -1.0
        angle, reach = abs(float(np.angle(self.d * self.c))), float(np.arcsin(sine))
        cosine = float(np.cos(min(angle + reach, np.pi)))
        return cosine if cosine < 0.0 else cosine * least[0] * least[1] / (d_limit * c_limit)


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


def _leak_bound(model: BenchModel, vector: Array, band: int, match_return_loss_db: float | None) -> float:
    """|c| from a reversed step: the leak seen, the dummy's own reflection and the bridge's own match added."""
    seen = model.reversed_leaks(vector).get(band, _UNSEEN_LEAK)
    match = float(rho_from_return_loss(_OWN_MATCH_DB if match_return_loss_db is None else match_return_loss_db))
    return seen + model.dummy_limit + match


def _outer_limit(value: complex, covariance: Array) -> float:
    """95 % limit of a complex value's magnitude: each part at its own limit, away from zero."""
    reach = NORMAL_DEVIATE * np.sqrt(np.diag(covariance))
    return float(np.hypot(abs(value.real) + reach[0], abs(value.imag) + reach[1]))


def _inner_limit(value: complex, covariance: Array) -> float:
    """95 % lower limit of a complex value's magnitude; below zero where the value itself may be none."""
    return abs(value) - _PLANE_DEVIATE * float(np.sqrt(np.linalg.eigvalsh(covariance)[-1]))


def _seen_sd(seen: complex, covariance: Array, at: int) -> float:
    """Sd of |d + dummy|."""
    way = np.array([seen.real, seen.imag, seen.real, seen.imag]) / max(abs(seen), 1e-12)
    own = [at + 2, at + 3, at + 6, at + 7]
    return float(np.sqrt(way @ covariance[np.ix_(own, own)] @ way))
