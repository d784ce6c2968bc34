"""What a fitted bench would know after steps that have not been taken: counts, covariance, limits, intervals.

One rule: nothing is refitted. A step not yet taken counts what the fit expects of it, so it moves no value; its own
rows R of the fit's Jacobian, each over the sd it would have, only tighten the covariance:

    C' = C - C R^T (1 + R C R^T)^-1 R C

Source: information adds up over independent measurements (A. C. Atkinson, A. N. Donev, Optimum Experimental Designs,
1992; from memory). Limits and intervals follow from C' by the very functions that a finished fit and a reading use.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from copy import copy
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
import numpy.typing as npt

from .bench import BenchRatings, BenchStep
from .bridge import Band, Bridge
from .candidates import Candidate
from .fit_model import BenchModel
from .fit_search import Solution, jacobian_at
from .laws import Law
from .leak_limits import band_of_fit, with_neighbours
from .loads import load_impedance_ohm, load_reflection
from .look import CLIPPED_PART, NO_CARRIER_SD, BandTerms, Look, counting_sd
from .readings import COLUMNS, Readings
from .reflection import rho_from_swr

__all__ = ["Aim", "Foresight", "Known"]

Array = npt.NDArray[np.float64]

#: A step is not proposed where the full wave would stand less than this many sd above dark.
_READS_SD = 3.0 * NO_CARRIER_SD
#: A dummy load this much better [dB of return loss] as good as bounds nothing.
_BETTER_DUMMY_DB = 20.0
#: A further minimum falls away once steps would cost it so much more: half the 95 % point of chi-square, as in the fit.
_TOLD_APART = 1.92


@dataclass(frozen=True, slots=True)
class Aim:
    """The reading that should be narrow: an SWR at a forward power [W]."""

    swr: float = 1.5
    power_w: float = 10.0


@dataclass(frozen=True, slots=True)
class Known:
    """What would be known after the candidates numbered `chosen`: a covariance for every minimum that still stands."""

    chosen: tuple[int, ...]
    covariances: tuple[Array | None, ...]


class _Foreseen(BenchModel):
    """A bench with further steps under the laws and the wattmeter's scatter of a fitted one."""

    def __init__(self, steps: list[BenchStep], fitted: BenchModel, ratings: BenchRatings) -> None:
        self._fitted_laws = fitted.first_laws
        self.turned_leaks: dict[int, float] = {}
        super().__init__(steps, ratings, fitted.z0_ohm, type(fitted.first_laws[0]))
        self.scatter = fitted.scatter
        self.weights[: len(fitted.weights)] = fitted.weights

    def having(self, leaks: dict[int, float], loads: npt.NDArray[np.intp]) -> BenchModel:
        """The same with only these leaks seen by turning the bridge, and only so many loads taken in each band."""
        other = copy(self)
        other.turned_leaks, other.load_kinds = leaks, loads
        return other

    def reversed_leaks(self, vector: Array) -> dict[int, float]:
        """The leaks told by `having`."""
        return self.turned_leaks

    def _first_laws(self, kind: type[Law]) -> tuple[Law, Law]:
        return self._fitted_laws


class Foresight:
    """A fitted bench, and each candidate's share in what it could know."""

    def __init__(
        self,
        model: BenchModel,
        solution: Solution,
        found: Sequence[Candidate],
        *,
        full_scale: int,
        match_return_loss_db: float | None = None,
        aim: Aim | None = None,
    ) -> None:
        """Foresee the steps of `found` after the fit `solution` of `model`; those that would not count are left out.

        Frequencies of candidates must lie in bands of the model.
        """
        self._fitted, self._vector = model, solution.vector
        self.aim = aim or Aim()
        self._full_scale, self._match_db = full_scale, match_return_loss_db
        self._laws = model.laws(solution.vector)
        self._sds = [float(np.median([getattr(s, of) for s in model.steps])) for of in ("forward_sd", "reflected_sd")]
        self._samples = int(np.median([s.samples for s in model.steps]))
        self._seen_leaks = model.reversed_leaks(solution.vector)
        steps = [(candidate, self.step_of(candidate)) for candidate in found]
        readable = [(candidate, step) for candidate, step in steps if self._reads(step)]
        self.candidates = [candidate for candidate, _ in readable]
        self.bands = [self._band_of(candidate) for candidate in self.candidates]
        self._wide = _Foreseen([*model.steps, *(step for _, step in readable)], model, model.ratings)
        minima = ((solution.vector, solution.covariance), *solution.others)
        self._minima = [_Minimum(model, self._wide, *minimum) for minimum in minima]
        for minimum in self._minima[1:]:
            minimum.compare(self._minima[0])
        self.bands_hz = tuple(model.bands)
        self.now = Known((), tuple(minimum.covariance for minimum in self._minima))

    def step_of(self, candidate: Candidate) -> BenchStep:
        """The step as the fit expects it to count."""
        squares = (0.0, 0.0) if candidate.kind == "dark" else self._squares(candidate)
        forward, reflected = (float(law.counts(square)) for law, square in zip(self._laws, squares, strict=True))
        step = BenchStep(
            candidate.kind,
            forward,
            reflected,
            frequency_hz=candidate.frequency_hz,
            power_w=None if candidate.kind == "load" else candidate.power_w,
            load=candidate.load,
            line_deg=candidate.line_deg,
            forward_sd=self._sds[0],
            reflected_sd=self._sds[1],
            samples=self._samples,
        )
        return self._with_own_parts(step)

    def _with_own_parts(self, step: BenchStep) -> BenchStep:
        """The step with what the sheet says of its load and its line, which are then the same parts."""
        for known in self._fitted.steps:
            if known.kind == "load" and known.load == step.load:
                step = replace(step, load_pct=known.load_pct, load_nh=known.load_nh, load_pf=known.load_pf)
            if known.line_deg and known.line_deg == step.line_deg and known.frequency_hz == step.frequency_hz:
                step = replace(step, line_loss_db=known.line_loss_db)
        return step

    def after(self, chosen: Iterable[int]) -> Known:
        """What would be known after the candidates numbered `chosen`."""
        chosen = tuple(chosen)
        return Known(chosen, tuple(minimum.after(chosen) for minimum in self._minima))

    def without(self, known: Known, dropped: int) -> Known:
        """What of `known` would be left had one of its candidates not been taken."""
        left = tuple(n for n in known.chosen if n != dropped)
        pairs = zip(self._minima, known.covariances, strict=True)
        return Known(left, tuple(minimum.without(covariance, left, dropped) for minimum, covariance in pairs))

    def calibrated(self, known: Known) -> tuple[Band, ...]:
        """All bands with the limits they would have."""
        model, minima = self._having(known), self._standing(known)
        found = [self._band(model, minima, band) for band in range(len(self._fitted.bands))]
        return with_neighbours([band for band, _ in found], [identified for _, identified in found])

    def one_band(self, known: Known, band: int) -> Band:
        """Band number `band` with the limits its own steps would give it."""
        return self._band(self._having(known), self._standing(known), band)[0]

    def with_better_dummy(self) -> tuple[Band, ...]:
        """All bands as they would be now, had the dummy load been so good that it bounds nothing."""
        ratings = self._fitted.ratings
        better = replace(ratings, dummy_return_loss_db=ratings.dummy_return_loss_db + _BETTER_DUMMY_DB)
        model = _Foreseen(self._wide.steps, self._fitted, better).having(self._seen_leaks, self._loaded(()))
        with np.errstate(divide="ignore"):
            gained = np.sqrt(np.maximum(1.0 / model.priors[1] ** 2 - 1.0 / self._wide.priors[1] ** 2, 0.0))
        rows = np.diag(gained)[gained > 0.0]
        minima = [(minimum.vector, _updated(minimum.covariance, rows, 1.0)) for minimum in self._minima]
        found = [self._band(model, minima, band) for band in range(len(self._fitted.bands))]
        return with_neighbours([band for band, _ in found], [identified for _, identified in found])

    def intervals(self, bands: Sequence[Band]) -> Array:
        """Interval of rho, shape (len(bands), 2), that the aim's reading would have in each of `bands`, within 0..1."""
        forward, reflected = self._aim_counts(bands)
        place, ones, none = np.arange(len(bands))[None, :], np.ones(len(bands)), np.zeros(len(bands), dtype=int)
        taken = self._look.take(forward, reflected, BandTerms.of(tuple(bands)), place, ones, none)
        columns = dict.fromkeys(COLUMNS, np.full(len(bands), np.nan))
        readings = Readings(columns, taken.bits, taken.terms, beyond_open=taken.beyond_open)
        rho = np.stack([readings.rho_low, readings.rho_high], axis=-1)
        return np.clip(np.where(np.isnan(rho), [0.0, 1.0], rho), 0.0, 1.0)

    @property
    def beyond_reach(self) -> list[float]:
        """Bands [Hz] on which the aim's reading would clip a detector."""
        bands = self.calibrated(self.now)
        most = np.maximum(*self._aim_counts(bands))
        return [band.frequency_hz for band, count in zip(bands, most, strict=True) if self._clips(count)]

    def _aim_counts(self, bands: Sequence[Band]) -> tuple[Array, Array]:
        """Forward and reflected counts of the aim's reading in each of `bands`, leaks aside."""
        ratio = float(rho_from_swr(self.aim.swr)) ** 2
        gains = np.square([(band.gain_forward, band.gain_reflected) for band in bands])
        forward, reflected = (gains * self.aim.power_w * [1.0, ratio]).T
        return self._laws[0].counts(forward), self._laws[1].counts(reflected)

    def _clips(self, counts: float) -> bool:
        return counts >= CLIPPED_PART * self._full_scale

    @cached_property
    def _look(self) -> Look:
        """The look of a reading: no step moves the laws, so one serves for all."""
        forward_sd, reflected_sd = self._sds
        return Look(
            Bridge("", self._full_scale, *self._laws, bands=(), forward_sd=forward_sd, reflected_sd=reflected_sd)
        )

    def _band(self, model: BenchModel, minima: list[tuple[Array, Array]], band: int) -> tuple[Band, bool]:
        (vector, covariance), *others = minima
        return band_of_fit(model, vector, covariance, band, self._match_db, tuple(others))

    def _having(self, known: Known) -> BenchModel:
        turned = {self.bands[n] for n in known.chosen if self.candidates[n].kind == "reversed"} - set(self._seen_leaks)
        leaks = self._seen_leaks | {band: self._leak(band) for band in turned}
        return self._wide.having(leaks, self._loaded(known.chosen))

    def _loaded(self, chosen: tuple[int, ...]) -> npt.NDArray[np.intp]:
        """How many loads each band has been shown, with the candidates of `chosen`."""
        loads = [self.bands[n] for n in chosen if self.candidates[n].kind == "load"]
        return np.asarray(self._fitted.load_kinds + np.bincount(loads, minlength=len(self._fitted.bands)))

    def _standing(self, known: Known) -> list[tuple[Array, Array]]:
        pairs = zip(self._minima, known.covariances, strict=True)
        return [(minimum.vector, covariance) for minimum, covariance in pairs if covariance is not None]

    def _leak(self, band: int) -> float:
        """What a turned bridge shows or would show of the forward port's leak: without better word, |c|."""
        return self._seen_leaks.get(band, abs(complex(self._fitted.leaks(self._vector, np.array([band]))[1][0])))

    def _squares(self, candidate: Candidate) -> tuple[float, float]:
        """Squares of the waves at both detectors [law units]."""
        band = self._band_of(candidate)
        own = self._vector[self._fitted.band_slice(band)]
        gain_f, gain_r = np.exp(2.0 * own[:2]) * (candidate.power_w or 0.0)
        if candidate.kind == "reversed":
            return gain_f * self._leak(band) ** 2, gain_r * 10.0 ** (own[8] / 10.0)
        d, c, gamma = (complex(value[0]) for value in self._fitted.leaks(self._vector, np.array([band])))
        if candidate.kind == "load":
            ohm, z0 = load_impedance_ohm(candidate.load or ""), self._fitted.z0_ohm
            gamma = complex(load_reflection(ohm, candidate.frequency_hz or 0.0, line_deg=candidate.line_deg, z0_ohm=z0))
        return gain_f * abs(1.0 + c * gamma) ** 2, gain_r * abs(gamma + d) ** 2

    def _reads(self, step: BenchStep) -> bool:
        """Whether a step would count: its full wave above dark, neither detector clipped."""
        if step.kind == "dark":
            return True
        side = 1 if step.kind == "reversed" else 0
        above = (step.forward, step.reflected)[side] - self._laws[side].offset
        reads = above > _READS_SD * float(counting_sd(self._sds[side], 1))
        return reads and not self._clips(max(step.forward, step.reflected))

    def _band_of(self, candidate: Candidate) -> int:
        """Number of its band; -1 for dark, which is of no band."""
        hz = candidate.frequency_hz
        return -1 if hz is None else int(np.argmin([abs(np.log(hz / band)) for band in self._fitted.bands]))


class _Minimum:
    """One minimum of a fit in the parameters of the wider bench, and what every new step would say to it."""

    def __init__(self, fitted: BenchModel, wide: _Foreseen, vector: Array, covariance: Array) -> None:
        """Parts and lines that only new steps use are as their priors have them."""
        places, sd = _places(fitted, wide), wide.priors[1]
        self.vector = wide.priors[0].copy()
        self.vector[places] = vector
        self.covariance = np.diag(np.square(np.where(np.isfinite(sd), sd, 0.0)))
        self.covariance[np.ix_(places, places)] = covariance
        owner = np.array([step for step, _ in wide.residual_steps]) - len(fitted.steps)
        slopes = jacobian_at(wide.residuals, self.vector)[: len(owner)]
        self._residuals = wide.residuals(self.vector)[: len(owner)]
        self._own = [np.flatnonzero(owner == n) for n in range(len(wide.steps) - len(fitted.steps))]
        self._rows = [slopes[own] for own in self._own]
        self._off = np.zeros(len(owner))

    def compare(self, best: _Minimum) -> None:
        """Let new steps count what `best` expects, so that they may tell that the truth is not here."""
        self._off = self._residuals - best._residuals

    def after(self, chosen: tuple[int, ...]) -> Array | None:
        """Covariance after the new steps numbered `chosen`; None where they would tell that the truth is not here."""
        rows = np.concatenate([np.zeros((0, len(self.vector))), *(self._rows[n] for n in chosen)])
        return None if self._ruled_out(rows, chosen) else _updated(self.covariance, rows, 1.0)

    def without(self, covariance: Array | None, left: tuple[int, ...], dropped: int) -> Array | None:
        """The same for `left`, from the `covariance` with which one more, `dropped`, had been taken."""
        if covariance is None:
            return self.after(left)
        return _updated(covariance, self._rows[dropped], -1.0)

    def _ruled_out(self, rows: Array, chosen: tuple[int, ...]) -> bool:
        """Whether what the best minimum expects of new steps cannot be explained from here."""
        off = np.concatenate([np.zeros(0), *(self._off[self._own[n]] for n in chosen)])
        if not off.any():
            return False
        return bool(off @ np.linalg.solve(np.eye(len(off)) + rows @ self.covariance @ rows.T, off) / 2.0 > _TOLD_APART)


def _places(fitted: BenchModel, wide: BenchModel) -> list[int]:
    """Where the parameters of the fitted bench lie among those of the wider one."""
    at = wide.loads_slice.start
    places = [*range(fitted.loads_slice.start)]
    for part in fitted.parts:
        places += range(at + 3 * wide.parts.index(part), at + 3 * wide.parts.index(part) + 3)
    at += 3 * len(wide.parts)
    for line in fitted.lines:
        places += range(at + 2 * wide.lines.index(line), at + 2 * wide.lines.index(line) + 2)
    return places


def _updated(covariance: Array, rows: Array, sign: float) -> Array:
    """Covariance with rows of unit sd added (sign 1) or taken away (-1)."""
    gain = covariance @ rows.T
    return np.asarray(covariance - gain @ np.linalg.solve(sign * np.eye(len(rows)) + rows @ gain, gain.T))
