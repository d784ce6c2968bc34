"""The diode law in counts: ln I0(x) = u + ln(1 + u/b), u = (n - n0)/s, x = k sqrt(P).

One rule: nothing assumes a detector exponent; between square-law foot and linear head it passes 2 in the knee.
Offset n0 [counts], scale s [counts per nVt], load term b = RL Is/nVt; the gain k per band is not part of the law.
Source: see `calibration.detector`; the divider to the converter only scales s.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from ..bessel import inverse_log_i0, log_i0, log_i0_slope
from ..detector import solve_load_term

__all__ = ["DiodeLaw"]

Array = npt.NDArray[np.float64]

#: The grid on which a fit looks for a start: ln load term, and ln scale as part of the largest count met.
_LOAD_TERMS = np.log(np.geomspace(0.02, 100.0, 19))
_SCALE_PARTS = np.log(np.geomspace(5e-4, 1.0, 41))


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

    def with_parameters(self, vectors: npt.ArrayLike) -> DiodeLaw:
        """Other parameters; of shape (..., 3), the fields then have shape (..., 1)."""
        v = np.asarray(vectors, dtype=float)
        if v.ndim == 1:
            return DiodeLaw(float(v[0]), float(np.exp(v[1])), float(np.exp(v[2])))
        offset, log_scale, log_load = np.moveaxis(v[..., None], -2, 0)
        return DiodeLaw(offset, np.exp(log_scale), np.exp(log_load))

    def priors(self) -> tuple[Array, Array]:
        """The load term of detectors in use spans 0.05 to 50; scale and load term trade off, so it needs a bound."""
        return np.array([0.0, 0.0, np.log(1.5)]), np.array([np.inf, np.inf, 1.5])

    def likeness(self) -> Array:
        """Two diodes of one type: scales within 15 %, load terms within a factor 1.65 (lots spread 26 % in Is)."""
        return np.array([np.inf, 0.15, 0.5])

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

    def covers(self, counts: npt.ArrayLike) -> npt.NDArray[np.bool_]:
        """The law holds from foot to head."""
        return np.ones(np.shape(counts), dtype=bool)

    @property
    def lowest(self) -> float:
        """The lowest count at which it may be used."""
        return self.offset

    def misfit(self, counts: npt.ArrayLike) -> Array:
        """None: the law is physics."""
        return np.zeros(np.shape(counts))

    def refined(self, counts: Array, off_db: Array, scatter_db: float) -> DiodeLaw:
        """The same: what physics leaves over is not learnt from one bench."""
        return self

    def table(self) -> dict[str, Any]:
        """Plain numbers."""
        return {name: float(getattr(self, name)) for name in ("offset", "scale", "load_term")}

    @classmethod
    def from_table(cls, table: dict[str, Any]) -> DiodeLaw:
        """The law of `table`."""
        return cls(float(table["offset"]), float(table["scale"]), float(table["load_term"]))

    @classmethod
    def start(cls, counts: Array, watts: Array, group: npt.NDArray[np.intp], dark: float) -> DiodeLaw | None:
        """The law on a grid of scale and load term with the least scatter of ln gain within groups.

        A grid, because the two trade off and a poor start ends in a false minimum. None with fewer than two powers.
        """
        if len(counts) < 2:
            return None
        offset = min(dark, float(counts.min()) - 1e-3)
        scales = _SCALE_PARTS + np.log(counts.max())
        grid = np.array([(offset, scale, load) for scale in scales for load in _LOAD_TERMS])
        law = cls(offset, 1.0, 1.0)
        log_gain = 0.5 * np.log(law.with_parameters(grid).square(counts) / watts)
        scatter = np.zeros(len(grid))
        for member in np.unique(group):
            own = log_gain[:, group == member]
            scatter += np.square(own - own.mean(axis=1, keepdims=True)).sum(axis=1)
        return law.with_parameters(grid[int(np.argmin(scatter))])

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
