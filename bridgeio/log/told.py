"""What a bridge says of itself beside its counts, and what of it holds at each tally.

One rule: a word holds from where it stands among the frames until the next one or until it is old, as it does live.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from bridgeio.desk import FRESH_S, SAME_WARMTH_S
from bridgeio.frames import TEMPERATURE_UNKNOWN
from bridgeio.journal import Counts, Gathered
from calibration.bridge import Bridge

__all__ = ["Told", "alike", "latest", "temperature_steps"]

Array = npt.NDArray[np.float64]
Places = npt.NDArray[np.intp]
Micros = npt.NDArray[np.int64]

_US = 1_000_000
#: Nearer than this to the bench's temperature [K] a meter reads at it, and else in steps of half a degree.
_SAME_TEMPERATURE_K = 0.75
#: Stands for a temperature that is not known, where only changes count.
_UNKNOWN_C = -1e9


@dataclass(frozen=True, slots=True)
class _Words:
    """What the bridge said of one thing, in order: place among the frames, when [us], what."""

    place: Places
    utc_us: Micros
    what: Array

    def then(self, place: Places, utc_us: Micros, what: Array) -> _Words:
        """The last of these, and what was said in the blocks after it."""
        last = np.full(min(1, len(self.place)), -1, dtype=np.intp)
        return _Words(
            np.concatenate([last, place]),
            np.concatenate([self.utc_us[-1:], utc_us]),
            np.concatenate([self.what[-1:], what]),
        )

    def last(self, counts: Counts, longest_s: float = math.inf) -> Places:
        """Which was the last word at each tally [n]; -1 where there is none, or it is older than `longest_s` [s]."""
        at = latest(self.place, counts.place)
        if len(self.place):
            at = np.where(np.abs(counts.utc_us - self.utc_us[at]) <= longest_s * _US, at, -1)
        return at

    def of(self, at: Places) -> Array:
        """The words at places as `last` gives them; NaN at -1."""
        return np.where(at >= 0, self.what[at], np.nan) if len(self.what) else np.full(len(at), np.nan)


class Told:
    """What the bridge itself has said lately: frequencies [Hz], temperatures [degrees Celsius], nameplates."""

    def __init__(self) -> None:
        self._hz = self._c = self._plates = _Words(np.empty(0, np.intp), np.empty(0, np.int64), np.empty(0))

    def hear(self, gathered: Gathered) -> None:
        """Take in what stands in the next blocks; of what was before only the last is kept."""
        place, utc_us = gathered.conditions_place, gathered.conditions_us
        hz, c100 = gathered.frequency_hz, gathered.temperature_c100
        told = hz > 0
        self._hz = self._hz.then(place[told], utc_us[told], hz[told].astype(float))
        told = c100 != TEMPERATURE_UNKNOWN
        self._c = self._c.then(place[told], utc_us[told], c100[told] / 100.0)
        self._plates = self._plates.then(gathered.plates_place, gathered.plates_us, gathered.plates_us.astype(float))

    def frequencies(self, counts: Counts) -> Array:
        """The frequency told last before each tally [Hz, n]; NaN where there is none, or it is stale."""
        return self._hz.of(self._hz.last(counts, FRESH_S))

    def named_us(self, counts: Counts) -> Array:
        """When the last nameplate before each tally came [us, n]; NaN where none has."""
        return self._plates.of(self._plates.last(counts))

    def temperatures(self, counts: Counts, bridge: Bridge | None) -> Iterator[tuple[slice, float | None]]:
        """Rows that a meter reads at one temperature, and that [degrees Celsius]; None where it is not known."""
        at = self._c.last(counts, SAME_WARMTH_S)
        if bridge is None or (at < 0).all():
            yield slice(0, len(counts)), None
            return
        step = np.where(at >= 0, temperature_steps(self._c.what, bridge)[at], _UNKNOWN_C)
        for rows in alike(step):
            place = int(at[rows.start])
            yield rows, None if place < 0 else float(self._c.what[place])


def temperature_steps(c: npt.ArrayLike, bridge: Bridge) -> Array:
    """The temperature at which a meter reads at each temperature [degrees Celsius]: the bench's, or half degrees."""
    told = np.asarray(c, dtype=float)
    near = np.abs(told - bridge.temperature_c) < _SAME_TEMPERATURE_K
    return np.where(near, bridge.temperature_c, np.round(2.0 * told) / 2.0)


def latest(sorted_values: npt.NDArray[Any], at: npt.NDArray[Any]) -> Places:
    """Place of the last of `sorted_values` that is not above each of `at`; -1 where there is none."""
    return np.searchsorted(sorted_values, at, side="right") - 1


def alike(*columns: npt.NDArray[Any]) -> Iterator[slice]:
    """Rows one after the other in which no column changes."""
    changed = np.zeros(len(columns[0]) - 1, dtype=bool)
    for column in columns:
        changed |= column[1:] != column[:-1]
    edges = [0, *(np.flatnonzero(changed) + 1).tolist(), len(columns[0])]
    return (slice(at, end) for at, end in itertools.pairwise(edges))
