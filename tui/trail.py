"""The trail of the last minute: where the reading was on the rho axis, the best point, and which way it goes.

One rule: best, distance and direction are relative. They compare readings of one bridge within a minute, so they go
by the repeatability (the noise alone), which is far finer than the interval of the value.
"""

from __future__ import annotations

import math
import statistics
from collections import deque
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from .sample import Sample

__all__ = ["SPAN_S", "Bin", "Relation", "Trail"]

#: The trail reaches this far back [s].
SPAN_S = 60.0
_BIN_S = 0.1  # readings closer than this share one bin, so that 1000/s cost no more than 10/s
_RECENT_S = 1.0  # direction and noise are told from the readings of this time, but from 12 at least
_FEWEST_RECENT, _MOST_RECENT = 12, 200
_NOISE_FLOOR = 2e-4  # rho; below it a converter's single step may hide all noise
_UNFIT_FOR_BEST = frozenset({"clipped", "swapped", "over-unity"})
#: For independent normal noise of sd s, x1 - 2 x2 + x3 has the sd sqrt 6 s, and the median of its size is 0.6745 of it.
_SD_OF_MEDIAN_BEND = 1.0 / (0.6745 * math.sqrt(6.0))


@dataclass(frozen=True, slots=True)
class Bin:
    """Readings of a tenth of a second: from and to [s, steady clock], their span in rho, and the last one."""

    from_s: float
    to_s: float
    low: float
    high: float
    last: float


@dataclass(frozen=True, slots=True)
class Relation:
    """How the newest reading stands to the best, in rho.

    best: None before there is one. away: 0 while at the best within the noise, NaN where either is missing. noise:
    sd of a single reading. direction: -1 towards a better match, +1 away from it, 0 steady, None not known yet.
    """

    best: float | None
    away: float
    noise: float
    direction: int | None


class Trail:
    """Feed it every sample; draw from `bins` and `relation`."""

    def __init__(self) -> None:
        """Start empty."""
        self._bins: deque[Bin] = deque()
        self._recent: deque[tuple[float, float]] = deque(maxlen=_MOST_RECENT)
        self._best: float | None = None
        self._candidate = math.nan
        self._place = math.nan

    def feed(self, sample: Sample) -> None:
        """Add one reading; one without a place on the axis leaves a gap, a weak one says nothing."""
        if sample.weak:
            return
        before, self._place = self._place, sample.place
        if math.isnan(self._place):
            self._candidate = math.nan
            self._recent.clear()
            return
        self._add(sample.at_s, gap=math.isnan(before))
        self._improve(sample)

    def forget(self) -> None:
        """Forget the best point; the thread stays."""
        self._best = None
        self._candidate = math.nan

    def bins(self) -> Iterator[Bin]:
        """The thread, newest first."""
        return reversed(self._bins)

    def relation(self) -> Relation:
        """Compare the newest reading with the best and with those shortly before."""
        places = [place for _, place in self._recent]
        noise = _noise(places)
        return Relation(self._best, self._away(noise), noise, _direction(places, noise))

    def _away(self, noise: float) -> float:
        if self._best is None or math.isnan(self._place):
            return math.nan
        distance = self._place - self._best
        return distance if distance > 3.0 * noise else 0.0

    def _add(self, at_s: float, gap: bool) -> None:
        place = self._place
        if self._bins and not gap and at_s - self._bins[-1].from_s < _BIN_S:
            old = self._bins.pop()
            self._bins.append(Bin(old.from_s, at_s, min(old.low, place), max(old.high, place), place))
        else:
            self._bins.append(Bin(at_s, at_s, place, place, place))
        self._recent.append((at_s, place))
        while len(self._recent) > _FEWEST_RECENT and at_s - self._recent[0][0] > _RECENT_S:
            self._recent.popleft()
        while self._bins[0].to_s < at_s - SPAN_S:
            self._bins.popleft()

    def _improve(self, sample: Sample) -> None:
        """The best point is what two neighbouring readings both reach: one alone never decides."""
        if sample.flags & _UNFIT_FOR_BEST:
            self._candidate = math.nan
            return
        if not math.isnan(self._candidate):
            reached = max(self._place, self._candidate)
            self._best = reached if self._best is None else min(self._best, reached)
        self._candidate = self._place


def _noise(places: Sequence[float]) -> float:
    """Sd of a single reading by the median bend of three neighbours, which a steadily turned knob does not raise."""
    if len(places) < 6:
        return _NOISE_FLOOR
    bends = [abs(a - 2.0 * b + c) for a, b, c in zip(places, places[1:], places[2:], strict=False)]
    return max(_NOISE_FLOOR, statistics.median(bends) * _SD_OF_MEDIAN_BEND)


def _direction(places: Sequence[float], noise: float) -> int | None:
    """Compare the newer half with the older half; a change below what noise can do is steady."""
    half = len(places) // 2
    if half < 3:
        return None
    change = statistics.fmean(places[-half:]) - statistics.fmean(places[:half])
    sure = 3.0 * noise * math.sqrt(2.0 / half) + 5.0 * _NOISE_FLOOR
    return 0 if abs(change) < sure else int(math.copysign(1, change))
