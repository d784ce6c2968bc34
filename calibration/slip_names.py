"""A step that does not fit, in words: the slip that would explain it, tried on the fit of the others.

One rule: a slip is named only where the step, corrected for it, fits; where two would do, both are named, and where
none does, only how far the step is off.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from .bench import BenchStep
from .fit_model import BenchModel
from .fit_search import Solution, jacobian_at
from .loads import LoadPart, load_impedance_ohm, load_reflection, part_of

__all__ = ["Slip", "fits", "name_part", "name_steps"]

Array = npt.NDArray[np.float64]

#: A corrected step fits within this many sd, and it fits better than another by this much chi-square to be alone.
_FITS, _ALONE = 4.0, 9.0
#: Factors a decimal point or a prefix makes.
_MISTYPED = (10.0, 0.1, 100.0, 0.01, 1000.0, 0.001)
#: A detector may stop short of the converter's full scale: at this part of the largest count met it may be that.
_TOP_PART = 0.97


@dataclass(frozen=True, slots=True)
class Slip:
    """Steps (from 0) that do not fit the others, and why, as words that follow their numbers."""

    steps: tuple[int, ...]
    reason: str

    @property
    def words(self) -> str:
        """The whole sentence, with the steps' numbers as in the sheet."""
        numbers = [str(step + 1) for step in self.steps]
        named = f"steps {', '.join(numbers[:-1])} and {numbers[-1]}" if len(numbers) > 1 else f"step {numbers[0]}"
        return f"{named}: {self.reason}"


@dataclass(frozen=True, slots=True)
class _Idea:
    """What a step might really have been, and the words for it."""

    step: BenchStep
    words: str
    load: LoadPart | None = None


def name_part(model: BenchModel, solution: Solution, part: LoadPart) -> Slip:
    """A load that is another in all steps that use it."""
    at = model.loads_slice.start + 3 * model.parts.index(part)
    ohm = load_impedance_ohm(part.text) * (1.0 + solution.vector[at])
    steps = tuple(n for n, s in enumerate(model.steps) if s.kind == "load" and part_of(s, model.ratings) == part)
    return Slip(steps, f"load {part.text} is another: the counts fit {abs(ohm):.4g} ohm, far beyond {part.pct:g} %")


def fits(model: BenchModel, solution: Solution, step: BenchStep) -> bool:
    """Whether a step that is not in the fit agrees with it."""
    return all(abs(sigmas) < _FITS for _, sigmas in _rows(model, solution, [step])[0])


def name_steps(model: BenchModel, solution: Solution, aside: list[int]) -> list[Slip]:
    """The steps set aside, each with the slip that explains it; two loads exchanged are one slip."""
    found = {step: _explained(model, solution, step) for step in aside}
    slips: list[Slip] = []
    for step in aside:
        other = next((b for b in aside if b > step and _exchanged(model, found, step, b)), None)
        if other is not None:
            loads = " and ".join(f"{model.steps[n].load}" for n in (step, other))
            slips.append(Slip((step, other), f"loads {loads} look exchanged"))
        elif not any(step in slip.steps for slip in slips):
            slips.append(Slip((step,), _reason(model, solution, step, found[step])))
    return slips


def _exchanged(model: BenchModel, found: dict[int, list[_Idea]], one: int, other: int) -> bool:
    """Whether each of two load steps of a band fits as what the other was to be."""
    first, second = model.steps[one], model.steps[other]
    if "load" not in (first.kind, second.kind) or model.band[one] != model.band[other]:
        return False
    parts = [part_of(step, model.ratings) if step.kind == "load" else None for step in (first, second)]
    return any(i.load == parts[1] for i in found[one]) and any(i.load == parts[0] for i in found[other])


def _reason(model: BenchModel, solution: Solution, number: int, ideas: list[_Idea]) -> str:
    if ideas:
        return ", or ".join(dict.fromkeys(idea.words for idea in ideas))
    step = model.steps[number]
    if step.kind in ("power", "reversed"):
        return _power_words(model, solution, step)
    if step.kind == "load" and (ohms := _ohms_that_fit(model, solution, step)):
        return f"load {step.load} does not fit: the counts fit {' or '.join(f'{ohm:.3g}' for ohm in ohms)} ohm"
    off = _rows(model, solution, [step])[0]
    what, sigmas = max(off, key=lambda row: abs(row[1]))
    return f"does not fit the others: {what} {sigmas:+.1f} sd"


def _power_words(model: BenchModel, solution: Solution, step: BenchStep) -> str:
    side = "forward" if step.kind == "power" else "reflected"
    seen = _seen_w(model, solution, step)
    counts = getattr(step, side)
    top = max(getattr(other, side) for other in model.steps)
    if seen < (step.power_w or 0.0) and counts >= _TOP_PART * top:
        return (
            f"{side} {counts:g} looks saturated: the counts stop at {_watts(seen)} W while power_w is {step.power_w:g}"
        )
    return f"power_w {step.power_w:g} does not fit: the counts fit {_watts(seen)} W"


def _explained(model: BenchModel, solution: Solution, number: int) -> list[_Idea]:
    """The slips that make a step fit, best first, without those clearly worse than the best."""
    ideas = _ideas(model, solution, number)
    rows = _rows(model, solution, [idea.step for idea in ideas])
    good = [
        (sum(sigmas**2 for _, sigmas in own), idea)
        for idea, own in zip(ideas, rows, strict=True)
        if all(abs(sigmas) < _FITS for _, sigmas in own)
    ]
    good.sort(key=lambda pair: pair[0])
    return [idea for chi_square, idea in good if chi_square < good[0][0] + _ALONE]


def _ideas(model: BenchModel, solution: Solution, number: int) -> list[_Idea]:
    step = model.steps[number]
    crossed = replace(
        step,
        forward=step.reflected,
        reflected=step.forward,
        forward_sd=step.reflected_sd,
        reflected_sd=step.forward_sd,
    )
    ideas = [_Idea(crossed, "forward and reflected look exchanged")]
    if step.kind in ("power", "reversed") and step.power_w is not None:
        other = "reversed" if step.kind == "power" else "power"
        ideas.append(_Idea(replace(step, kind=other), f"the bridge looks turned as for a {other} step"))
        words = f"power_w {step.power_w:g} looks mistyped: the counts fit {_watts(_seen_w(model, solution, step))} W"
        ideas += [_Idea(replace(step, power_w=step.power_w * factor), words) for factor in _MISTYPED]
    if step.kind == "load":
        ideas += _other_loads(model, step)
    return ideas


def _other_loads(model: BenchModel, step: BenchStep) -> list[_Idea]:
    """The other loads and lines of the same sheet."""
    own, ideas = part_of(step, model.ratings), []
    like = {part_of(s, model.ratings): s for s in model.steps if s.kind == "load"}
    for part, other in like.items():
        if part != own:
            loaded = replace(
                step, load=other.load, load_pct=other.load_pct, load_nh=other.load_nh, load_pf=other.load_pf
            )
            ideas.append(_Idea(loaded, f"load {step.load} looks like {other.load} was connected", part))
    if step.line_deg:
        bare = replace(step, line_deg=0.0, line_loss_db=None)
        return [*ideas, _Idea(bare, f"looks taken without its {step.line_deg:g} degrees of line")]
    hz = step.frequency_hz or 1.0
    lined = [s for s in model.steps if s.line_deg and s.frequency_hz and abs(s.frequency_hz / hz - 1.0) < 0.1]
    for other in lined:
        behind = replace(step, line_deg=other.line_deg, line_loss_db=other.line_loss_db)
        ideas.append(_Idea(behind, f"looks taken behind {other.line_deg:g} degrees of line"))
    return ideas


def _rows(model: BenchModel, solution: Solution, tried: list[BenchStep]) -> list[list[tuple[str, float]]]:
    """What each of `tried`, none of them in the fit, is off it: (what, sigmas), the fit's own uncertainty included."""
    wide = BenchModel(
        [*model.steps, *tried],
        model.ratings,
        model.z0_ohm,
        type(model.first_laws[0]),
        freed=model.freed,
        laws=model.first_laws,
    )
    wide.scatter = model.scatter
    kept = len(wide.residual_steps)
    sigmas = wide.residuals(solution.vector)[:kept]
    slopes = jacobian_at(wide.residuals, solution.vector)[:kept]
    sds = np.sqrt(1.0 + np.einsum("ij,jk,ik->i", slopes, solution.covariance, slopes))
    found: list[list[tuple[str, float]]] = [[] for _ in tried]
    for (step, what), value in zip(wide.residual_steps, sigmas / sds, strict=True):
        if step >= len(model.steps):
            found[step - len(model.steps)].append((what, float(value)))
    return found


def _seen_w(model: BenchModel, solution: Solution, step: BenchStep) -> float:
    """Power [W] that a power or reversed step's counts fit."""
    side = 0 if step.kind == "power" else 1
    band = int(np.argmin([abs(np.log((step.frequency_hz or 1.0) / centre)) for centre in model.bands]))
    at = model.band_slice(band).start
    law = model.laws(solution.vector)[side]
    lost = 1.0 if side == 0 else 10.0 ** (-solution.vector[at + 8] / 10.0)
    counts = step.forward if side == 0 else step.reflected
    return max(float(law.square(counts)) / float(np.exp(2.0 * solution.vector[at + side])) * lost, 0.0)


def _ohms_that_fit(model: BenchModel, solution: Solution, step: BenchStep) -> list[float]:
    """Resistances at which a load step's counts fit, one on either side of z0 as a rule."""
    forward, reflected = model.laws(solution.vector)
    band = int(np.argmin([abs(np.log((step.frequency_hz or 1.0) / centre)) for centre in model.bands]))
    gains = np.exp(2.0 * solution.vector[model.band_slice(band)][:2])
    seen = float(reflected.square(step.reflected)) / gains[1] / (float(forward.square(step.forward)) / gains[0])
    ohms = np.geomspace(0.02, 50.0, 800) * model.z0_ohm
    gamma = load_reflection(ohms, step.frequency_hz or 0.0, line_deg=step.line_deg, z0_ohm=model.z0_ohm)
    d, c, _ = (complex(leak[0]) for leak in model.leaks(solution.vector, np.array([band])))
    over = np.abs(gamma + d) ** 2 / np.abs(1.0 + c * gamma) ** 2 > seen
    return [float(np.sqrt(ohms[at] * ohms[at + 1])) for at in np.flatnonzero(over[1:] != over[:-1])]


def _watts(power_w: float) -> str:
    """Two digits and no power of ten."""
    digits = 1 - int(np.floor(np.log10(max(power_w, 1e-6))))
    return f"{round(power_w, digits):.{max(digits, 0)}f}"
