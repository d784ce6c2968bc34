"""Detector laws: counts of one channel to the square of the wave at its port, and back.

One rule: a law knows counts and its own units only; the gain to watts belongs to the band. A new law is a module
of its own and one line in LAWS; the battery in the tests finds it there.
"""

from __future__ import annotations

from typing import Protocol

import numpy as np
import numpy.typing as npt

from .diode import DiodeLaw

__all__ = ["LAWS", "DiodeLaw", "Law"]

Array = npt.NDArray[np.float64]


class Law(Protocol):
    """What every law offers. `square` is in law units: watts at the port = square / gain^2."""

    @property
    def parameters(self) -> Array:
        """The law's parameters in the form in which their covariance is kept, float64[p]."""

    @property
    def offset(self) -> float:
        """Counts with no carrier."""

    @property
    def words(self) -> str:
        """The law's own parameters in a line for people."""

    def square(self, counts: npt.ArrayLike) -> Array:
        """Square of the wave [law units] at `counts`, any shape; below the offset negative, of the same slope."""

    def counts(self, square: npt.ArrayLike) -> Array:
        """Counts at the square of the wave [law units]: the inverse of `square`."""

    def slope(self, counts: npt.ArrayLike) -> Array:
        """d square/d counts, any shape."""

    def sensitivity(self, counts: npt.ArrayLike) -> Array:
        """d square/d parameters, shape (*counts, p)."""


#: name in the bridge file -> law.
LAWS: dict[str, type[DiodeLaw]] = {"diode": DiodeLaw}
