"""Slips of the hand at the bench: steps that do not fit the others, found and set aside before they bend the fit.

One rule: a step is set aside only where the others leave no doubt, never silently, and it stays in the file.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import numpy.typing as npt

from .bench import BenchStep
from .errors import SheetError
from .fit_model import BenchModel
from .fit_search import Minimum, Solution, explored, freedom, in_band, robust, settle, solve
from .loads import LoadPart, load_impedance_ohm, load_reflection
from .look import CLIPPED_PART
from .slip_names import Slip, fits, name_part, name_steps

__all__ = ["Slip", "deviates", "evident", "refuse_turned", "without_slips"]

Array = npt.NDArray[np.float64]
#: Makes a model with steps set aside and parts freed.
Maker = Callable[[list[BenchStep], frozenset[int], frozenset[LoadPart]], BenchModel]

#: A step further off than this in normal deviates is no noise: of a hundred residuals one goes so far in 20000 benches.
_TOO_FAR = 5.0
#: A part whose error is this many sd of its tolerance's spread is another part.
_OTHER_PART = 5.0
#: At most this part of the steps may be slips; beyond it the sheet contradicts itself.
_MOST_PART = 1.0 / 8.0
#: Two explanations this close in cost (half a chi-square of 9) are both named.
_AS_GOOD = 4.5
#: So many of the likeliest exchanges are tried with all that loads may give way.
_TRIED_WHOLE = 4
#: A residual that the fit follows as closely as this says nothing.
_NO_FREEDOM = 1e-3
_SCATTER_FLOOR = 0.002


def evident(steps: list[BenchStep], full_scale: int) -> list[Slip]:
    """Slips that show before any fit: the converter's full scale, and channels exchanged at little power."""
    found = []
    dark = _dark_mean(steps)
    for number, step in enumerate(steps):
        sides = {"power": ("forward",), "reversed": ("reflected",), "load": ("forward", "reflected")}.get(step.kind, ())
        clipped = [side for side in sides if getattr(step, side) >= CLIPPED_PART * full_scale]
        if clipped:
            counts = getattr(step, clipped[0])
            words = f"{clipped[0]} {counts:g} is saturated, at the converter's full scale: take it at less power"
            found.append(Slip((number,), words))
        elif step.kind in ("power", "load") and step.forward <= dark[0] and _far_above(step, dark[1]):
            found.append(Slip((number,), "forward and reflected look exchanged: forward is no more than dark"))
    return found


def _far_above(step: BenchStep, dark: float) -> bool:
    return step.reflected - dark > 10.0 * max(step.reflected_sd, 1.0)


def refuse_turned(steps: list[BenchStep], z0_ohm: float) -> None:
    """Raise SheetError where most power steps show more reflected than forward: no fit can use such a sheet."""
    dark = _dark_mean(steps)
    power = [_leans_back(step, dark) for step in steps if step.kind == "power"]
    loads = [_leans_back(step, dark) for step in steps if step.kind == "load" and _takes_most(step, z0_ohm)]
    if not power or 2 * sum(power) <= len(power):
        return
    counted = f"in {sum(power)} of {len(power)} power steps reflected is larger than forward"
    if loads and 2 * sum(loads) <= len(loads):
        raise SheetError(
            f"{counted}, but not in the load steps: power and reversed steps look exchanged; the bridge was turned the "
            "wrong way in all of them; wanted forward to see the transmitter's wave in power steps"
        )
    raise SheetError(
        f"{counted}: forward and reflected look exchanged throughout; either the bridge stands the wrong way round or "
        "the wires of its two detectors are exchanged; wanted the transmitter's wave on forward"
    )


def _leans_back(step: BenchStep, dark: tuple[float, float]) -> bool:
    return _far_above(step, dark[1]) and step.reflected - dark[1] > step.forward - dark[0]


def _takes_most(step: BenchStep, z0_ohm: float) -> bool:
    return abs(complex(load_reflection(load_impedance_ohm(step.load or ""), 0.0, z0_ohm=z0_ohm))) < 0.6


def _dark_mean(steps: list[BenchStep]) -> tuple[float, float]:
    dark = [step for step in steps if step.kind == "dark"]
    return float(np.mean([s.forward for s in dark])), float(np.mean([s.reflected for s in dark]))


def without_slips(
    make: Maker, model: BenchModel, found: Minimum, allowed: Callable[[frozenset[int]], bool]
) -> tuple[BenchModel, Solution, list[Slip]]:
    """The model with its slips set aside, its solution, and the slips named; from a first minimum of all steps.

    allowed: whether a fit can do without these steps. Where no few slips explain it all, nothing is set aside.
    """
    known = frozenset(np.flatnonzero(model.weights == 0.0).tolist())
    if not _amiss(model, found.vector):
        return model, explored(model, found), []
    steps, vector = model.steps, robust(model, found.vector)
    if slip := _exchanged_loads(make, model, vector, known):
        aside = known | set(slip.steps)
        model = make(steps, aside, frozenset())
        return model, solve(model), [slip]
    aside, freed = known, frozenset[LoadPart]()
    while (slip_at := _next_slip(model, vector, len(aside - known))) is not None:
        aside, freed = (aside | {slip_at}, freed) if isinstance(slip_at, int) else (aside, freed | {slip_at})
        if not allowed(aside):
            break
        model = _like(make(steps, aside, freed), model)
        vector = settle(model, robust(model, vector)).vector
    if not allowed(aside) or _worst_step(model, vector) is not None:
        model = make(steps, known, frozenset())
        return model, solve(model), []
    model = make(steps, aside, freed)
    solution = solve(model)
    if back := frozenset(step for step in aside - known if fits(model, solution, model.steps[step])):
        # What another slip alone had put off may come back, if all still fits with it.
        fuller = make(steps, aside - back, freed)
        again = solve(fuller)
        if not _amiss(fuller, again.vector):
            model, solution, aside = fuller, again, aside - back
    slips = [name_part(model, solution, part) for part in sorted(freed, key=str)]
    return model, solution, slips + name_steps(model, solution, sorted(aside - known))


def _next_slip(model: BenchModel, vector: Array, so_far: int) -> int | LoadPart | None:
    """The step that is furthest off, else the part; None where nothing is or too many have been set aside."""
    worst = _worst_step(model, vector)
    if worst is None:
        return _other_part(model, vector)
    return worst if so_far < max(1.0, _MOST_PART * len(model.steps)) else None


def _like(model: BenchModel, other: BenchModel) -> BenchModel:
    """The model with what the other one has learnt of laws and scatter."""
    model.scatter, model.first_laws = other.scatter, other.first_laws
    return model


def _exchanged_loads(make: Maker, model: BenchModel, vector: Array, known: frozenset[int]) -> Slip | None:
    """Two loads of a band written down for one another, where exchanging them puts everything right.

    Set aside one by one, other steps could be blamed: in a band of resistors all loads negated are a leak negated.
    """
    far = deviates(model, vector)
    bands = {int(model.band[at]) for at in model.of_kind["load"] if far[at] > _TOO_FAR}
    tried = []
    for one, other in [pair for band in sorted(bands) for pair in _pairs(model, band, known)]:
        crossed = _like(make(_crossed(model.steps, one, other), known, frozenset()), model)
        for sign in (1.0, -1.0):
            turned = vector.copy()
            start = model.band_slice(int(model.band[one])).start
            turned[start + 2 : start + 6] *= sign
            leaks = in_band(crossed, turned, int(model.band[one]), with_loads=False)
            tried.append((leaks.cost, (one, other), leaks.vector, crossed))
    if not tried:
        return None
    # The leaks alone have told which pairs come near; loads that give way tell how near.
    near = sorted(tried, key=lambda row: row[0])[:_TRIED_WHOLE]
    bands_of = [int(model.band[pair[0]]) for _, pair, _, _ in near]
    whole = [in_band(row[3], row[2], band) for row, band in zip(near, bands_of, strict=True)]
    best = int(np.argmin([minimum.cost for minimum in whole]))
    cost, pair, crossed = whole[best].cost, near[best][1], near[best][3]
    if _amiss(crossed, settle(crossed, whole[best].vector).vector):
        return None
    tried = [(minimum.cost, *row[1:]) for minimum, row in zip(whole, near, strict=True)]
    others = {also for its_cost, also, _, _ in tried if its_cost < cost + _AS_GOOD} - {pair}
    said = [f"loads {model.steps[a].load} and {model.steps[b].load} look exchanged" for a, b in (pair, *sorted(others))]
    more = [f"{words} (steps {a + 1} and {b + 1})" for words, (a, b) in zip(said[1:], sorted(others), strict=True)]
    return Slip(pair, ", or ".join([said[0], *more]))


def _pairs(model: BenchModel, band: int, known: frozenset[int]) -> list[tuple[int, int]]:
    """Load steps of a band that could have been exchanged: other loads, the same line."""
    own = [int(at) for at in model.of_kind["load"] if model.band[at] == band and int(at) not in known]
    steps = model.steps
    return [
        (a, b)
        for a in own
        for b in own
        if a < b and steps[a].load != steps[b].load and steps[a].line_deg == steps[b].line_deg
    ]


def _crossed(steps: list[BenchStep], one: int, other: int) -> list[BenchStep]:
    crossed = list(steps)
    crossed[one] = replace(steps[one], forward=steps[other].forward, reflected=steps[other].reflected)
    crossed[other] = replace(steps[other], forward=steps[one].forward, reflected=steps[one].reflected)
    return crossed


def _amiss(model: BenchModel, vector: Array) -> bool:
    return _worst_step(model, vector) is not None or _other_part(model, vector) is not None


def _worst_step(model: BenchModel, vector: Array) -> int | None:
    far = deviates(model, vector)
    worst = int(np.argmax(far))
    return worst if far[worst] > _TOO_FAR else None


def _other_part(model: BenchModel, vector: Array) -> LoadPart | None:
    mean, sd = model.priors
    at = model.loads_slice.start + 3 * np.arange(len(model.parts))
    far = np.abs(vector[at] - mean[at]) / sd[at]
    return model.parts[int(np.argmax(far))] if len(far) and far.max() > _OTHER_PART else None


def deviates(model: BenchModel, vector: Array) -> Array:
    """How far each step is off the others in normal deviates, float64[steps]; 0 where the fit just follows it.

    The wattmeter's scatter is judged by the other steps (externally studentised residuals: R. D. Cook, S. Weisberg,
    Residuals and Influence in Regression, 1982; from memory).
    """
    sigmas = model.residuals(vector)[: len(model.residual_steps)]
    free = freedom(model, vector)
    told = (free > _NO_FREEDOM) & np.isfinite(sigmas)
    off = np.where(told, np.abs(sigmas) / np.sqrt(np.maximum(free, _NO_FREEDOM)), 0.0)
    steps = np.array([step for step, _ in model.residual_steps])
    of_power = np.array([what == "power" for _, what in model.residual_steps]) & (model.weights[steps] > 0.0)
    others = float(np.sum(free[of_power])) - 1.0
    if others > 0.5:
        rest = np.maximum(np.sum(sigmas[of_power] ** 2) - off**2, 0.0) / others
        of_others = off / np.sqrt(np.maximum(rest, (_SCATTER_FLOOR / model.scatter) ** 2))
        off = np.where(of_power, _normal_deviate(of_others, others), off)
    else:
        off = np.where(of_power, 0.0, off)
    far = np.zeros(len(model.steps))
    np.maximum.at(far, steps, off * (model.weights[steps] > 0.0))
    return far


def _normal_deviate(t: Array, free: float) -> Array:
    """The normal deviate as unlikely as Student's t with `free` degrees (D. L. Wallace, Ann. Math. Stat. 30, 1959)."""
    return np.asarray((8.0 * free + 1.0) / (8.0 * free + 3.0) * np.sqrt(free * np.log1p(t * t / free)))
