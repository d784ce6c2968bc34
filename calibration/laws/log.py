"""The law of a logarithmic detector: counts rise by a slope per decibel, with a smooth correction.

One rule: what it shows with no carrier is its own noise, a power like any other: at the dark count the law is zero.
counts = offset + slope [10 log10(1 + square) + correction - correction at dark], correction in dB.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from .hermite import evaluate

__all__ = ["LogLaw"]

Array = npt.NDArray[np.float64]

_DB = 10.0 / np.log(10.0)
#: A correction is made from this many powers up, and the line is trusted to this [dB, sd] without one (data sheets
#: of logarithmic amplifiers promise +-1 dB over the whole range and do better in the middle; common practice).
_ENOUGH = 6
_LINE_SD_DB = 0.3
_CORRECTED_SD_DB = 0.03
_NOTHING = np.zeros(0)
_LISTS = ("knots", "corrections", "correction_slopes")


@dataclass(frozen=True, slots=True)
class LogLaw:
    """Logarithmic detector: dark count, slope [counts/dB], correction [dB] through knots [counts].

    open_db: sd [dB] of what the correction does not follow.
    """

    offset: float
    slope_per_db: float
    knots: Array = field(default_factory=lambda: _NOTHING)
    corrections: Array = field(default_factory=lambda: _NOTHING)
    correction_slopes: Array = field(default_factory=lambda: _NOTHING)
    open_db: float = _LINE_SD_DB

    @property
    def parameters(self) -> Array:
        """(offset, ln slope)."""
        return np.array([self.offset, np.log(self.slope_per_db)])

    @property
    def words(self) -> str:
        """The law in a line for people."""
        corrected = f", corrected at {len(self.knots)} powers" if len(self.knots) else ", a straight line"
        return f"dark {self.offset:.2f} counts, {self.slope_per_db:.3f} counts/dB{corrected}"

    def with_parameters(self, vectors: npt.ArrayLike) -> LogLaw:
        """Other parameters; of shape (..., 2), the fields then have shape (..., 1)."""
        v = np.asarray(vectors, dtype=float)
        if v.ndim == 1:
            return replace(self, offset=float(v[0]), slope_per_db=float(np.exp(v[1])))
        offset, slope = np.moveaxis(v[..., None], -2, 0)
        return replace(self, offset=offset, slope_per_db=np.exp(slope))

    def priors(self) -> tuple[Array, Array]:
        """Nothing is known beforehand."""
        return np.zeros(2), np.full(2, np.inf)

    def likeness(self) -> Array:
        """Slopes of two parts of one type are within 5 % (a data sheet's spread is 23-27 mV/dB; from memory)."""
        return np.array([np.inf, 0.05])

    def square(self, counts: npt.ArrayLike) -> Array:
        """Power in units of the detector's own noise; below dark the straight line of its slope there goes on."""
        n = np.asarray(counts, dtype=float)
        level, _ = self._level_db(np.maximum(n, self.offset))
        return np.where(n < self.offset, (n - self.offset) * self._dark_slope, np.expm1(level / _DB))

    def counts(self, square: npt.ArrayLike) -> Array:
        """Counts at a power in units of the detector's own noise: the correction by repeated substitution."""
        y = np.asarray(square, dtype=float)
        line = self.offset + self.slope_per_db * _DB * np.log1p(np.maximum(y, 0.0))
        n = line
        for _ in range(40):
            n = line + self.slope_per_db * (self._correction(n)[0] - self._correction(self.offset)[0])
        return np.where(y < 0.0, self.offset + y / self._dark_slope, n)

    def slope(self, counts: npt.ArrayLike) -> Array:
        """d square/d counts, any shape."""
        n = np.asarray(counts, dtype=float)
        level, rise = self._level_db(np.maximum(n, self.offset))
        return np.asarray(np.exp(level / _DB) * rise / _DB)

    def sensitivity(self, counts: npt.ArrayLike) -> Array:
        """d square/d (offset, ln slope), shape (*counts, 2)."""
        n = np.asarray(counts, dtype=float)
        above = np.maximum(n, self.offset)
        level, _ = self._level_db(above)
        steep = np.exp(level / _DB) / _DB
        below = np.minimum(n - self.offset, 0.0)
        by_slope = -steep * (above - self.offset) / self.slope_per_db - below / self.slope_per_db / _DB
        return np.stack([np.broadcast_to(-steep * self._dark_rise, n.shape), by_slope], axis=-1)

    def covers(self, counts: npt.ArrayLike) -> npt.NDArray[np.bool_]:
        """The line goes on everywhere."""
        return np.ones(np.shape(counts), dtype=bool)

    @property
    def lowest(self) -> float:
        """The lowest count at which it may be used."""
        return self.offset

    def misfit(self, counts: npt.ArrayLike) -> Array:
        """A data sheet's conformance where the line stands alone, what the correction leaves where it helps."""
        n = np.asarray(counts, dtype=float)
        if not len(self.knots):
            return np.full(n.shape, _LINE_SD_DB / _DB)
        corrected = (n >= self.knots[0]) & (n <= self.knots[-1])
        return np.asarray(np.where(corrected, self.open_db, _LINE_SD_DB) / _DB)

    def refined(self, counts: Array, off_db: Array, scatter_db: float) -> LogLaw:
        """With enough powers a smooth correction through what the line left over."""
        if len(np.unique(counts)) < _ENOUGH:
            return self
        from scipy.interpolate import make_smoothing_spline

        places = np.argsort(counts)
        x, y = _merged(counts[places], off_db[places])
        # The smoothing is the usual trade of roughness against fit; scatter of the reference says how much to smooth.
        penalty = (scatter_db / max(float(np.std(y)), 1e-9)) ** 2 * (np.ptp(x) / len(x)) ** 3
        spline = make_smoothing_spline(x, y, lam=penalty)
        before, before_slope = self._correction(x)
        return replace(
            self,
            knots=x,
            corrections=before - spline(x),
            correction_slopes=before_slope - spline.derivative()(x),
            open_db=float(np.hypot(_CORRECTED_SD_DB, scatter_db / np.sqrt(2.0))),
        )

    def table(self) -> dict[str, Any]:
        """Plain numbers."""
        plain = {name: float(getattr(self, name)) for name in ("offset", "slope_per_db", "open_db")}
        return plain | {name: [float(value) for value in getattr(self, name)] for name in _LISTS}

    @classmethod
    def from_table(cls, table: dict[str, Any]) -> LogLaw:
        """The law of `table`."""
        knots, values, slopes = (np.array([float(v) for v in table[name]]) for name in _LISTS)
        offset, slope_per_db, open_db = (float(table[name]) for name in ("offset", "slope_per_db", "open_db"))
        return cls(offset, slope_per_db, knots, values, slopes, open_db)

    @classmethod
    def start(cls, counts: Array, watts: Array, group: npt.NDArray[np.intp], dark: float) -> LogLaw | None:
        """Slope by regression of counts on decibels within groups; None without two powers in a group."""
        db = 10.0 * np.log10(watts)
        for member in np.unique(group):
            own = group == member
            counts, db = counts - np.where(own, counts[own].mean(), 0.0), db - np.where(own, db[own].mean(), 0.0)
        spread = float(np.sum(db * db))
        slope = float(np.sum(counts * db)) / spread if spread > 1.0 else 0.0
        return cls(dark, slope) if slope > 0.0 else None

    def _level_db(self, n: Array) -> tuple[Array, Array]:
        """Decibels above dark [dB, >= 0] and their rise per count."""
        correction, bend = self._correction(n)
        level = (n - self.offset) / self.slope_per_db - correction + self._correction(self.offset)[0]
        return np.asarray(level), np.asarray(1.0 / self.slope_per_db - bend)

    def _correction(self, counts: npt.ArrayLike) -> tuple[Array, Array]:
        """Correction [dB] and its slope [dB/count]; held at the end knots' values beyond them."""
        n = np.asarray(counts, dtype=float)
        if not len(self.knots):
            return np.zeros(n.shape), np.zeros(n.shape)
        inside = np.clip(n, self.knots[0], self.knots[-1])
        value, slope = evaluate(inside, self.knots, self.corrections, self.correction_slopes)
        return value, np.where(inside == n, slope, 0.0)

    @property
    def _dark_rise(self) -> Array:
        return np.asarray(1.0 / self.slope_per_db - self._correction(self.offset)[1])

    @property
    def _dark_slope(self) -> Array:
        return np.asarray(self._dark_rise / _DB)


def _merged(x: Array, y: Array) -> tuple[Array, Array]:
    """Points with nearly the same counts as one: a spline wants rising knots."""
    apart = np.concatenate([[True], np.diff(x) > 1e-3 * np.ptp(x)])
    place = np.cumsum(apart) - 1
    size = np.bincount(place)
    return np.bincount(place, x) / size, np.bincount(place, y) / size
