"""The fit: a bench sheet's steps to a calibrated bridge with limits, and what the steps could not carry.

One rule: what the steps do not determine is not reported as known; it gets a bound and a sentence that says so.
scipy is imported inside functions, as it costs more than half a second.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from .bench import BenchRatings, BenchStep
from .bridge import Bridge
from .errors import SheetError
from .fit_model import BenchModel
from .fit_start import start_vectors
from .laws import LAWS
from .leak_limits import band_of_fit, with_neighbours
from .units import power_from_volts_w
from .warmth import DiodeKind

__all__ = ["Fit", "Solution", "StepResidual", "fit", "scatter_of", "solve"]

if TYPE_CHECKING:
    from scipy.optimize import OptimizeResult

Array = npt.NDArray[np.float64]

#: A bench that determines its parameters settles in some tens of steps; one that does not would wander for ever.
_MOST_STEPS = 400
#: A wattmeter repeats no better than this from step to step [relative sd of power]; nor, unknown, worse.
_SCATTER_FLOOR = 0.002
_SCATTER_START = 0.01
_SCATTER_MOST = 0.05


@dataclass(frozen=True, slots=True)
class StepResidual:
    """What a step said against what the fit expects. what: "forward", "reflected" (counts) or "power" (relative)."""

    step: int
    what: str
    sigmas: float


@dataclass(frozen=True, slots=True)
class Fit:
    """Outcome of a fit: the bridge, the wattmeter's scatter (relative sd), residuals by step, and sentences."""

    bridge: Bridge
    reference_scatter: float
    residuals: tuple[StepResidual, ...]
    chi_square_per_residual: float
    notes: tuple[str, ...]


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
) -> Fit:
    """Fit laws, gains and leakage of a bridge with detectors of one kind (a name in LAWS) to bench steps.

    SheetError where the steps cannot carry a fit at all, UnitError where a load cannot be read.
    """
    ratings = ratings or BenchRatings()
    usable = [_with_power(step, z0_ohm) for step in steps]
    _demand(usable)
    model = BenchModel(usable, ratings, z0_ohm, LAWS[detector])
    _demand_power_in_bands(model)
    solution = solve(model)
    vector = solution.vector
    forward, reflected = model.laws(vector)
    found = [
        band_of_fit(model, vector, solution.covariance, band, match_return_loss_db) for band in range(len(model.bands))
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
        temperature_c=float(np.mean([s.temperature_c for s in steps])),
        temperature_span_c=float(np.ptp([s.temperature_c for s in steps])),
    )
    sigmas = model.residuals(vector)[: len(model.residual_steps)]
    residuals = tuple(
        StepResidual(step, what, float(value)) for (step, what), value in zip(model.residual_steps, sigmas, strict=True)
    )
    notes = _notes(model, [known for _, known in found], solution.settled)
    return Fit(bridge, model.scatter, residuals, float(np.mean(sigmas**2)), notes)


def _with_power(step: BenchStep, z0_ohm: float) -> BenchStep:
    """The step with its power worked out where volts across the dummy were given."""
    if step.power_w is not None or step.volts is None:
        return step
    ohm = z0_ohm if step.dummy_ohm is None else step.dummy_ohm
    return replace(step, power_w=power_from_volts_w(step.volts, step.volts_kind or "rms", ohm))


def _demand(steps: list[BenchStep]) -> None:
    """Raise SheetError where there is too little to fit anything."""
    kinds = [step.kind for step in steps]
    if "dark" not in kinds:
        raise SheetError(
            "the sheet has no dark step; wanted one with the transmitter off, since every law starts at the dark count"
        )
    if kinds.count("power") < 3:
        raise SheetError(
            f"the sheet has {kinds.count('power')} power steps; wanted at least 3 at different powers into the dummy "
            "load, as a detector law has a scale, a load term and a gain"
        )
    for number, step in enumerate(steps, 1):
        if step.kind in ("power", "reversed") and not (step.power_w and step.power_w > 0.0):
            raise SheetError(f"step {number} ({step.kind}) has no power_w or volts; wanted the wattmeter's reading")
        if step.kind != "dark" and step.frequency_hz is None:
            raise SheetError(f"step {number} ({step.kind}) has no frequency_hz; wanted the frequency it was taken at")
        if step.kind in ("power", "load") and step.forward <= _dark_mean(steps):
            raise SheetError(
                f"step {number} ({step.kind}) has forward {step.forward:g} counts, not above the dark count; was the "
                "transmitter on, and is forward the detector that sees the transmitter?"
            )


def _demand_power_in_bands(model: BenchModel) -> None:
    """Raise SheetError where a band has no known power: its gain would hang in the air."""
    with_power = set(model.band[model.of_kind["power"]].tolist())
    for band, hz in enumerate(model.bands):
        if band not in with_power:
            raise SheetError(
                f"there are steps at {hz / 1e6:.3f} MHz but no power step; wanted at least one with a known power into "
                "the dummy load there, as it gives the band its gain"
            )


def _dark_mean(steps: list[BenchStep]) -> float:
    return float(np.mean([step.forward for step in steps if step.kind == "dark"]))


@dataclass(frozen=True, slots=True)
class Solution:
    """Best vector of a model, its covariance, its cost, and whether the search came to rest."""

    vector: Array
    covariance: Array
    settled: bool


def solve(model: BenchModel) -> Solution:
    """Best vector over all starts; the laws and the wattmeter's scatter of `model` are refined on the way."""
    best = min((_descend(model, start) for start in start_vectors(model)), key=lambda found: float(found.cost))
    for _ in range(4):
        before = model.scatter
        model.refine_laws(best.x)
        model.scatter = scatter_of(model, best.x)
        best = _descend(model, best.x)
        if abs(model.scatter - before) < 0.02 * before:
            break
    jacobian = _jacobian(model.residuals)(best.x)
    covariance = np.asarray(np.linalg.inv(jacobian.T @ jacobian), dtype=float)
    return Solution(np.asarray(best.x), (covariance + covariance.T) / 2.0, best.status > 0)


def _descend(model: BenchModel, start: Array) -> OptimizeResult:
    from scipy.optimize import least_squares

    jacobian = _jacobian(model.residuals)
    return least_squares(model.residuals, start, jac=jacobian, method="lm", x_scale="jac", max_nfev=_MOST_STEPS)


def _jacobian(residuals: Callable[[Array], Array]) -> Callable[[Array], Array]:
    """Central differences of `residuals`, all parameters in one evaluation."""

    def jacobian(vector: Array) -> Array:
        step = 1e-6 * np.maximum(np.abs(vector), 1e-2)
        moved = np.diag(step)
        rise = residuals(vector + moved) - residuals(vector - moved)
        return np.asarray((rise / (2.0 * step[:, None])).T)

    return jacobian


def scatter_of(model: BenchModel, vector: Array) -> float:
    """The wattmeter's scatter from its residuals, less the freedom they have given to laws and gains."""
    sigmas = model.residuals(vector)[: len(model.residual_steps)]
    of_power = np.array([what == "power" for _, what in model.residual_steps])
    jacobian = _jacobian(model.residuals)(vector)
    hat = np.einsum("ij,jk,ik->i", jacobian, np.linalg.inv(jacobian.T @ jacobian), jacobian)
    free = float(np.sum(1.0 - hat[: len(sigmas)][of_power]))
    if free < 1.0:
        return model.scatter
    return float(np.clip(model.scatter * np.sqrt(np.sum(sigmas[of_power] ** 2) / free), _SCATTER_FLOOR, _SCATTER_MOST))


def _typical(sds: list[float]) -> float:
    return float(np.median(sds))


def _reference_pct(steps: list[BenchStep], ratings: BenchRatings) -> float:
    """Accuracy of power [%, 95 %]: the best the reference offers at any step, as one good point carries the scale."""
    if ratings.reference_full_scale_w is None:
        own = [ratings.reference_pct if s.power_pct is None else s.power_pct for s in steps if s.kind == "power"]
        return float(np.median(own))
    powers = [s.power_w for s in steps if s.kind == "power" and s.power_w is not None]
    return ratings.reference_pct * ratings.reference_full_scale_w / max(powers)


def _notes(model: BenchModel, identified: list[bool], settled: bool) -> tuple[str, ...]:
    """What the steps left open, as sentences."""
    said = [] if settled else ["the fit did not come to rest: these steps do not determine all that it looks for"]
    if len(model.of_kind["reversed"]) == 0:
        said.append("no reversed step: the reflected detector's law leans on the forward one's")
    if len(model.of_kind["load"]) == 0:
        said.append("no load step: the balance of the two detectors rests on the wattmeter alone")
    for hz, known in zip(model.bands, identified, strict=True):
        if not known:
            said.append(f"{hz / 1e6:.3f} MHz: the loads do not identify the forward port's leak; a bound stands in")
    return tuple(said)
