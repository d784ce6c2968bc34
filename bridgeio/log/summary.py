"""Power and SWR of a journal, hour by hour: what was on the air, how strong, and how well matched.

One rule: one frame alone never decides. What is called highest or worst has a second frame near it within a fifth.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from calibration import flags as flag
from calibration.block import Block
from calibration.readings import Readings

from .passages import Passage
from .replay import reading_at
from .told import alike

__all__ = ["Crest", "Hour", "confirmed_place", "hours", "median_place", "spans_s", "swr_order"]

Array = npt.NDArray[np.float64]
Micros = npt.NDArray[np.int64]
Bools = npt.NDArray[np.bool_]

_US = 1_000_000
_HOUR_US = 3600 * _US
#: A second frame within this part of a value confirms it; it stands among so many neighbours, so near in time [us].
_NEAR, _NEIGHBOURS, _NEAR_US = 0.2, 8, 10 * _US
#: Values that nothing confirms, passed over before a log is called too damaged to tell.
_MOST_LONE = 1000
#: SWR is told where forward is above this part of the hour's highest.
_STRONG = 0.2
#: A tally stands for the time since the one before it, but for no more than so many usual ones.
_LONGEST_SPANS = 2.0


@dataclass(frozen=True, slots=True)
class Crest:
    """A highest power, when it was, and its reading with intervals: NaN, 0 and None where no second frame confirms one.

    lone_w: a higher one of a single frame that no other confirms, and when; else NaN [W].
    """

    forward_w: float
    utc_us: int
    reading: Readings | None
    lone_w: float
    lone_us: int


@dataclass(frozen=True, slots=True)
class Hour:
    """One hour of a journal, by its start [us since 1970].

    recorded_s: time that tallies stand for; counted_s: of it as counts only; on_air_s: of it with a carrier.
    energy_j: net energy. median, worst: readings of length one, with intervals; None where there is none.
    """

    start_us: int
    recorded_s: float
    counted_s: float
    on_air_s: float
    energy_j: float
    crest: Crest | None
    median: Readings | None
    worst: Readings | None
    worst_us: int


def hours(columns: Iterable[tuple[Passage, Block]]) -> Iterator[Hour]:
    """The hours of passages in order, each once it is over; the tallies of one hour are held at a time.

    An hour that a clock set back comes to again is told again.
    """
    gathered: _Gathering | None = None
    for passage, block in columns:
        span_s = spans_s(passage.counts.utc_us)
        start_us = passage.counts.utc_us // _HOUR_US * _HOUR_US
        for rows in alike(start_us):
            hour = int(start_us[rows.start])
            if gathered is None or gathered.start_us != hour:
                if gathered is not None:
                    yield gathered.hour()
                gathered = _Gathering(hour)
            gathered.add(passage, block, rows, span_s)
    if gathered is not None:
        yield gathered.hour()


def spans_s(utc_us: Micros) -> Array:
    """The time each tally stands for [s, n]: since the one before, but a gap counts as two usual ones at most."""
    if len(utc_us) < 2:
        return np.zeros(len(utc_us))
    steps = np.diff(utc_us) / _US
    usual = float(np.median(steps))
    return np.concatenate([[usual], np.clip(steps, 0.0, _LONGEST_SPANS * max(usual, 0.0))])


def confirmed_place(values: Array, utc_us: Micros) -> tuple[int | None, int | None]:
    """Place of the highest of `values` [n] that a second frame near it confirms, and of a higher one that none does.

    NaN is passed over. None where there is none.
    """
    left, lone = np.where(np.isnan(values), -np.inf, values), None
    for _ in range(min(len(left), _MOST_LONE)):
        at = int(left.argmax())
        if left[at] == -np.inf:
            break
        if _confirmed(values, utc_us, at):
            return at, lone
        lone = at if lone is None else lone
        left[at] = -np.inf
    return None, lone


def swr_order(swr: npt.NDArray[np.floating], rho: npt.NDArray[np.floating], flags: npt.NDArray[np.uint32]) -> Array:
    """SWR for comparing [n]: 1 where it is below what can be read, infinite where rho is above 1, NaN if unknown."""
    below = (flags & np.uint32(flag.bit("below-reading"))) != 0
    with np.errstate(invalid="ignore"):
        return np.where(below & np.isnan(rho), 1.0, np.where(rho >= 1.0, np.inf, swr)).astype(float)


def median_place(values: Array) -> int | None:
    """Place of the median of `values` [n] (the lower one of two); NaN is passed over. None where there is none."""
    known = np.flatnonzero(~np.isnan(values))
    if not len(known):
        return None
    middle = (len(known) - 1) // 2
    return int(known[np.argpartition(values[known], middle)[middle]])


@dataclass(slots=True)
class _Gathering:
    """The carriers of one hour as they come."""

    start_us: int
    recorded_s: float = 0.0
    counted_s: float = 0.0
    on_air_s: float = 0.0
    energy_j: float = 0.0
    #: Where the rows are from: passages, and rows of them.
    _passages: list[Passage] = field(default_factory=list)
    _rows: list[npt.NDArray[np.intp]] = field(default_factory=list)
    _columns: list[tuple[Micros, Array, Array, Bools]] = field(default_factory=list)

    def add(self, passage: Passage, block: Block, rows: slice, span_s: Array) -> None:
        """Take in some rows of a passage."""
        forward, span_s = block.forward_w[rows], span_s[rows]
        carrier = forward > 0.0
        self.recorded_s += float(span_s.sum())
        self.counted_s += float(span_s[np.isnan(forward)].sum())
        self.on_air_s += float(span_s[carrier].sum())
        self.energy_j += float(np.nansum(block.net_w[rows][carrier] * span_s[carrier]))
        at = np.flatnonzero(carrier) + rows.start
        if len(at):
            below = (block.flags[at] & np.uint32(flag.bit("below-reading"))) != 0
            order = swr_order(block.swr[at], block.rho[at], block.flags[at])
            self._passages.append(passage)
            self._rows.append(at)
            self._columns.append((passage.counts.utc_us[at], block.forward_w[at].astype(float), order, below))

    def hour(self) -> Hour:
        """What it comes to."""
        crest, median, worst = None, None, None
        worst_us = 0
        if self._columns:
            utc_us, forward_w, order, below = (np.concatenate(column) for column in zip(*self._columns, strict=True))
            crest = self._crest(forward_w, utc_us)
            strong = forward_w > _STRONG * crest.forward_w
            median = self._reading(median_place(np.where(strong, order, np.nan)))
            at, _ = confirmed_place(np.where(strong & ~below, order, np.nan), utc_us)
            worst, worst_us = self._reading(at), 0 if at is None else int(utc_us[at])
        sums = self.recorded_s, self.counted_s, self.on_air_s, self.energy_j
        return Hour(self.start_us, *sums, crest, median, worst, worst_us)

    def _crest(self, forward_w: Array, utc_us: Micros) -> Crest:
        at, lone = confirmed_place(forward_w, utc_us)
        found = (math.nan, 0) if at is None else (float(forward_w[at]), int(utc_us[at]))
        alone = (math.nan, 0) if lone is None else (float(forward_w[lone]), int(utc_us[lone]))
        return Crest(*found, self._reading(at), *alone)

    def _reading(self, at: int | None) -> Readings | None:
        """The full reading at a place among all carriers."""
        if at is None:
            return None
        ends = list(itertools.accumulate(len(rows) for rows in self._rows))
        which = int(np.searchsorted(ends, at, side="right"))
        row = self._rows[which][at - (ends[which - 1] if which else 0)]
        return reading_at(self._passages[which], int(row))


def _confirmed(values: Array, utc_us: Micros, at: int) -> bool:
    """Whether a neighbour's value is within a fifth of the one at `at`."""
    around = slice(max(0, at - _NEIGHBOURS), at + _NEIGHBOURS + 1)
    near = np.abs(utc_us[around] - utc_us[at]) <= _NEAR_US
    near[at - around.start] = False
    here, others = values[at], values[around][near]
    return bool(((others >= (1.0 - _NEAR) * here) & (others <= here / (1.0 - _NEAR))).any())
