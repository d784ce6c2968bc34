"""The diode law in counts: ln I0(x) = u + ln(1 + u/b), u = (n - n0)/s, x = k sqrt(P).

One rule: nothing assumes a detector exponent; between square-law foot and linear head it passes 2 in the knee.
Offset n0 [counts], scale s [counts per nVt], load term b = RL Is/nVt; the gain k per band is not part of the law.
Source: see `calibration.detector`; the divider to the converter only scales s.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..bessel import inverse_log_i0, log_i0, log_i0_slope
from ..detector import solve_load_term

__all__ = ["DiodeLaw"]

Array = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class DiodeLaw:
    """Diode peak detector with offset [counts], scale [counts], load term [1]."""

    offset: float
    scale: float
    load_term: float

    @property
    def parameters(self) -> Array:
        """(offset, ln scale, ln load_term): logarithms, as both are positive and trade off as products."""
        return np.array([self.offset, np.log(self.scale), np.log(self.load_term)])

    @property
    def words(self) -> str:
        """The parameters in a line for people."""
        return f"dark {self.offset:.2f} counts, scale {self.scale:.3f} counts, load term {self.load_term:.3f}"

    @classmethod
    def from_parameters(cls, vector: npt.ArrayLike) -> DiodeLaw:
        """The law of a parameter vector as `parameters` gives it."""
        offset, log_scale, log_load = np.asarray(vector, dtype=float)
        return cls(float(offset), float(np.exp(log_scale)), float(np.exp(log_load)))

    @classmethod
    def stacked(cls, vectors: npt.ArrayLike) -> DiodeLaw:
        """Many laws at once: vectors of shape (..., 3); their fields have shape (..., 1), to go with counts."""
        offset, log_scale, log_load = np.moveaxis(np.asarray(vectors, dtype=float)[..., None], -2, 0)
        return cls(offset, np.exp(log_scale), np.exp(log_load))

    def square(self, counts: npt.ArrayLike) -> Array:
        """Square of the wave x^2 at `counts`, any shape; below the offset the foot's straight line goes on."""
        u = self._drive(counts)
        above = inverse_log_i0(self._level(np.maximum(u, 0.0))) ** 2
        return np.where(u < 0.0, u * self._foot, above)

    def counts(self, square: npt.ArrayLike) -> Array:
        """Counts at the square of the wave x^2, any shape."""
        y = np.asarray(square, dtype=float)
        above = solve_load_term(log_i0(np.sqrt(np.maximum(y, 0.0))), self.load_term)
        return self.offset + self.scale * np.where(y < 0.0, y / self._foot, above)

    def slope(self, counts: npt.ArrayLike) -> Array:
        """d x^2/d counts, any shape."""
        u = self._drive(counts)
        return self._square_per_level(u) * self._level_per_drive(u) / self.scale

    def sensitivity(self, counts: npt.ArrayLike) -> Array:
        """d x^2/d (offset, ln scale, ln load_term), shape (*counts, 3)."""
        u = self._drive(counts)
        per_level = self._square_per_level(u)
        per_drive = per_level * self._level_per_drive(u)
        above = np.maximum(u, 0.0)
        per_load = -above / (self.load_term + above) * per_level
        # Below the foot x^2 = 4 u (1 + 1/b): its change with ln b is -4 u/b.
        per_load = np.where(u < 0.0, -4.0 * u / self.load_term, per_load)
        return np.stack([-per_drive / self.scale, -per_drive * u, per_load], axis=-1)

    @property
    def _foot(self) -> float:
        return 4.0 * (1.0 + 1.0 / self.load_term)

    def _drive(self, counts: npt.ArrayLike) -> Array:
        return np.asarray((np.asarray(counts, dtype=float) - self.offset) / self.scale)

    def _level(self, u: Array) -> Array:
        return np.asarray(u + np.log1p(u / self.load_term))

    def _level_per_drive(self, u: Array) -> Array:
        return np.asarray(1.0 + 1.0 / (self.load_term + np.maximum(u, 0.0)))

    def _square_per_level(self, u: Array) -> Array:
        x = inverse_log_i0(self._level(np.maximum(u, 0.0)))
        # ln I0 = x^2/4 - x^4/64 + ...: at the foot 2x/(I1/I0) is 0/0 and its limit is 4 + x^2/2.
        small = x < 1e-3
        safe = np.where(small, 1.0, x)
        return np.where(small, 4.0 + 0.5 * x * x, 2.0 * safe / log_i0_slope(safe))
