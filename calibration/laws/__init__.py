"""Detector laws: counts of one channel to the square of the wave at its port, and back.

One rule: a law knows counts and its own units only; the gain to watts belongs to the band. A new law is a module
of its own and one line in LAWS; fit, file, meter and the battery in the tests find it there.
"""

from __future__ import annotations

from typing import Any, Protocol, Self

import numpy as np
import numpy.typing as npt

from .diode import DiodeLaw
from .log import LogLaw
from .table import TableLaw

__all__ = ["LAWS", "DiodeLaw", "Law", "LogLaw", "TableLaw"]

Array = npt.NDArray[np.float64]


class Law(Protocol):
    """What every law offers. `square` is in law units: watts at the port = square / gain^2."""

    @property
    def offset(self) -> float:
        """Counts with no carrier."""

    @property
    def parameters(self) -> Array:
        """What a fit may move, float64[p], the offset first; covariance is kept in this form."""

    @property
    def words(self) -> str:
        """The law in a line for people."""

    def with_parameters(self, vectors: npt.ArrayLike) -> Self:
        """This law with other parameters [..., p]; many at once give fields that broadcast with counts [m]."""

    def priors(self) -> tuple[Array, Array]:
        """Mean and sd of each parameter's prior, float64[p] each; sd is infinite where there is none."""

    def likeness(self) -> Array:
        """Sd of the difference of each parameter between two detectors of one type; infinite where it says nothing."""

    def square(self, counts: npt.ArrayLike) -> Array:
        """Square of the wave [law units] at `counts`, any shape; below the offset negative, of the same slope."""

    def counts(self, square: npt.ArrayLike) -> Array:
        """Counts at the square of the wave [law units]: the inverse of `square`."""

    def slope(self, counts: npt.ArrayLike) -> Array:
        """d square/d counts, any shape."""

    def sensitivity(self, counts: npt.ArrayLike) -> Array:
        """d square/d parameters, shape (*counts, p)."""

    def covers(self, counts: npt.ArrayLike) -> npt.NDArray[np.bool_]:
        """Where the law may be used, any shape; near dark and beyond its span it may not be known."""

    @property
    def lowest(self) -> float:
        """The lowest count at which the law may be used: the dark count, or where a table begins."""

    def misfit(self, counts: npt.ArrayLike) -> Array:
        """Relative sd of power by which a real detector may stray from the law at `counts`, any shape."""

    def refined(self, counts: Array, off_db: Array, scatter_db: float) -> Self:
        """A law that also follows what a fit left over.

        off_db: reference less law at each of `counts` [m], decibels of power; scatter_db: the reference's own scatter.
        """

    def table(self) -> dict[str, Any]:
        """The law as plain numbers for a file."""

    @classmethod
    def from_table(cls, table: dict[str, Any]) -> Self:
        """The law of such numbers. KeyError, TypeError or ValueError where they are not whole."""

    @classmethod
    def start(cls, counts: Array, watts: Array, group: npt.NDArray[np.intp], dark: float) -> Self | None:
        """A first law from counts at known powers [m], each in a group with a gain of its own; None with too few."""


#: name in the bridge file -> law.
LAWS: dict[str, type[DiodeLaw] | type[LogLaw] | type[TableLaw]] = {"diode": DiodeLaw, "log": LogLaw, "table": TableLaw}
