"""The counts of the last second: where they lie, how they scatter, and what a sound converter would make of it.

One rule: whole batches come in by reference and nothing is computed until somebody asks, so that a thousand frames a
second cost no more than their bookkeeping.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .frames import Crest, Item, Tallies

__all__ = ["BINS", "CountFacts", "RecentCounts", "counting_step_sd"]

Array = npt.NDArray[np.float64]

#: Bars of a histogram.
BINS = 12
#: Counts are looked at over this long [s], a slow bridge's over this many frames, but never older than the last [s].
_SPAN_S, _FEWEST, _OLDEST_S = 1.0, 20, 60.0
#: Counts that range over more than this part of the largest follow a signal; where they stand well above the noise.
_MOVING_PART, _MOVING_SD = 0.2, 100.0


@dataclass(frozen=True, slots=True)
class CountFacts:
    """One channel over the last second. mean, low, high [counts]; noise: sd of a reading [counts], NaN below two.

    bars: how many lie in each of BINS equal parts of low..high, of fewer where whole counts fill fewer.
    """

    readings: int
    mean: float
    low: float
    high: float
    noise: float
    bars: tuple[int, ...]

    def moving(self, expected_sd: float) -> bool:
        """Whether the counts follow a signal, so that their scatter says nothing of the converter.

        expected_sd: of a single reading [counts].
        """
        span = self.high - self.low
        return self.high > _MOVING_SD * expected_sd and span > _MOVING_PART * self.high


class RecentCounts:
    """Takes items as they come; `facts` sums up the last second. Not for several threads at once."""

    def __init__(self) -> None:
        """Nothing seen yet."""
        self._batches: deque[tuple[float, Array, Array]] = deque()
        self._held = 0
        self._of_crests = False

    def take(self, items: Sequence[Item], at_s: float) -> None:
        """Keep the counts among items that came at `at_s` [s, steady]; means of crest frames only without tallies."""
        for item in items:
            if isinstance(item, Tallies):
                if self._of_crests:
                    self.forget()
                self._add(at_s, item.forward, item.reflected)
            elif isinstance(item, Crest) and (self._of_crests or not self._held):
                self._of_crests = True
                self._add(at_s, np.array([float(item.forward_mean)]), np.array([float(item.reflected_mean)]))

    def forget(self) -> None:
        """Another board may talk from here on."""
        self._batches.clear()
        self._held, self._of_crests = 0, False

    def facts(self) -> tuple[CountFacts, CountFacts] | None:
        """Forward and reflected, None where nothing has come."""
        if not self._batches:
            return None
        forward = np.concatenate([batch[1] for batch in self._batches])
        reflected = np.concatenate([batch[2] for batch in self._batches])
        return _facts(forward), _facts(reflected)

    def _add(self, at_s: float, forward: Array, reflected: Array) -> None:
        batches = self._batches
        batches.append((at_s, forward, reflected))
        self._held += len(forward)
        while len(batches) > 1 and self._spare(at_s - batches[0][0], len(batches[0][1])):
            self._held -= len(batches.popleft()[1])

    def _spare(self, age_s: float, size: int) -> bool:
        """Whether the oldest batch, so old and so large, may go."""
        return age_s > _OLDEST_S or (age_s > _SPAN_S and self._held - size >= _FEWEST)


def counting_step_sd(summed: int) -> float:
    """Sd [counts] that rounding alone gives a sum of `summed` conversions, each rounded to a step of one count.

    A step's error is even over the step, hence 1/sqrt(12) of it; n independent ones add as their squares (W. R.
    Bennett, "Spectra of quantized signals", 1948, from memory).
    """
    return math.sqrt(max(1, summed) / 12.0)


def _facts(counts: Array) -> CountFacts:
    low, high = float(counts.min()), float(counts.max())
    return CountFacts(len(counts), float(counts.mean()), low, high, _noise(counts), _bars(counts, low, high))


def _noise(counts: Array) -> float:
    """Sd of a single reading by what neighbours differ: a slow change, as of a turned knob, hardly raises it.

    sd^2 = mean((x[i+1] - x[i])^2)/2 (J. von Neumann and others, "The mean square successive difference", 1941, from
    memory).
    """
    if len(counts) < 2:
        return math.nan
    return math.sqrt(float(np.mean(np.square(np.diff(counts)))) / 2.0)


def _bars(counts: Array, low: float, high: float) -> tuple[int, ...]:
    """How many counts lie in each part. Whole counts of a small span get a part each: none is empty by form alone."""
    whole = low == math.floor(low) and high == math.floor(high)
    width = high - low + 1.0 if whole else high - low
    bins = int(min(BINS, width)) if whole else BINS
    places = ((counts - low) * (bins / width)).astype(np.intp) if width > 0.0 else np.zeros(len(counts), dtype=np.intp)
    return tuple(np.bincount(np.minimum(places, bins - 1), minlength=bins).tolist())
