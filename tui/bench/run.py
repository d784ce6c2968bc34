"""One bench step after the other: chosen, heeded, keyed, steady, read, written, key up; without a screen.

One rule: a step is what was seen whole. It is due only when two windows of counts agree and the wattmeter has been
read, and the next one begins only after the key has been seen up.
"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Literal

import numpy.typing as npt

from calibration.bench import BenchStep
from calibration.candidates import KEY_DOWN_S, Candidate, band_words
from calibration.cautions import cautions, refusal
from calibration.heat import BenchHeat, taken_w
from calibration.steady import Steadiness, Steady, Taking

from .ground import Ground, draft
from .meter_reading import MeterReading, Unit, reading_of

__all__ = ["POWERED", "BenchRun"]

Phase = Literal["choose", "heed", "take", "lift"]

#: Kinds of step that need the wattmeter.
POWERED = ("power", "reversed")
#: A reading further than this factor from what was proposed is asked for once more.
_DOUBTFUL = 3.0
#: The bridge's own word on its frequency is believed for so long [s], and another band begins this far away.
_FRESH_S, _SAME_BAND = 10.0, 0.1
#: A bridge without a temperature is taken to be at this [degrees Celsius], as everywhere.
_USUAL_C = 25.0


class BenchRun:
    """See the module. Times are a steady clock's [s]; not for several threads at once."""

    def __init__(self, ground: Ground, now_s: float = 0.0) -> None:
        """Nothing chosen."""
        self.ground = ground
        self.unit: Unit = "W"
        self.phase: Phase = "choose"
        self.plan: Candidate | None = None
        self.reading: MeterReading | None = None
        self.news = ""
        #: Why no step may be taken on this board at all, "" where one may.
        self.strange = ""
        self.heat = BenchHeat(
            dummy_w=ground.limits.dummy_w, dummy_j=ground.limits.dummy_j, resistor_w=ground.limits.resistor_w
        )
        #: Up to when time has passed [s].
        self.at_s = now_s
        self._keyed_s = now_s
        self._into: tuple[str | None, float] = (None, 0.0)
        self._told_hz: tuple[float, float] | None = None
        self._doubted = ""
        self._steady = self._watch()

    @property
    def steadiness(self) -> Steadiness:
        """How the counts stand."""
        return self._steady.state

    @property
    def carrier(self) -> bool | None:
        """Whether the key is down; None before a dark step has told what up is."""
        return None if self.ground.dark is None else self.steadiness.carrier

    @property
    def key_down_s(self) -> float:
        """How long the key has been down [s]."""
        return self.at_s - self._keyed_s if self.carrier else 0.0

    @property
    def wants_reading(self) -> bool:
        """Whether the wattmeter is to be read now."""
        powered = self.phase == "take" and self.plan is not None and self.plan.kind in POWERED
        return powered and self.reading is None and (bool(self.carrier) or self._taking is not None)

    @property
    def due(self) -> BenchStep | None:
        """The step to be written now, else None. Then call `written` or `not_written`."""
        taking, plan = self._taking, self.plan
        if self.phase != "take" or taking is None or plan is None:
            return None
        if plan.kind in POWERED and self.reading is None:
            return None
        counted = replace(
            draft(plan),
            forward=taking.forward,
            reflected=taking.reflected,
            forward_sd=taking.forward_sd,
            reflected_sd=taking.reflected_sd,
            samples=taking.samples,
            temperature_c=_USUAL_C if taking.temperature_c is None else taking.temperature_c,
            frequency_hz=self._frequency_hz(plan),
            power_w=None,
        )
        return counted if self.reading is None else self.reading.into(counted)

    def cautions(self) -> list[str]:
        """What to mind before the step in hand, most important first."""
        return [] if self.plan is None else cautions(draft(self.plan), self.ground.limits, z0_ohm=self.ground.z0_ohm)

    def why_not(self, plan: Candidate) -> str:
        """Why a step may not be taken now, in a few words; "" where it may."""
        if self.strange:
            return self.strange
        if self.ground.dark is None and plan.kind != "dark":
            return "dark counts come first: by them the key is seen"
        return refusal(draft(plan), self.ground.limits, z0_ohm=self.ground.z0_ohm) or self.hot(plan)

    def hot(self, plan: Candidate) -> str:
        """Why what a step heats must cool first, with seconds; "" where it need not."""
        load, watts = self._heated(plan)
        verdict = self.heat.verdict(watts, KEY_DOWN_S, load=load)
        return "" if verdict.ready or not watts else verdict.words

    @property
    def heat_words(self) -> str:
        """How warm the part in use is, and how long its power may go on."""
        load, watts = self._into if self.plan is None or self.phase != "heed" else self._heated(self.plan)
        words = self.heat.verdict(watts, 0.0 if self.carrier else KEY_DOWN_S, load=load).words
        if self.carrier:  # how long to wait is told when the key is up
            words = words.partition("; wait")[0]
        if not watts and load is not None:
            return f"the {load} takes no power"
        return words if watts else words.partition("; 0 W")[0]

    @property
    def must_lift(self) -> bool:
        """Whether the part in use is full while the key is down."""
        load, watts = self._into
        return bool(self.carrier) and watts > 0.0 and self.heat.store(load).room_s(watts) <= 0.0

    def choose(self, plan: Candidate) -> None:
        """Take a step in hand: its cautions are to be read. ValueError in words where it may not be taken."""
        if self.phase not in ("choose", "heed"):
            raise ValueError("first finish this step, or leave it with Escape")
        if plan.kind != "dark" and (plan.frequency_hz is None or plan.power_w is None):
            raise ValueError("a step needs its frequency and its power")
        why = self.why_not(plan)
        if why and why != self.hot(plan):
            raise ValueError(why)
        self.plan, self.phase, self.news = plan, "heed", ""

    def ready(self) -> Candidate:
        """Everything is connected and the cautions are read: the key may go down. ValueError where it may not."""
        if self.phase != "heed" or self.plan is None:
            raise ValueError("choose a step first")
        if self.carrier and self.plan.kind != "dark":
            raise ValueError("the key is down: key up, then say ready")
        why = self.why_not(self.plan)
        if why:
            raise ValueError(why)
        self.phase, self.reading, self.news, self._doubted = "take", None, "", ""
        self._into = self._heated(self.plan)
        self._steady = Steady(
            full_scale=self.ground.full_scale,
            dark=self.ground.dark,
            dark_sd=self.ground.dark_sd,
            carrier=self.plan.kind != "dark",
        )
        return self.plan

    def push(
        self,
        forward: npt.ArrayLike,
        reflected: npt.ArrayLike,
        at_s: npt.ArrayLike,
        *,
        wire_flags: npt.ArrayLike = 0,
        temperature_c: float | None = None,
    ) -> None:
        """Tallies [counts, n] with device times [s, n], as `Steady.push` takes them."""
        before, untaken = self.carrier, self._taking is None
        self._steady.push(forward, reflected, at_s, wire_flags=wire_flags, temperature_c=temperature_c)
        if self.carrier and not before:
            self._keyed_s = self.at_s
        if self.phase == "take":
            self._in_take(bool(before), untaken)
        elif self.phase == "lift" and not self.carrier:
            self._rest()

    def hear_frequency(self, hz: float, now_s: float) -> None:
        """The bridge has told what the transmitter is set to [Hz]."""
        self._told_hz = (hz, now_s)

    def pass_time(self, now_s: float) -> None:
        """Time goes on: what is heated takes its joules while the key is down, and all else cools."""
        seconds, (load, watts) = max(0.0, now_s - self.at_s), self._into
        self.heat.pass_time(seconds, load=load, power_w=watts if self.carrier else 0.0)
        self.at_s = now_s

    def answer(self, text: str) -> None:
        """The wattmeter has been read. ValueError where that is no reading, and once where it is far from the plan."""
        reading = reading_of(text, self.unit)
        watts, meant = reading.power_w(self.ground.z0_ohm), self.plan.power_w if self.plan else None
        if meant and not 1.0 / _DOUBTFUL <= watts / meant <= _DOUBTFUL and text != self._doubted:
            self._doubted = text
            raise ValueError(f"{watts:.3g} W where {meant:g} W was meant? Enter once more keeps it")
        self.reading, self._into = reading, (self._into[0], watts)

    def leave(self) -> None:
        """Give the step in hand up; nothing of it is kept."""
        if self.phase in ("heed", "take"):
            self.news = "left: nothing was written" if self.phase == "take" else ""
            self._lift()

    def lose(self, words: str) -> None:
        """Counts no longer come: what is not written is not taken."""
        if self.phase == "take":
            self.phase, self.reading = "heed", None
            self.news = f"{words}: this step was not taken; begin it again"
            self._steady = self._watch()

    def written(self, number: int) -> None:
        """The step that was due is in the file as its step `number`."""
        self.news = f"step {number} is in the file"
        self._lift()

    def not_written(self, words: str) -> None:
        """The step that was due could not be written: it stays due no longer, and is to be taken again."""
        self.news, self.phase, self.reading = words, "heed", None
        self._steady = self._watch()

    def stand_on(self, ground: Ground) -> None:
        """Go on with other dark counts or ratings; what is warm stays so."""
        self.ground = ground
        if self.phase != "take":
            carrier = self.steadiness.carrier
            self._steady = self._watch()
            if self.phase == "lift" and not carrier:
                self._rest()

    @property
    def _taking(self) -> Taking | None:
        return self.steadiness.taking if self.phase == "take" else None

    def _watch(self) -> Steady:
        """Only the key is looked at."""
        dark, sd = self.ground.dark, self.ground.dark_sd
        return Steady(full_scale=self.ground.full_scale, dark=dark, dark_sd=sd, carrier=dark is not None)

    def _heated(self, plan: Candidate) -> tuple[str | None, float]:
        """The load of a step (None: the dummy) and what goes into it [W]."""
        load = plan.load if plan.kind == "load" else None
        watts = 0.0 if plan.kind == "dark" else taken_w(plan.power_w or 0.0, load, self.ground.z0_ohm)
        return load, float(f"{watts:.3g}")

    def _in_take(self, was_down: bool, untaken: bool) -> None:
        if (
            untaken
            and was_down
            and not self.carrier
            and self._taking is None
            and self.plan
            and self.plan.kind != "dark"
        ):
            self.reading, self.news = None, "the key came up before the counts were steady: key down again"
        elif untaken and self._taking is not None and self.plan is not None:
            self.news = self._other_band(self.plan)
            if self.news:
                self._lift()

    def _other_band(self, plan: Candidate) -> str:
        told = self._fresh_hz
        if told is None or plan.frequency_hz is None or abs(math.log(told / plan.frequency_hz)) < _SAME_BAND:
            return ""
        wanted, found = band_words(plan.frequency_hz), band_words(told)
        return f"the bridge says {found}, the step is for {wanted}: not taken; set the transmitter and begin again"

    def _frequency_hz(self, plan: Candidate) -> float | None:
        told = self._fresh_hz
        return told if told is not None and plan.frequency_hz is not None else plan.frequency_hz

    @property
    def _fresh_hz(self) -> float | None:
        told = self._told_hz
        return told[0] if told is not None and self.at_s - told[1] <= _FRESH_S else None

    def _lift(self) -> None:
        """The step is over; the next one begins when the key has been seen up."""
        self.phase, self.plan, self.reading = "lift", None, None
        if not self.carrier:
            self._rest()

    def _rest(self) -> None:
        self.phase, self._steady = "choose", self._watch()
