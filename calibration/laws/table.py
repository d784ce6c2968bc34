"""A detector of unknown law: monotone interpolation of the logarithm of power against counts.

One rule: it is refused outside the counts it was measured at; no law is assumed between dark and the lowest of them.
Source: F. N. Fritsch, R. E. Carlson, Monotone piecewise cubic interpolation, SIAM J. Numer. Anal. 17, 238 (1980).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from .hermite import basis, evaluate

__all__ = ["TableLaw"]

Array = npt.NDArray[np.float64]

_ENOUGH = 4
_BETWEEN_KNOTS = 0.005


@dataclass(frozen=True, slots=True)
class TableLaw:
    """Table: dark count, knots [counts], ln of the square there and its slopes per count."""

    offset: float
    knots: Array
    values: Array
    slopes: Array

    @property
    def parameters(self) -> Array:
        """(offset, values...)."""
        return np.concatenate([[self.offset], self.values])

    @property
    def words(self) -> str:
        """The law in a line for people."""
        span = f"{self.knots[0]:.1f} to {self.knots[-1]:.1f} counts"
        return f"dark {self.offset:.2f} counts, a table of {len(self.knots)} powers, {span}"

    def with_parameters(self, vectors: npt.ArrayLike) -> TableLaw:
        """Other parameters, shape (..., 1 + knots); the slopes stay, as a fit moves values by little."""
        v = np.asarray(vectors, dtype=float)
        if v.ndim == 1:
            return replace(self, offset=float(v[0]), values=v[1:])
        offset: Any = v[..., :1]
        return replace(self, offset=offset, values=v[..., 1:])

    def priors(self) -> tuple[Array, Array]:
        """Nothing is known of the shape; the first knot fixes the units, which the gain would else share."""
        sd = np.full(1 + len(self.knots), np.inf)
        sd[1] = 1e-6
        return self.parameters * (sd < 1.0), sd

    def likeness(self) -> Array:
        """Two tables have different knots: one says nothing of the other."""
        return np.full(1 + len(self.knots), np.inf)

    def square(self, counts: npt.ArrayLike) -> Array:
        """Square at `counts` [m or any]; outside the span that of its nearest end: ask `covers`."""
        inside = np.clip(np.asarray(counts, dtype=float), self.knots[0], self.knots[-1])
        value = evaluate(inside, self.knots, self.values, self.slopes)[0]
        return np.where(np.isnan(inside), np.nan, np.exp(value))

    def counts(self, square: npt.ArrayLike) -> Array:
        """Counts at a square, any shape, by Newton's method within the span; its ends beyond."""
        target = np.clip(np.log(np.maximum(np.asarray(square, dtype=float), 1e-300)), self.values[0], self.values[-1])
        n = np.interp(target, self.values, self.knots)
        for _ in range(60):
            value, slope = evaluate(n, self.knots, self.values, self.slopes)
            n = np.clip(n - (value - target) / np.maximum(slope, 1e-12), self.knots[0], self.knots[-1])
        return np.asarray(n)

    def slope(self, counts: npt.ArrayLike) -> Array:
        """d square/d counts, any shape."""
        inside = np.clip(np.asarray(counts, dtype=float), self.knots[0], self.knots[-1])
        value, slope = evaluate(inside, self.knots, self.values, self.slopes)
        return np.asarray(np.exp(value) * slope)

    def sensitivity(self, counts: npt.ArrayLike) -> Array:
        """d square/d (offset, values...), shape (*counts, 1 + knots)."""
        inside = np.clip(np.asarray(counts, dtype=float), self.knots[0], self.knots[-1])
        weights = basis(inside, self.knots)[0] * self.square(inside)[..., None]
        return np.concatenate([np.zeros((*inside.shape, 1)), weights], axis=-1)

    def covers(self, counts: npt.ArrayLike) -> npt.NDArray[np.bool_]:
        """Within the knots."""
        n = np.asarray(counts, dtype=float)
        return np.asarray((n >= self.knots[0]) & (n <= self.knots[-1]))

    @property
    def lowest(self) -> float:
        """The lowest count at which it may be used."""
        return float(self.knots[0])

    def misfit(self, counts: npt.ArrayLike) -> Array:
        """Between knots it is trusted to half a percent."""
        return np.full(np.shape(counts), _BETWEEN_KNOTS)

    def refined(self, counts: Array, off_db: Array, scatter_db: float) -> TableLaw:
        """The same: a table has no line to correct."""
        return self

    def table(self) -> dict[str, Any]:
        """Plain numbers."""
        lists = {"knots": self.knots, "values": self.values, "slopes": self.slopes}
        return {"offset": float(self.offset)} | {n: [float(v) for v in values] for n, values in lists.items()}

    @classmethod
    def from_table(cls, table: dict[str, Any]) -> TableLaw:
        """The law of `table`. ValueError where its knots do not rise."""
        knots, values, slopes = (np.array([float(v) for v in table[n]]) for n in ("knots", "values", "slopes"))
        if len(knots) < 2 or not (len(knots) == len(values) == len(slopes)) or np.any(np.diff(knots) <= 0.0):
            raise ValueError("knots of a table law must rise, with a value and a slope each")
        return cls(float(table["offset"]), knots, values, slopes)

    @classmethod
    def start(cls, counts: Array, watts: Array, group: npt.NDArray[np.intp], dark: float) -> TableLaw | None:
        """From the group with the most powers; None where that has fewer than four, or they do not rise."""
        from scipy.interpolate import PchipInterpolator

        if len(counts) < _ENOUGH:
            return None
        members, sizes = np.unique(group, return_counts=True)
        own = group == members[np.argmax(sizes)]
        order = np.argsort(counts[own])
        knots, values = counts[own][order], np.log(watts[own][order])
        if len(knots) < _ENOUGH or np.any(np.diff(knots) <= 0.0) or np.any(np.diff(values) <= 0.0):
            return None
        return cls(dark, knots, values, PchipInterpolator(knots, values).derivative()(knots))
