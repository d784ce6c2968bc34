"""One reading as plain numbers: what the trail, the alarm and the key-down clock need of it.

One rule: no interval is asked for here, so that readings which are never shown cost next to nothing.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, replace
from functools import lru_cache
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from calibration.meter import Readings

__all__ = ["HANG_S", "Sample", "Sampler"]

#: A carrier that returns within this time [s] belongs to the same transmission.
HANG_S = 1.5

_CREST_PART = 0.2  # below this part of the transmission's crest a reading says nothing of the load
_BLIND = frozenset({"stale", "uncalibrated", "no-carrier"})


@dataclass(frozen=True, slots=True)
class Sample:
    """One reading. at_s: arrival [s, steady clock]; rho NaN where unknown; forward_w [W]; flags: names.

    weak: forward is too far below the transmission's crest for SWR to mean anything: between syllables, at the
    edges of a carrier.
    """

    at_s: float
    rho: float
    forward_w: float
    flags: frozenset[str]
    weak: bool = False

    @property
    def carrier(self) -> bool | None:
        """Whether a carrier is there; None where nothing can be said."""
        if "no-carrier" in self.flags:
            return False
        return None if self.flags & _BLIND or math.isnan(self.forward_w) else True

    @property
    def below(self) -> bool:
        """Whether the reflection is smaller than can be read."""
        return "below-reading" in self.flags

    @property
    def place(self) -> float:
        """Where it stands on the rho axis, 0 to 1: the left end while below reading, NaN where nowhere."""
        if self.flags & _BLIND:
            return math.nan
        return 0.0 if self.below else min(max(self.rho, 0.0), 1.0) if not math.isnan(self.rho) else math.nan


class Sampler:
    """Makes samples of readings as they come, and follows the crest of each transmission to tell weak ones."""

    def __init__(self) -> None:
        """No transmission yet."""
        self._crest_w = self._last_w = 0.0
        self._carrier_s = -math.inf

    def samples(self, at_s: float, readings: Readings) -> Iterator[Sample]:
        """A sample of each reading, in order; they arrived together at `at_s` [s, steady clock]."""
        columns = readings.rho.tolist(), readings.forward_w.tolist(), readings.flags.tolist()
        for rho, forward_w, bits in zip(*columns, strict=True):
            plain = Sample(at_s, rho, forward_w, _names(bits))
            yield self._weighed(plain) if plain.carrier else plain

    def _weighed(self, sample: Sample) -> Sample:
        """The sample of a carrier, marked where it is weak."""
        self._follow(sample.at_s, sample.forward_w)
        return replace(sample, weak=True) if sample.forward_w <= _CREST_PART * self._crest_w else sample

    def _follow(self, at_s: float, forward_w: float) -> None:
        """Raise the crest to what two neighbouring readings both reach: a single wild one must not mute the rest."""
        if at_s - self._carrier_s > HANG_S:
            self._crest_w = self._last_w = 0.0
        self._crest_w = max(self._crest_w, min(forward_w, self._last_w))
        self._last_w, self._carrier_s = forward_w, at_s


@lru_cache(maxsize=256)
def _names(bits: int) -> frozenset[str]:
    from calibration.flags import names  # numpy comes with it: only once there is a reading

    return frozenset(names(bits))
