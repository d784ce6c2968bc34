"""The model of a bench: parameters of one bridge and its loads, and what every step should then have counted.

One rule: the forward detector supplies the power of a step. A wattmeter's word is compared with it, within the
wattmeter's scatter; its common error cannot be seen and stays outside the fit.

Forward counts F(k_f |1 + c G| sqrt P), reflected counts R(k_r |G + d| sqrt P); in a reversed step the reflected
detector sees the whole wave, less the bridge's own loss between it and the wattmeter.
Source: C. A. Hoer, IEEE Trans. IM-21, 466 (1972) for the reflectometer's equation (from memory).
"""

from __future__ import annotations

from functools import cached_property

import numpy as np
import numpy.typing as npt

from .bench import STEP_KINDS, BenchRatings, BenchStep
from .bridge import BAND_REACH
from .errors import SheetError
from .laws import Law
from .loads import load_impedance_ohm, load_reflection, part_of
from .meter import counting_sd
from .reflection import rho_from_return_loss

__all__ = ["BenchModel", "group_bands"]

Array = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]
Places = npt.NDArray[np.intp]

#: Per band: ln k_f, ln k_r, d, c and the dummy's reflection as real and imaginary part, own loss [dB].
BAND_SIZE = 9
_DB = 10.0 / np.log(10.0)
#: Counts are not believed beyond this part of themselves: no law follows a detector further.
COUNT_PART = 5e-4

# Priors (mean, sd): wide enough that a usable bench overrules them, narrow enough that what it leaves open stays
# physical. A leak of 0.1 is a directivity of 20 dB.
_LEAK_SD = 0.1
#: ln of reflected over forward gain: both sides of a coupler are usually built alike (common practice).
_BALANCE_SD = 0.35
#: The bridge's own loss between the reflected detector and the wattmeter [dB] (a 20-30 dB coupler; common practice).
_OWN_LOSS = (0.05, 0.04)
_LINE_DEG_SD = 0.5
_LINE_LOSS_DB = 0.05


def group_bands(steps: list[BenchStep]) -> list[float]:
    """Centre frequencies [Hz] of the bands of a bench: steps within 10 % of a band's first one belong to it."""
    groups: list[list[float]] = []
    for hz in sorted({s.frequency_hz for s in steps if s.frequency_hz is not None}):
        if groups and hz <= groups[-1][0] * (1.0 + BAND_REACH):
            groups[-1].append(hz)
        else:
            groups.append([hz])
    return [float(np.mean(group)) for group in groups]


class BenchModel:
    """Parameters as one vector, and the weighted residuals of all steps and priors at such vectors.

    Vectors have shape (..., size): many are evaluated at once, which is what makes the fit's Jacobian cheap.
    """

    def __init__(self, steps: list[BenchStep], ratings: BenchRatings, z0_ohm: float, kind: type[Law]) -> None:
        """Sort `steps` into bands, load parts and lines, and find first laws of `kind`.

        UnitError where a load cannot be read, SheetError where the powers do not carry such a law.
        """
        self.steps = steps
        self.ratings = ratings
        self.z0_ohm = z0_ohm
        self.scatter = 0.01  # the wattmeter's scatter from step to step, relative sd of power
        self.bands = group_bands(steps)
        self.band = np.array([self._band_of(step) for step in steps], dtype=int)
        self.of_kind = {kind: np.flatnonzero([s.kind == kind for s in steps]) for kind in STEP_KINDS}
        self.dummy_limit = float(rho_from_return_loss(ratings.dummy_return_loss_db))
        loads = [steps[at] for at in self.of_kind["load"]]
        self.parts = sorted({part_of(s, ratings) for s in loads}, key=str)
        self.lines = sorted({self._line_of(s) for s in loads if s.line_deg}, key=str)
        self._part = np.array([self.parts.index(part_of(s, ratings)) for s in loads], dtype=int)
        self._line = np.array([self.lines.index(self._line_of(s)) if s.line_deg else -1 for s in loads], dtype=int)
        self._impedance = np.array([load_impedance_ohm(s.load or "") for s in loads], dtype=complex)
        self._counts = [np.array([s.forward for s in steps]), np.array([s.reflected for s in steps])]
        self._hz = np.array([s.frequency_hz or np.nan for s in steps])
        self._power = np.array([np.nan if s.power_w is None else s.power_w for s in steps])
        self._line_deg = np.array([s.line_deg for s in steps])
        self._sds = [
            np.array([float(counting_sd(getattr(s, sd), s.samples)) for s in steps])
            for sd in ("forward_sd", "reflected_sd")
        ]
        self.first_laws = self._first_laws(kind)
        self._law_sizes = [len(law.parameters) for law in self.first_laws]

    @property
    def size(self) -> int:
        """Length of a parameter vector."""
        return self._lines_at + 2 * len(self.lines)

    def band_slice(self, band: int) -> slice:
        """Where band `band` has its parameters."""
        start = self._bands_at + BAND_SIZE * band
        return slice(start, start + BAND_SIZE)

    def law_slice(self, side: int) -> slice:
        """Where the forward (0) or reflected (1) law has its parameters."""
        start = side * self._law_sizes[0]
        return slice(start, start + self._law_sizes[side])

    def laws(self, vectors: Array) -> tuple[Law, Law]:
        """Forward and reflected law of one vector, or of many; then they broadcast with steps."""
        forward, reflected = self.first_laws
        return (
            forward.with_parameters(vectors[..., self.law_slice(0)]),
            reflected.with_parameters(vectors[..., self.law_slice(1)]),
        )

    def refine_laws(self, vector: Array) -> None:
        """Let the laws follow what the fit left over at known powers."""
        laws = list(self.laws(vector))
        _, _, dummy = self.leaks(vector, self.band[self.of_kind["power"]])
        incident, _ = self._incident(vector, self.of_kind["power"], dummy)
        through, _ = self._through(vector)
        for side, (kind, seen_w) in enumerate((("power", incident), ("reversed", through))):
            at = self.of_kind[kind]
            off_db = _DB * np.log(self._power[at] / seen_w)
            laws[side] = laws[side].refined(self._counts[side][at], off_db, _DB * self.scatter)
        self.first_laws = (laws[0], laws[1])

    def leaks(self, vectors: Array, bands: Places) -> tuple[Complex, Complex, Complex]:
        """Complex d, c and dummy reflection in each of `bands`, shape (..., len(bands))."""
        at = self._band_at(bands)
        re, im = [2, 4, 6], [3, 5, 7]
        d, c, g = (vectors[..., at + r] + 1j * vectors[..., at + i] for r, i in zip(re, im, strict=True))
        return d, c, g

    def load_reflections(self, vectors: Array) -> Complex:
        """Complex reflection of every load step, shape (..., load steps)."""
        parts = self._parts_at + 3 * self._part
        lines = self._lines_at + 2 * np.maximum(self._line, 0)
        behind = self._line >= 0
        padded = np.concatenate([vectors, np.zeros((*vectors.shape[:-1], 2))], axis=-1)
        loads = self.of_kind["load"]
        return load_reflection(
            self._impedance,
            self._hz[loads],
            error=vectors[..., parts],
            nh=vectors[..., parts + 1],
            pf=vectors[..., parts + 2],
            line_deg=np.where(behind, self._line_deg[loads] + padded[..., lines], 0.0),
            line_loss_db=np.where(behind, padded[..., lines + 1], 0.0),
            z0_ohm=self.z0_ohm,
        )

    def residuals(self, vectors: Array) -> Array:
        """All residuals, each over its sd, shape (..., m): in the order of `residual_steps`, then the priors'."""
        loads = self.of_kind["load"]
        _, _, dummy = self.leaks(vectors, self.band[self.of_kind["power"]])
        power, reflections = self._forward_steps(vectors, self.of_kind["power"], dummy)
        _, load_reflections = self._forward_steps(vectors, loads, self.load_reflections(vectors))
        turned = self._wattmeter(self.of_kind["reversed"], *self._through(vectors))
        priors = self._prior_residuals(vectors)
        return np.concatenate(
            [*self._dark_steps(vectors), power, reflections, turned, load_reflections, priors], axis=-1
        )

    @property
    def residual_steps(self) -> list[tuple[int, str]]:
        """Step index and what is compared ("forward", "reflected", "power") of each residual before the priors."""
        kinds = [("dark", "forward"), ("dark", "reflected"), ("power", "power"), ("power", "reflected")]
        kinds += [("reversed", "power"), ("load", "reflected")]
        return [(int(step), what) for kind, what in kinds for step in self.of_kind[kind]]

    def reversed_leaks(self, vector: Array) -> dict[int, float]:
        """What the forward detector saw of the whole wave in each band's reversed steps: mean |leak| per band."""
        forward, reflected = self.laws(vector)
        seen: dict[int, list[float]] = {}
        for step in self.of_kind["reversed"]:
            at = int(self._band_at(self.band[step]))
            little = float(forward.square(self._counts[0][step])) / float(np.exp(2.0 * vector[at]))
            whole = float(reflected.square(self._counts[1][step])) / float(np.exp(2.0 * vector[at + 1]))
            seen.setdefault(int(self.band[step]), []).append(max(little, 0.0) / whole)
        return {band: float(np.sqrt(np.mean(ratios))) for band, ratios in seen.items()}

    def _forward_steps(self, vectors: Array, at: Places, gamma: Complex) -> tuple[Array, Array]:
        """Residuals of steps in which the forward detector supplies the power: wattmeter's and reflected count's."""
        d = self.leaks(vectors, self.band[at])[0]
        incident, noise = self._incident(vectors, at, gamma)
        square, slope = self._squares(vectors, 1, at)
        expected = incident * np.exp(2.0 * vectors[..., self._band_at(self.band[at]) + 1]) * np.abs(gamma + d) ** 2
        # Compared as powers, in which the reflected law is asked one way only. The forward count's own noise moves
        # the power it supplies, and so what is expected here.
        own = np.hypot(slope * self._count_sd(1, at), self._misfit(1, at) * expected)
        sd = np.hypot(own, noise * expected)
        known = np.logical_and(
            *(law.covers(counts[at]) for law, counts in zip(self.first_laws, self._counts, strict=True))
        )
        return self._wattmeter(at, incident, noise), np.where(known, (square - expected) / sd, 0.0)

    def _incident(self, vectors: Array, at: Places, gamma: Complex) -> tuple[Array, Array]:
        """Power [W] of steps as the forward detector saw it, and its relative sd by counting."""
        c = self.leaks(vectors, self.band[at])[1]
        square, slope = self._squares(vectors, 0, at)
        square = np.maximum(square, 1e-12)
        gain = np.exp(2.0 * vectors[..., self._band_at(self.band[at])])
        noise = np.hypot(slope * self._count_sd(0, at) / square, self._misfit(0, at))
        return square / gain / np.abs(1.0 + c * gamma) ** 2, noise

    def _through(self, vectors: Array) -> tuple[Array, Array]:
        """Power [W] at the wattmeter of reversed steps as the reflected detector saw it, and its relative sd."""
        at = self.of_kind["reversed"]
        gains = self._band_at(self.band[at])
        square, slope = self._squares(vectors, 1, at)
        square = np.maximum(square, 1e-12)
        lost = 10.0 ** (-vectors[..., gains + 8] / 10.0)
        noise = np.hypot(slope * self._count_sd(1, at) / square, self._misfit(1, at))
        return square / np.exp(2.0 * vectors[..., gains + 1]) * lost, noise

    def _squares(self, vectors: Array, side: int, at: Places) -> tuple[Array, Array]:
        """A law's square and slope at the counts of steps; each set of law parameters is worked out once only.

        Of the hundred vectors of a Jacobian a handful differ in the law, which is the costly part.
        """
        counts, first = self._counts[side][at], self.first_laws[side]
        own = vectors[..., self.law_slice(side)]
        if own.ndim == 1:
            law = first.with_parameters(own)
            return law.square(counts), law.slope(counts)
        rows, place = np.unique(own, axis=0, return_inverse=True)
        law = first.with_parameters(rows)
        return law.square(counts)[place.reshape(-1)], law.slope(counts)[place.reshape(-1)]

    def _dark_steps(self, vectors: Array) -> list[Array]:
        at = self.of_kind["dark"]
        offsets = (vectors[..., self.law_slice(side)][..., :1] for side in (0, 1))
        return [(self._counts[side][at] - offset) / self._sds[side][at] for side, offset in enumerate(offsets)]

    def _wattmeter(self, at: Places, seen_w: Array, noise: Array) -> Array:
        return np.asarray(np.log(seen_w / self._power[at]) / np.hypot(self.scatter, noise))

    def _count_sd(self, side: int, at: Places) -> Array:
        return np.asarray(np.hypot(self._sds[side][at], COUNT_PART * self._counts[side][at]))

    def _misfit(self, side: int, at: Places) -> Array:
        return self.first_laws[side].misfit(self._counts[side][at])

    def _first_laws(self, kind: type[Law]) -> tuple[Law, Law]:
        darks = [float(np.mean(counts[self.of_kind["dark"]])) for counts in self._counts]
        found = []
        for side, step_kind in enumerate(("power", "reversed")):
            at = self.of_kind[step_kind]
            found.append(kind.start(self._counts[side][at], self._power[at], self.band[at], darks[side]))
        forward, reflected = found
        if forward is None:
            raise SheetError(
                "the power steps do not carry such a detector law: wanted more powers, further apart, into the dummy"
            )
        if reflected is None and np.isinf(forward.likeness()).all():
            raise SheetError(
                "the reversed steps do not carry a table law: wanted at least 4, as widely spread in power as the "
                "power steps; the reflected detector's table cannot be had from the forward one's"
            )
        alike = np.concatenate([[darks[1]], forward.parameters[1:]])
        return forward, forward.with_parameters(alike) if reflected is None else reflected

    def _band_of(self, step: BenchStep) -> int:
        hz = step.frequency_hz
        return -1 if hz is None else int(np.argmin([abs(np.log(hz / centre)) for centre in self.bands]))

    def _band_at(self, bands: Places) -> Places:
        return np.asarray(self._bands_at + BAND_SIZE * bands)

    @property
    def _bands_at(self) -> int:
        return sum(self._law_sizes)

    @property
    def _parts_at(self) -> int:
        return self._bands_at + BAND_SIZE * len(self.bands)

    @property
    def _lines_at(self) -> int:
        return self._parts_at + 3 * len(self.parts)

    def _line_of(self, step: BenchStep) -> tuple[float, int, float | None]:
        return (step.line_deg, self._band_of(step), step.line_loss_db)

    def _prior_residuals(self, vectors: Array) -> Array:
        mean, sd = self.priors
        held = np.isfinite(sd)
        own = ((vectors - mean) / np.where(held, sd, 1.0))[..., held]
        sd = self.first_laws[0].likeness()
        told = np.flatnonzero(np.isfinite(sd))
        # Laws that say nothing of each other may differ in size: `told` is then empty, and so is what is taken.
        forward, reflected = (vectors[..., self.law_slice(side).start + told] for side in (0, 1))
        alike = (reflected - forward) / sd[told]
        gains = self._band_at(np.arange(len(self.bands)))
        balance = (vectors[..., gains + 1] - vectors[..., gains]) / _BALANCE_SD
        return np.concatenate([own, alike, balance], axis=-1)

    @cached_property
    def priors(self) -> tuple[Array, Array]:
        """Mean and sd of every parameter's prior; sd is infinite where there is none."""
        mean, sd = np.zeros(self.size), np.full(self.size, np.inf)
        for side, law in enumerate(self.first_laws):
            mean[self.law_slice(side)], sd[self.law_slice(side)] = law.priors()
        for band in range(len(self.bands)):
            at = self.band_slice(band).start
            sd[at + 2 : at + 6] = _LEAK_SD
            sd[at + 6 : at + 8] = self.dummy_limit / 2.0
            mean[at + 8], sd[at + 8] = _OWN_LOSS
        for number, part in enumerate(self.parts):
            at = self._parts_at + 3 * number
            # A tolerance is a limit: its sd is that of an even spread. Inductance and capacitance lie in 0..limit.
            mean[at : at + 3] = 0.0, part.nh / 2.0, part.pf / 2.0
            sd[at : at + 3] = np.array([2.0 * part.pct / 100.0, part.nh, part.pf]) / np.sqrt(12.0) + 1e-9
        for number, (_, _, loss) in enumerate(self.lines):
            at = self._lines_at + 2 * number
            mean[at : at + 2] = 0.0, _LINE_LOSS_DB / 2.0 if loss is None else loss
            sd[at : at + 2] = _LINE_DEG_SD, _LINE_LOSS_DB / 2.0
        return mean, sd
