"""A law as a table over the converter's codes, so that a reading is a look-up.

One rule: between codes the table is a straight line, and outside the codes it stops at the ends.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from .laws import Law

__all__ = ["LawTable", "LookUp"]

Array = npt.NDArray[np.float64]

#: Up to this full scale every code has its knot; beyond, the knots are even in the square root.
_MOST_CODES = 65535
#: Sensitivities change little from code to code: about this many knots will do for them.
_SENSITIVITY_KNOTS = 4096


@dataclass(frozen=True, slots=True)
class LookUp:
    """A law at n counts: its square [law units], d square/d counts, and d square/d law parameters [n, p]."""

    square: Array
    slope: Array
    sensitivity: Array


class LawTable:
    """Look-up of a law's square, and for intervals of its slope and sensitivity."""

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
        place, part, _ = self._place(counts)
        left = self._square.take(place)
        return np.asarray(left + part * (self._square.take(place + 1) - left))

    def look_up(self, counts: Array) -> LookUp:
        """All there is at `counts`, any shape; NaN in gives NaN out."""
        place, part, width = self._place(counts)
        left = self._square.take(place)
        rise = self._square.take(place + 1) - left
        at, beyond = np.divmod(place, self._stride)
        low = self._sensitivity.take(at, axis=0)
        step = ((part + beyond) / self._stride)[..., None] * (self._sensitivity.take(at + 1, axis=0) - low)
        return LookUp(np.asarray(left + part * rise), np.asarray(rise / width), np.asarray(low + step))

    @cached_property
    def _sensitivity(self) -> Array:
        """The law's sensitivity at every stride-th knot, [knots, p]; the last knot may lie just beyond the codes."""
        return self._law.sensitivity(self._counts_at(np.arange(0, len(self._knots) + self._stride, self._stride)))

    def _counts_at(self, place: npt.NDArray[np.intp]) -> Array:
        """Counts of the knots at `place`."""
        return np.square(place * self._root_step) if self._even_root else place.astype(np.float64)

    def _place(self, counts: Array) -> tuple[npt.NDArray[np.intp], Array, Array | float]:
        """The knot below, how far to the next one (0 to 1), and the way between them [counts]."""
        inside = np.minimum(np.maximum(counts, 0.0), self._knots[-1])
        known = np.fmax(inside, 0.0)
        position = np.sqrt(known) / self._root_step if self._even_root else known
        place = np.minimum(position.astype(np.intp), len(self._knots) - 2)
        if not self._even_root:
            return place, inside - place, 1.0
        left = self._knots.take(place)
        width = self._knots.take(place + 1) - left
        return place, (inside - left) / width, width
