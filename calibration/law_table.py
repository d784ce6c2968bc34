"""A law as a table over the converter's codes, so that a reading is a look-up.

One rule: between codes the table is a straight line, and outside the codes it stops at the ends.
"""

from __future__ import annotations

from functools import cached_property

import numpy as np
import numpy.typing as npt

from .laws import Law

__all__ = ["LawTable"]

Array = npt.NDArray[np.float64]

#: Up to this full scale every code has its knot; beyond, the knots are even in the square root.
_MOST_CODES = 65535
#: Sensitivities change little from code to code: about this many knots will do for them.
_SENSITIVITY_KNOTS = 4096


class LawTable:
    """Look-up of a law's square, and where intervals are asked for, of its slope and sensitivity."""

    def __init__(self, law: Law, full_scale: int) -> None:
        """Tabulate `law` over 0..full_scale [counts]."""
        self._law = law
        self._even_root = full_scale > _MOST_CODES
        count = min(full_scale, _MOST_CODES) + 1
        self._root_step = np.sqrt(full_scale) / (count - 1)
        self._knots = self._counts_at(np.arange(count))
        self._square = law.square(self._knots)
        self._stride = -(-count // _SENSITIVITY_KNOTS)

    def square(self, counts: Array) -> Array:
        """The law's square [law units] at `counts`, any shape; NaN in gives NaN out."""
        place, part = self._place(counts)
        left = self._square.take(place)
        return np.asarray(left + part * (self._square.take(place + 1) - left))

    def slope(self, counts: Array) -> Array:
        """d square/d counts at `counts`, any shape."""
        place, _ = self._place(counts)
        rise = self._square.take(place + 1) - self._square.take(place)
        return np.asarray(rise / (self._knots.take(place + 1) - self._knots.take(place)))

    def sensitivity(self, counts: Array) -> Array:
        """d square/d law parameters at `counts`, shape (*counts, p)."""
        place, part = self._place(counts)
        at, beyond = np.divmod(place, self._stride)
        left = self._sensitivity.take(at, axis=0)
        part = (part + beyond) / self._stride
        return np.asarray(left + part[..., None] * (self._sensitivity.take(at + 1, axis=0) - left))

    @cached_property
    def _sensitivity(self) -> Array:
        """The law's sensitivity at every stride-th knot, [knots, p]; the last knot may lie just beyond the codes."""
        return self._law.sensitivity(self._counts_at(np.arange(0, len(self._knots) + self._stride, self._stride)))

    def _counts_at(self, place: npt.NDArray[np.intp]) -> Array:
        """Counts of the knots at `place`."""
        return np.square(place * self._root_step) if self._even_root else place.astype(np.float64)

    def _place(self, counts: Array) -> tuple[npt.NDArray[np.intp], Array]:
        n = np.clip(counts, 0.0, self._knots[-1])
        n = np.where(np.isnan(n), 0.0, n)
        position = np.sqrt(n) / self._root_step if self._even_root else n
        place = np.minimum(position.astype(np.intp), len(self._knots) - 2)
        left = self._knots.take(place)
        part = (n - left) / (self._knots.take(place + 1) - left)
        return place, np.where(np.isnan(counts), np.nan, part)
