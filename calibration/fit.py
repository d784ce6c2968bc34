"""The fit: a bench sheet's steps to a calibrated bridge with limits, and what the steps could not carry.

One rule: what the steps do not determine is not reported as known; it gets a bound and a sentence that says so.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from functools import partial

import numpy as np

from .bench import BenchRatings, BenchStep, step_power_w
from .bridge import Bridge
from .fit_demands import demand_power_in_bands, demand_usable, demand_whole, enough_without
from .fit_model import BenchModel
from .fit_notes import check_words, fit_notes
from .fit_search import Solution, first_minimum, scatter_of, solve
from .fit_warmth import main_steps, warmth_of
from .laws import LAWS
from .leak_limits import band_of_fit, with_neighbours
from .loads import LoadPart, load_impedance_ohm
from .slips import Slip, evident, refuse_turned, without_slips
from .warmth import DiodeKind

__all__ = ["Fit", "LoadFound", "Slip", "Solution", "StepResidual", "fit", "scatter_of", "solve"]


@dataclass(frozen=True, slots=True)
class StepResidual:
    """What a step said against what the fit expects. what: "forward", "reflected" (counts) or "power" (relative)."""

    step: int
    what: str
    sigmas: float


@dataclass(frozen=True, slots=True)
class LoadFound:
    """A load part as the fit found it: error and its sd [%], the tolerance given [%], inductance, capacitance."""

    text: str
    error_pct: float
    error_sd_pct: float
    tolerance_pct: float
    nh: float
    pf: float


@dataclass(frozen=True, slots=True)
class Fit:
    """Outcome of a fit: the bridge, the wattmeter's scatter (relative sd), residuals by step, and sentences.

    slips: steps set aside, also the first of the notes. loads: the parts as found. checks: closed forms beside the fit.
    diode: what a bench at two temperatures taught of the diodes. model, solution: for what else is asked of the fit.
    """

    bridge: Bridge
    reference_scatter: float
    residuals: tuple[StepResidual, ...]
    chi_square_per_residual: float
    notes: tuple[str, ...]
    slips: tuple[Slip, ...] = ()
    loads: tuple[LoadFound, ...] = ()
    checks: tuple[str, ...] = ()
    diode: DiodeKind | None = None
    model: BenchModel | None = field(default=None, compare=False, repr=False)
    solution: Solution | None = field(default=None, compare=False, repr=False)


#: What is done with a slip.
_ASIDE = "; set aside in this fit, it stays in the sheet"


def fit(
    steps: list[BenchStep],
    *,
    name: str,
    full_scale: int,
    z0_ohm: float = 50.0,
    detector: str = "diode",
    ratings: BenchRatings | None = None,
    match_return_loss_db: float | None = None,
    device_id: int | None = None,
    diode: DiodeKind | None = None,
    seed: int | None = None,
) -> Fit:
    """Fit laws, gains and leakage of a bridge with detectors of one kind (a name in LAWS) to bench steps.

    seed: moves the search's starts at random; the outcome does not depend on it where the steps determine it.
    SheetError where the steps cannot carry a fit at all, UnitError where a load cannot be read.
    """
    ratings = ratings or BenchRatings()
    usable = [replace(step, power_w=step_power_w(step, z0_ohm)) for step in steps]
    celsius = [step.temperature_c for step in steps]
    main = main_steps(usable) if detector == "diode" else None
    warmth = None
    if main is not None:
        alone = fit(
            [usable[at] for at in main],
            name=name,
            full_scale=full_scale,
            z0_ohm=z0_ohm,
            ratings=ratings,
            diode=diode,
            seed=seed,
        )
        warmth = warmth_of(usable, main, alone.bridge, alone.reference_scatter)
        usable, diode = warmth.steps, warmth.diode
    model, solution, slips = _solved(usable, ratings, z0_ohm, detector, full_scale, seed)
    vector = solution.vector
    forward, reflected = model.laws(vector)
    found = [
        band_of_fit(model, vector, solution.covariance, band, match_return_loss_db, solution.others)
        for band in range(len(model.bands))
    ]
    bridge = Bridge(
        name=name,
        full_scale=full_scale,
        forward_law=forward,
        reflected_law=reflected,
        bands=with_neighbours([band for band, _ in found], [known for _, known in found]),
        z0_ohm=z0_ohm,
        forward_sd=_typical([s.forward_sd for s in steps]),
        reflected_sd=_typical([s.reflected_sd for s in steps]),
        reference_pct=_reference_pct(usable, ratings),
        device_id=device_id,
        diode=diode,
        temperature_c=float(np.mean(celsius)) if warmth is None else warmth.temperature_c,
        temperature_span_c=float(np.ptp(celsius)),
    )
    residuals = _residuals(model, vector)
    aside = {step for slip in slips for step in slip.steps}
    used = [residual.sigmas for residual in residuals if residual.step not in aside]
    notes = tuple(f"{slip.words}{_ASIDE}" for slip in slips) + fit_notes(
        model, solution, bridge, [known for _, known in found]
    )
    return Fit(
        bridge,
        model.scatter,
        residuals,
        float(np.mean(np.square(used))),
        notes if warmth is None else (*notes, warmth.words),
        slips=tuple(slips),
        loads=_loads(model, solution),
        checks=check_words(model, solution, bridge),
        diode=None if warmth is None else warmth.diode,
        model=model,
        solution=solution,
    )


def _solved(
    steps: list[BenchStep], ratings: BenchRatings, z0_ohm: float, detector: str, full_scale: int, seed: int | None
) -> tuple[BenchModel, Solution, list[Slip]]:
    """The model of the steps, its solution, and the slips that have been set aside."""
    demand_whole(steps)
    refuse_turned(steps, z0_ohm)
    slips = evident(steps, full_scale)
    demand_usable(steps, slips)
    known = frozenset(step for slip in slips for step in slip.steps)

    def make(given: list[BenchStep], aside: frozenset[int], freed: frozenset[LoadPart]) -> BenchModel:
        return BenchModel(given, ratings, z0_ohm, LAWS[detector], aside=aside, freed=freed)

    model = make(steps, known, frozenset())
    demand_power_in_bands(model)
    model, solution, others = without_slips(make, model, first_minimum(model, seed), partial(enough_without, model))
    return model, solution, [*slips, *others]


def _loads(model: BenchModel, solution: Solution) -> tuple[LoadFound, ...]:
    """Resistors as found; of an open or a short there is no error to tell."""
    sds = np.sqrt(np.diag(solution.covariance))
    found = []
    for number, part in enumerate(model.parts):
        at = model.loads_slice.start + 3 * number
        error, nh, pf = (float(value) for value in solution.vector[at : at + 3])
        if load_impedance_ohm(part.text) not in (0.0, complex(np.inf)):
            found.append(LoadFound(part.text, 100.0 * error, 100.0 * float(sds[at]), part.pct, nh, pf))
    return tuple(found)


def _residuals(model: BenchModel, vector: np.ndarray) -> tuple[StepResidual, ...]:
    """All steps against the fit, those set aside too."""
    weights, model.weights = model.weights, np.ones(len(model.steps))
    sigmas = model.residuals(vector)[: len(model.residual_steps)]
    model.weights = weights
    return tuple(
        StepResidual(step, what, float(value)) for (step, what), value in zip(model.residual_steps, sigmas, strict=True)
    )


def _typical(sds: list[float]) -> float:
    return float(np.median(sds))


def _reference_pct(steps: list[BenchStep], ratings: BenchRatings) -> float:
    """Accuracy of power [%, 95 %]: the best the reference offers at any step, as one good point carries the scale."""
    if ratings.reference_full_scale_w is None:
        own = [ratings.reference_pct if s.power_pct is None else s.power_pct for s in steps if s.kind == "power"]
        return float(np.median(own))
    powers = [s.power_w for s in steps if s.kind == "power" and s.power_w is not None]
    return ratings.reference_pct * ratings.reference_full_scale_w / max(powers)
