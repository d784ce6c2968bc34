"""Alarms over a set SWR, a set power and a set time of key-down, as pure state machines without a clock.

One rule: one frame alone never decides. An alarm compares the reading's own value; where only the far end of its
interval is beyond the limit it "may exceed", which is said and never sounded.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from .sample import HANG_S, Sample

if TYPE_CHECKING:
    from calibration.meter import Readings

__all__ = ["Alarm", "AlarmState", "KeyClock", "KeyState", "Limits"]

_WITHIN_S = 1.0  # the second frame beyond the limit must come within this time of the first
_HOLD_S = 1.0  # a raised alarm stays at least this long after the last frame beyond the limit
_KEY_UP_AFTER_S = 0.5
_AGREE = 0.8  # two unchecked values agree when the smaller is at least this part of the larger
_UNFIT = frozenset({"stale", "swapped", "uncalibrated", "no-carrier"})


@dataclass(frozen=True, slots=True)
class Limits:
    """Limits of the alarms: swr, power_w [W, forward], key_down_s [s]; None is no limit."""

    swr: float | None = None
    power_w: float | None = None
    key_down_s: float | None = None

    @property
    def rho(self) -> float | None:
        """The reflection that belongs to the SWR limit, (S - 1)/(S + 1)."""
        return None if self.swr is None else (self.swr - 1.0) / (self.swr + 1.0)


@dataclass(frozen=True, slots=True)
class AlarmState:
    """What is over its limit and what may exceed it, by name; `blind` while nothing can be judged."""

    over: tuple[str, ...] = ()
    may: tuple[str, ...] = ()
    blind: bool = False


@dataclass(frozen=True, slots=True)
class KeyState:
    """down: None where unknown. seconds: since this transmission began [s], 0 while the key is up."""

    down: bool | None = None
    seconds: float = 0.0


class Alarm:
    """Judges every reading, shown or not. Feed it in order; ask `state` when painting."""

    def __init__(self, limits: Limits) -> None:
        """Start with nothing raised."""
        self._limits = limits
        self._swr, self._power = _Judge(neighbours=True), _Judge(neighbours=False)
        self._carrier_s = math.inf

    def set_limits(self, limits: Limits) -> None:
        """Judge by other limits from now on; nothing is raised at first."""
        self._limits = limits
        self._forget()

    def feed(self, sample: Sample) -> None:
        """Judge one reading."""
        if sample.at_s - self._carrier_s > HANG_S:
            self._forget()
        if sample.carrier:
            self._carrier_s = sample.at_s
        if sample.flags & _UNFIT:
            return
        if self._limits.power_w is not None:
            self._power.judge(sample, sample.forward_w, self._limits.power_w)
        if self._limits.rho is not None and _fit_for_swr(sample):
            self._swr.judge(sample, sample.rho, self._limits.rho)

    def lapse(self) -> None:
        """No reading comes any more: nothing may stay raised or quiet as if it were known."""
        self._forget()

    def state(self, sample: Sample | None, reading: Readings | None, blind: bool) -> AlarmState:
        """The state with the newest reading, given both ways, for what only its interval's far end exceeds."""
        if blind or sample is None or reading is None or "uncalibrated" in sample.flags:
            return AlarmState(blind=True)
        over = tuple(name for name, judge in (("SWR", self._swr), ("power", self._power)) if judge.over)
        may = () if sample.flags & _UNFIT else self._may(sample, reading)
        return AlarmState(over, tuple(name for name in may if name not in over))

    def _may(self, sample: Sample, reading: Readings) -> tuple[str, ...]:
        found = []
        if self._limits.rho is not None and _fit_for_swr(sample):
            high = float(reading.rho_high[0])
            if math.isnan(high) or high > self._limits.rho:
                found.append("SWR")
        if self._limits.power_w is not None and not math.isnan(sample.forward_w):
            high = float(reading.forward_high_w[0])
            if math.isnan(high) or high > self._limits.power_w:
                found.append("power")
        return tuple(found)

    def _forget(self) -> None:
        self._swr, self._power = _Judge(neighbours=True), _Judge(neighbours=False)
        self._carrier_s = math.inf


class _Judge:
    """One quantity against its limit. `neighbours`: a frame within the limit between two beyond breaks them up."""

    def __init__(self, neighbours: bool) -> None:
        self.over = False
        self._neighbours = neighbours
        self._beyond_s = -math.inf
        self._beyond = math.nan
        self._within = 0

    def judge(self, sample: Sample, value: float, limit: float) -> None:
        if math.isnan(value):
            return
        if value > limit:
            self._judge_beyond(sample, value)
        else:
            self._judge_within(sample.at_s)

    def _judge_beyond(self, sample: Sample, value: float) -> None:
        second = sample.at_s - self._beyond_s <= _WITHIN_S
        if second and ("unchecked" not in sample.flags or _agree(value, self._beyond)):
            self.over = True
        self._beyond_s, self._beyond, self._within = sample.at_s, value, 0

    def _judge_within(self, at_s: float) -> None:
        self._within += 1
        if self.over:
            self.over = self._within < 2 or at_s - self._beyond_s < _HOLD_S
        elif self._neighbours:
            self._beyond_s = -math.inf


class KeyClock:
    """How long the carrier has been up. Gaps shorter than the hang time belong to the same key-down."""

    def __init__(self) -> None:
        """Start with the key up or unknown."""
        self._since_s = math.nan
        self._carrier_s = -math.inf
        self._known = False

    def feed(self, sample: Sample) -> None:
        """Take one reading."""
        self._known = sample.carrier is not None
        if not sample.carrier:
            return
        if sample.at_s - self._carrier_s > HANG_S:
            self._since_s = sample.at_s
        self._carrier_s = sample.at_s

    def state(self, now_s: float, blind: bool) -> KeyState:
        """The clock at `now_s` [s, steady clock]; unknown while no fresh reading comes.

        The key counts as down for half a second after the last carrier, so that speech does not flicker.
        """
        if blind or not self._known:
            return KeyState()
        down = now_s - self._carrier_s <= _KEY_UP_AFTER_S
        return KeyState(True, now_s - self._since_s) if down else KeyState(False)


def _agree(one: float, other: float) -> bool:
    return min(one, other) >= _AGREE * max(one, other)


def _fit_for_swr(sample: Sample) -> bool:
    """Below-reading says nothing bad; a weak reading says nothing at all."""
    return not (sample.below or sample.weak or math.isnan(sample.rho))
