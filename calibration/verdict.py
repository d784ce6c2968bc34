"""The verdict on a calibration: known loads it was not fitted on, held against what its readings state.

One rule: whether intervals hold is counted, not felt. Too narrow is said where so few hold by chance in fewer than
5 of 100 benches; wider than needed likewise; and where the loads are too few to tell, that is what is said.

A load is no exact thing either: a step counts as inside where the stated interval and the load's own 95 % range
overlap, which favours the intervals; "strictly" leaves the load no room. Steps of one band share what is fixed for
it, so they tell somewhat less than as many independent ones would.
Source: C. J. Clopper, E. S. Pearson, Biometrika 26, 404 (1934) for the limit of a coverage (from memory).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .bench import BenchRatings, BenchStep
from .bridge import Bridge
from .directivity import CENTRAL
from .loads import load_impedance_ohm, load_reflection, part_of
from .meter import Meter
from .readings import Readings
from .units import power_from_volts_w

__all__ = ["Hearing", "Held", "Verdict", "binomial_tail", "covers_at_least", "hear", "verdict_on"]

Array = npt.NDArray[np.float64]

#: What happens by chance in fewer of 100 benches than this is no chance.
CHANCE = 0.05
#: A uniform angle leaves half of all loads in the outer part of the interval, beyond this part of its half-width:
#: the median of |cos t| is cos 45 degrees.
OUTER = math.sqrt(0.5)
#: What excludes no coverage below this leaves open whether intervals hold.
_TELLING = 0.80
#: Points of the even spreads of a load's error, inductance, capacitance and line loss.
_GRID = (15, 7, 7, 5)
#: A line's matched loss: 0 to this unless told, and within half of it of what was told [dB].
_LINE_LOSS_DB = 0.05


@dataclass(frozen=True, slots=True)
class Held:
    """One step, place `number` from 1, against its reading: what is true with its own 95 % range, what was stated.

    All of reflection magnitude [1] for a load step, of forward power [W] for a power step; unbounded is infinite,
    and `value` NaN where the reading gave no value.
    """

    number: int
    step: BenchStep
    truth: float
    truth_low: float
    truth_high: float
    value: float
    low: float
    high: float

    @property
    def inside(self) -> bool:
        """Whether what is stated and what may be true overlap."""
        return self.low <= self.truth_high and self.truth_low <= self.high

    @property
    def strictly(self) -> bool:
        """Whether the stated interval holds the nominal truth itself."""
        return self.low <= self.truth <= self.high

    @property
    def position(self) -> float:
        """|value - truth| over half the interval's width; NaN where the interval is cut at an end or there is none."""
        half = (self.high - self.low) / 2.0
        return abs(self.value - self.truth) / half if self.low > 0.0 and 0.0 < half < math.inf else math.nan


@dataclass(frozen=True, slots=True)
class Hearing:
    """Load steps and power steps as held against their readings, and (place from 1, why) of those left out."""

    loads: tuple[Held, ...]
    powers: tuple[Held, ...]
    left_out: tuple[tuple[int, str], ...]


@dataclass(frozen=True, slots=True)
class Verdict:
    """What the steps say of the intervals.

    word: "too narrow", "wider than needed", "about right" or "not told" (nothing against them, but too few).
    chance: of so few inside with 95 % intervals. excluded: coverage below this is excluded (95 %, one-sided).
    positions, outer, outer_chance: steps with an interval bounded at both ends, those in its outer part, and the
    chance of so few; median_position of them, NaN where there is none.
    """

    word: str
    count: int
    inside: int
    strictly: int
    chance: float
    excluded: float
    positions: int
    outer: int
    outer_chance: float
    median_position: float


def hear(
    bridge: Bridge, steps: Sequence[BenchStep], ratings: BenchRatings, fitted: Sequence[BenchStep] = ()
) -> Hearing:
    """Read each of `steps` by `bridge` and hold it against what was connected; `fitted`: steps it was fitted on.

    ratings: of the references used for `steps`. UnitError where a load cannot be read.
    """
    meter, known = Meter(bridge), {_counts_of(step) for step in fitted}
    held: dict[str, list[Held]] = {kind: [] for kind in _TRUTHS}
    left: list[tuple[int, str]] = []
    for number, step in enumerate(steps, 1):
        why = _not_judged(step, known)
        reading = None if why else _reading(meter, step)
        if reading is not None:
            why = _blank(reading)
        if why or reading is None:
            left.append((number, why))
            continue
        truth = _TRUTHS[step.kind](step, ratings, bridge.z0_ohm)
        held[step.kind].append(Held(number, step, *truth, *_stated(reading, step.kind)))
    return Hearing(tuple(held["load"]), tuple(held["power"]), tuple(left))


def verdict_on(held: Sequence[Held], *, of_power: bool = False) -> Verdict:
    """The verdict on at least one step.

    of_power: the wattmeter's own error rides on all steps alike, so where in the interval they lie says nothing.
    """
    count, inside = len(held), sum(one.inside for one in held)
    chance = binomial_tail(inside, count, CENTRAL)
    positions = np.array([one.position for one in held])
    positions = positions[np.isfinite(positions) & (not of_power)]
    outer = int(np.sum(positions > OUTER))
    outer_chance = binomial_tail(outer, len(positions), 0.5)
    excluded = covers_at_least(inside, count)
    if chance < CHANCE:
        word = "too narrow"
    elif outer_chance < CHANCE:
        word = "wider than needed"
    else:
        word = "about right" if excluded >= _TELLING else "not told"
    median = float(np.median(positions)) if len(positions) else math.nan
    strictly = sum(one.strictly for one in held)
    return Verdict(word, count, inside, strictly, chance, excluded, len(positions), outer, outer_chance, median)


def binomial_tail(most: int, count: int, probability: float) -> float:
    """Chance of at most `most` of `count` independent events of a probability within 0..1, both ends excluded."""
    log_p, log_q = math.log(probability), math.log1p(-probability)
    terms = (math.exp(_log_choose(count, k) + k * log_p + (count - k) * log_q) for k in range(min(most, count) + 1))
    return min(1.0, math.fsum(terms))


def covers_at_least(inside: int, count: int) -> float:
    """Lower 95 % limit, one-sided, of a coverage of which `inside` of `count` were seen (Clopper and Pearson)."""
    if inside == 0:
        return 0.0
    low, high = 0.0, 1.0
    for _ in range(50):
        middle = (low + high) / 2.0
        seen_so_many = 1.0 - binomial_tail(inside - 1, count, middle)
        low, high = (middle, high) if seen_so_many < CHANCE else (low, middle)
    return low


def _log_choose(count: int, k: int) -> float:
    return math.lgamma(count + 1) - math.lgamma(k + 1) - math.lgamma(count - k + 1)


def _counts_of(step: BenchStep) -> tuple[float | None, float, float]:
    """What tells a measurement from any other."""
    return step.frequency_hz, step.forward, step.reflected


def _not_judged(step: BenchStep, known: set[tuple[float | None, float, float]]) -> str:
    """Why a step says nothing here, "" where it does."""
    if step.kind not in _TRUTHS:
        return _NO_TRUTH.get(step.kind, f"a {step.kind} step holds no known load")
    if _counts_of(step) in known:
        return "the bridge was fitted on this very measurement"
    return ""


def _reading(meter: Meter, step: BenchStep) -> Readings:
    return meter.read(
        step.forward,
        step.reflected,
        frequency_hz=step.frequency_hz,
        samples=step.samples,
        temperature_c=step.temperature_c,
    )


def _blank(reading: Readings) -> str:
    """Why a reading states no interval, "" where it does."""
    if reading.has("no-carrier")[0]:
        return "no carrier: forward is not above the dark count"
    if reading.has("clipped")[0]:
        return "a detector was at its end"
    return "no band or law of the bridge reaches it" if np.isnan(reading.rho_low[0]) else ""


def _stated(reading: Readings, kind: str) -> tuple[float, float, float]:
    """Value and interval, unbounded as infinity."""
    name = "rho" if kind == "load" else "forward"
    unit = "" if kind == "load" else "_w"
    value, low, high = (float(getattr(reading, f"{name}{end}{unit}")[0]) for end in ("", "_low", "_high"))
    return value, low, math.inf if math.isnan(high) else high


def _load_truth(step: BenchStep, ratings: BenchRatings, z0_ohm: float) -> tuple[float, float, float]:
    """Magnitude of a load's reflection, and its central 95 % over even spreads of what its parts may be.

    A tolerance is even within its limits; inductance and capacitance lie between nothing and theirs.
    """
    part, impedance = part_of(step, ratings), load_impedance_ohm(step.load or "")

    def reflects(error: npt.ArrayLike, nh: npt.ArrayLike, pf: npt.ArrayLike, loss: npt.ArrayLike) -> Array:
        gamma = load_reflection(
            impedance, step.frequency_hz or 0.0, error=error, nh=nh, pf=pf, line_loss_db=loss, z0_ohm=z0_ohm
        )
        return np.abs(gamma)

    least, most = _line_loss(step)
    spreads = ((-part.pct / 100.0, part.pct / 100.0), (0.0, part.nh), (0.0, part.pf), (least, most))
    points = [low + (high - low) * (np.arange(n) + 0.5) / n for (low, high), n in zip(spreads, _GRID, strict=True)]
    own = reflects(*np.meshgrid(*points, indexing="ij"))
    tail = (1.0 - CENTRAL) / 2.0
    low, high = np.quantile(own, [tail, 1.0 - tail])
    return float(reflects(*((low + high) / 2.0 for low, high in spreads))), float(low), float(high)


def _line_loss(step: BenchStep) -> tuple[float, float]:
    """Least and largest matched loss [dB] of the line between bridge and load."""
    if not step.line_deg:
        return 0.0, 0.0
    told = _LINE_LOSS_DB / 2.0 if step.line_loss_db is None else step.line_loss_db
    return max(0.0, told - _LINE_LOSS_DB / 2.0), told + _LINE_LOSS_DB / 2.0


def _power_truth(step: BenchStep, ratings: BenchRatings, z0_ohm: float) -> tuple[float, float, float]:
    """What the wattmeter read [W], and how far it may be off."""
    watts = step.power_w
    if watts is None:
        ohm = z0_ohm if step.dummy_ohm is None else step.dummy_ohm
        watts = power_from_volts_w(step.volts or 0.0, step.volts_kind or "rms", ohm)
    off = ratings.reference_pct / 100.0 * (ratings.reference_full_scale_w or watts)
    if step.power_pct is not None:
        off = step.power_pct / 100.0 * watts
    return watts, watts - off, watts + off


_NO_TRUTH = {"dark": "a dark step holds no load", "reversed": "a reversed step is for fits only"}
#: kind of step -> what is true of it, with its own 95 % range.
_TRUTHS: dict[str, Callable[[BenchStep, BenchRatings, float], tuple[float, float, float]]] = {
    "load": _load_truth,
    "power": _power_truth,
}
