"""Readings: columns of what a bridge says, each value with its 95 % interval.

One rule: NaN is "unknown" and never a guess; a flag says why. Interval columns are computed when first asked for,
so that a contest of millions pays only for what it shows.
"""

from __future__ import annotations

from dataclasses import dataclass, fields
from functools import cached_property

import numpy as np
import numpy.typing as npt

from . import flags as flag
from .directivity import NORMAL_DEVIATE, hard_bound, rho_interval, spread_quantile
from .reflection import return_loss_db, swr_from_rho

__all__ = ["COLUMNS", "Readings", "Terms"]

Array = npt.NDArray[np.float64]

#: In a hard bound the converter's noise stands at its 95 % limit, beside everything else.
_MOST = NORMAL_DEVIATE
#: The columns a meter hands over; all others follow from them.
COLUMNS = ("forward_counts", "reflected_counts", "frequency_hz", "forward_w", "reflected_w", "rho")


@dataclass(frozen=True, slots=True)
class Terms:
    """What the intervals are made of, each float64[k, n]: k is 1, or all bands where the frequency is unknown.

    forward_low_w, forward_high_w: linearised forward power less and plus the 95 % limit of its scale and law [W];
    forward_noise: converter's sd of it, relative. ratio_low, ratio_high: M = R/F less and plus the 95 % limit of its
    law and balance; ratio_noise: sd of M F - R over F. directivity, leak, angle_cosine, directivity_least: as in
    `Band`, at their limits. What is unbounded (a clipped detector) is 0 below and infinite above.
    """

    forward_low_w: Array
    forward_high_w: Array
    forward_noise: Array
    ratio_low: Array
    ratio_high: Array
    ratio_noise: Array
    directivity: Array
    leak: Array
    angle_cosine: Array
    directivity_least: Array

    def at(self, rows: slice) -> Terms:
        """The same terms for some of the n readings."""
        return Terms(*(getattr(self, column.name)[:, rows] for column in fields(self)))

    @classmethod
    def joined(cls, several: list[Terms]) -> Terms:
        """Several looks at the same readings as one, their intervals to be joined."""
        if len(several) == 1:
            return several[0]
        return cls(*(np.concatenate([getattr(one, column.name) for one in several]) for column in fields(cls)))


class Readings:
    """n readings. Columns are float64[n], `flags` uint32[n] (see `calibration.flags`)."""

    forward_counts: Array
    reflected_counts: Array
    frequency_hz: Array
    forward_w: Array
    reflected_w: Array
    rho: Array

    def __init__(
        self,
        columns: dict[str, Array],
        flags: npt.NDArray[np.uint32],
        terms: Terms,
        *,
        beyond_open: npt.NDArray[np.bool_],
        hard: bool = False,
    ) -> None:
        """Hold what `Meter.read` computed; `columns` has the names of COLUMNS.

        beyond_open: where more came back than even an open load returns. hard: bounds in place of 95 % intervals.
        """
        for name in COLUMNS:
            setattr(self, name, columns[name])
        self.flags = flags
        self.beyond_open = beyond_open
        self._terms, self._hard = terms, hard

    def __len__(self) -> int:
        """How many readings."""
        return len(self.forward_counts)

    def __getitem__(self, index: int) -> Readings:
        """Reading `index` alone, as readings of length one. IndexError beyond the end."""
        at = range(len(self))[index]
        rows = slice(at, at + 1)
        columns = {name: getattr(self, name)[rows] for name in COLUMNS}
        return Readings(
            columns, self.flags[rows], self._terms.at(rows), beyond_open=self.beyond_open[rows], hard=self._hard
        )

    def has(self, name: str) -> npt.NDArray[np.bool_]:
        """Where the flag `name` is set, bool[n]."""
        return np.asarray(self.flags & np.uint32(flag.bit(name)), dtype=bool)

    @cached_property
    def net_w(self) -> Array:
        """Net power [W], forward less reflected: exact for a real reference impedance."""
        return np.asarray(self.forward_w - self.reflected_w)

    @cached_property
    def swr(self) -> Array:
        """SWR of the estimate; NaN where more seems to come back than went out."""
        return _finite(swr_from_rho(self.rho))

    @cached_property
    def return_loss_db(self) -> Array:
        """Return loss [dB, positive] of the estimate."""
        return return_loss_db(self.rho)

    @property
    def rho_low(self) -> Array:
        """Lower end of rho."""
        return self._rho[0]

    @property
    def rho_high(self) -> Array:
        """Upper end of rho; above 1 where the leakage allows it; NaN where nothing bounds it."""
        return self._rho[1]

    @cached_property
    def swr_low(self) -> Array:
        """Lower end of SWR; NaN where nothing is known, or rho is above 1 at its lowest."""
        return _finite(swr_from_rho(self.rho_low))

    @cached_property
    def swr_high(self) -> Array:
        """Upper end of SWR; NaN where there is no upper bound."""
        return _finite(swr_from_rho(self.rho_high))

    @property
    def forward_low_w(self) -> Array:
        """Lower end of forward power [W]."""
        return self._forward[0]

    @property
    def forward_high_w(self) -> Array:
        """Upper end of forward power [W]; NaN where nothing bounds it."""
        return self._forward[1]

    @cached_property
    def reflected_low_w(self) -> Array:
        """Lower end of reflected power [W]."""
        return np.asarray(self.forward_low_w * self._passive_low**2)

    @cached_property
    def reflected_high_w(self) -> Array:
        """Upper end of reflected power [W]."""
        return np.asarray(self.forward_high_w * self._passive_high**2)

    @cached_property
    def net_low_w(self) -> Array:
        """Lower end of net power [W]; a load takes power or none, so it is never negative."""
        return np.asarray(self.forward_low_w * (1.0 - self._passive_high**2))

    @cached_property
    def net_high_w(self) -> Array:
        """Upper end of net power [W]."""
        return np.asarray(self.forward_high_w * (1.0 - self._passive_low**2))

    @property
    def _passive_low(self) -> Array:
        """Lower end of rho for powers: 0 where nothing is known."""
        return np.where(np.isnan(self.rho_low), 0.0, np.minimum(self.rho_low, 1.0))

    @property
    def _passive_high(self) -> Array:
        """Upper end of rho for powers: a load that adds none has at most 1."""
        return np.where(np.isnan(self.rho_high), 1.0, np.minimum(self.rho_high, 1.0))

    @cached_property
    def _rho(self) -> tuple[Array, Array]:
        t = self._terms
        if self._hard:
            lowest, highest = (t.ratio_low - _MOST * t.ratio_noise, t.ratio_high + _MOST * t.ratio_noise)
            low, _ = hard_bound(np.sqrt(np.maximum(lowest, 0.0)), t.directivity, t.leak)
            _, high = hard_bound(np.sqrt(np.maximum(highest, 0.0)), t.directivity, t.leak)
        else:
            leaks = t.directivity, t.leak, t.angle_cosine, t.directivity_least
            low, high = rho_interval(t.ratio_low, t.ratio_high, t.ratio_noise, *leaks)
        return _finite(np.fmin.reduce(low, axis=0)), _finite(np.fmax.reduce(high, axis=0))

    @cached_property
    def _forward(self) -> tuple[Array, Array]:
        """P from F = P |1 + c G|^2: 1 + c^2 rho^2 with a swing of 2 c rho over the load's angle."""
        t = self._terms
        reach = t.leak * self._passive_high
        if self._hard:
            swing = 2.0 * reach + _MOST * t.forward_noise
        else:
            swing, _ = spread_quantile(2.0 * reach, t.forward_noise)
        level = 1.0 + reach * reach
        with np.errstate(divide="ignore", invalid="ignore"):
            low = t.forward_low_w / (level + swing)
            high = np.where(level > swing, t.forward_high_w / (level - swing), np.inf)
        return np.fmin.reduce(low, axis=0), _finite(np.fmax.reduce(high, axis=0))


def _finite(values: Array) -> Array:
    return np.where(np.isfinite(values), values, np.nan)
