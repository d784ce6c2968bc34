"""What to measure next: by how much each step a builder could take would narrow the SWR interval that matters.

One rule: a step counts for what it narrows by itself, or for its share in what the best few together would narrow,
whichever is more; for loads bound a leak only once several of them have been measured, and none of them alone would
ever look worth its while. What is shown as "after" is always the step's own.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
import numpy.typing as npt

from .bench import BenchRatings, BenchStep, step_power_w
from .candidates import Candidate, Limits, band_words, candidates, first_steps, has_enough
from .errors import SheetError
from .fit_model import BenchModel
from .fit_search import Solution, solve
from .foresight import Aim, Foresight
from .laws import LAWS
from .reflection import rho_from_swr, swr_from_rho

__all__ = ["Advice", "Aim", "Candidate", "Limits", "Proposal", "proposals", "rank"]

Array = npt.NDArray[np.float64]
Span = tuple[float, float]

#: How many further steps in one band a builder is taken to have patience for.
_AHEAD = 4
#: Above so many candidates several are dropped at a time.
_FEW = 12
#: Narrowings below this part are not worth a key-down.
_LITTLE = 0.01
_FIXED = "not yet enough for a fit, so these come in a fixed order that suits any bridge"


@dataclass(frozen=True, slots=True)
class Proposal:
    """A step worth taking. now, after, together: SWR interval of the aim in each of `bands_hz` [Hz].

    narrowing: mean over the bands of the part by which this step alone would shrink the interval, 0..1; worth: what it
    is ranked by. together, joint: the same with the steps of `company` too, the others of its band's best few. A step
    of the fixed order has no bands and no intervals.
    """

    candidate: Candidate
    aim: Aim = field(default_factory=Aim)
    bands_hz: tuple[float, ...] = ()
    now: tuple[Span, ...] = ()
    after: tuple[Span, ...] = ()
    narrowing: float = 0.0
    worth: float = 0.0
    company: tuple[Candidate, ...] = ()
    together: tuple[Span, ...] = ()
    joint: float = 0.0

    @property
    def words(self) -> str:
        """What to do, and what it would give on its own band, for the builder."""
        if not self.bands_hz:
            return self.candidate.words
        at = self._shown
        where = f"at SWR {self.aim.swr:g}, {self.aim.power_w:g} W, {band_words(self.bands_hz[at])}"
        said = f"{self.candidate.words}: {where}: {_span(self.now[at])}; after this step {_span(self.after[at])}"
        if not self.company or self.worth <= self.narrowing:
            return said
        return f"{said}; with {', '.join(other.brief for other in self.company)} as well {_span(self.together[at])}"

    @property
    def _shown(self) -> int:
        """The band to speak of: the step's own, or where it does most."""
        if self.candidate.frequency_hz is not None:
            return int(np.argmin(np.abs(np.log(np.array(self.bands_hz) / self.candidate.frequency_hz))))
        shrunk = [(now[1] - now[0]) - (after[1] - after[0]) for now, after in zip(self.now, self.after, strict=True)]
        return int(np.argmax(np.nan_to_num(shrunk)))


@dataclass(frozen=True, slots=True)
class Advice:
    """What to measure next: sentences to be said first, and proposals, best first. fixed: no fit, a fixed order."""

    lead: tuple[str, ...]
    proposals: tuple[Proposal, ...]
    fixed: bool = False


def proposals(
    steps: list[BenchStep],
    *,
    full_scale: int,
    z0_ohm: float = 50.0,
    detector: str = "diode",
    ratings: BenchRatings | None = None,
    limits: Limits | None = None,
    match_return_loss_db: float | None = None,
    wanted_hz: tuple[float, ...] = (),
    aim: Aim | None = None,
    fitted: tuple[BenchModel, Solution] | None = None,
) -> Advice:
    """Advice for a sheet; `wanted_hz`: bands to be calibrated besides those in it. Does the fit unless given one.

    fitted: the model and solution of a fit of these very steps. UnitError where a load cannot be read, LinAlgError
    where the steps contradict each other. Steps that cannot carry a fit yet get a fixed order in place of an error.
    """
    limits = limits or Limits()
    usable = [replace(step, power_w=step_power_w(step, z0_ohm)) for step in steps]
    lacking = tuple(Proposal(step) for step in first_steps(usable, limits, wanted_hz=wanted_hz, z0_ohm=z0_ohm))
    said = _unnamed(limits)
    if fitted is None:
        if not has_enough(usable):
            return Advice((_FIXED, *said), lacking, fixed=True)
        try:
            fitted = _solved(usable, ratings or BenchRatings(), z0_ohm, detector)
        except SheetError as error:
            return Advice((_FIXED, str(error), *said), lacking, fixed=True)
    frequencies = [min(_frequencies(usable), key=lambda hz: abs(hz - band)) for band in fitted[0].bands]
    found = candidates(usable, limits, bands_hz=frequencies, z0_ohm=z0_ohm)
    foresight = Foresight(*fitted, found, full_scale=full_scale, match_return_loss_db=match_return_loss_db, aim=aim)
    ranked = rank(foresight)
    absent = [proposal for proposal in lacking if proposal.candidate.kind == "power"]
    for proposal in absent:
        said.append(
            f"no power step on {band_words(proposal.candidate.frequency_hz)} yet: it is not calibrated without one"
        )
    return Advice((*_bounds(foresight, ranked), *said), (*absent, *ranked))


def _solved(steps: list[BenchStep], ratings: BenchRatings, z0_ohm: float, detector: str) -> tuple[BenchModel, Solution]:
    model = BenchModel(steps, ratings, z0_ohm, LAWS[detector])
    return model, solve(model)


def _frequencies(steps: list[BenchStep]) -> list[float]:
    return [step.frequency_hz for step in steps if step.frequency_hz is not None]


def _unnamed(limits: Limits) -> list[str]:
    """What the ratings that nobody has named keep from being proposed."""
    said = []
    if limits.power_min_w is None or limits.power_max_w is None:
        said.append("without power_min_w and power_max_w in [bench] only powers already in the sheet are proposed")
    if limits.resistor_w is None:
        said.append("without resistor_w in [bench] no load step above 0.25 W is proposed")
    return said


def rank(foresight: Foresight) -> list[Proposal]:
    """All candidates as proposals, the most worthwhile first."""
    count, bands = len(foresight.candidates), foresight.calibrated(foresight.now)
    single = [foresight.calibrated(foresight.after([n])) for n in range(count)]
    few = [_best_few(foresight, band) for band in range(len(bands))]
    joint = [foresight.calibrated(foresight.after(members)) for members in few]
    rho = foresight.intervals([band for each in (bands, *single, *joint) for band in each])
    rho = rho.reshape(1 + count + len(few), len(bands), 2)
    narrowing = (1.0 - _width(rho[1:]) / _width(rho[0])).mean(axis=-1)
    bands_hz = tuple(band.frequency_hz for band in bands)
    found = []
    for n, candidate in enumerate(foresight.candidates):
        own, after = float(narrowing[n]), _spans(rho[1 + n])
        alone = Proposal(candidate, foresight.aim, bands_hz, _spans(rho[0]), after, own, own, (), after, own)
        found += [
            _in_company(alone, foresight, members, float(narrowing[count + at]), rho[1 + count + at])
            for at, members in enumerate(few)
            if n in members
        ] or [alone]
    # A share is the same for all of a few: among them the one that does most by itself goes first, then the simplest.
    return sorted(found, key=lambda p: (-round(p.worth, 3), -round(p.narrowing, 3)))


def _in_company(alone: Proposal, foresight: Foresight, few: list[int], joint: float, rho: Array) -> Proposal:
    """The proposal as one of the best few of its band, which narrow by `joint`, to `rho`."""
    company = tuple(step for step in (foresight.candidates[n] for n in few) if step != alone.candidate)
    worth = max(alone.narrowing, joint / len(few))
    return replace(alone, worth=worth, company=company, together=_spans(rho), joint=joint)


def _best_few(foresight: Foresight, band: int) -> list[int]:
    """The _AHEAD candidates of a band that together narrow its interval most: the idlest of all are dropped in turn."""
    chosen = [n for n, of in enumerate(foresight.bands) if of == band]
    while len(chosen) > _AHEAD:
        known = foresight.after(chosen)
        left = [foresight.one_band(foresight.without(known, n), band) for n in chosen]
        # One at a time near the end, where each leans on few others; a third at once while there are many.
        idlest = np.argsort(_width(foresight.intervals(left)), kind="stable")[: max(1, (len(chosen) - _FEW) // 3)]
        chosen = [n for place, n in enumerate(chosen) if place not in idlest]
    return chosen


def _bounds(foresight: Foresight, ranked: list[Proposal]) -> list[str]:
    """Where the dummy load, the detectors' reach or the bench as a whole stands in the way: said before any step."""
    now = _width(foresight.intervals(foresight.calibrated(foresight.now)))
    better = foresight.intervals(foresight.with_better_dummy())
    gained, most = 1.0 - _width(better) / now, _most_narrowed(ranked, len(now))
    reading = f"{foresight.aim.power_w:g} W at SWR {foresight.aim.swr:g}"
    said = [f"{reading} is beyond what the detectors count on {band_words(hz)}" for hz in foresight.beyond_reach]
    if (gained > np.maximum(most, _LITTLE)).all():
        at = int(np.argmax(gained))
        said.append(
            "the dummy load bounds this calibration more than the best few steps could mend: a dummy with a far better "
            f"return loss would narrow it by {100.0 * gained[at]:.0f} % on {band_words(foresight.bands_hz[at])}, to "
            f"{_span(_spans(better)[at])}; steps by {100.0 * most[at]:.0f} %"
        )
    if most.max() < _LITTLE:
        said.append(f"no step here would narrow the interval by {100.0 * _LITTLE:g} %: none is needed for its sake")
    return said


def _most_narrowed(ranked: list[Proposal], bands: int) -> Array:
    """The most that any proposal with its company narrows the interval of each band [bands]."""
    widths = [[_width(rho_from_swr(spans)) for spans in (proposal.now, proposal.together)] for proposal in ranked]
    narrowed = np.array([np.zeros(bands), *(1.0 - together / now for now, together in widths)])
    return np.asarray(narrowed.max(axis=0))


def _width(rho: Array) -> Array:
    return np.asarray(rho[..., 1] - rho[..., 0])


def _spans(rho: Array) -> tuple[Span, ...]:
    return tuple((float(low), float(high)) for low, high in swr_from_rho(rho))


def _span(swr: Span) -> str:
    return f"{swr[0]:.2f}-{swr[1]:.2f}" if np.isfinite(swr[1]) else f"at least {swr[0]:.2f}"
