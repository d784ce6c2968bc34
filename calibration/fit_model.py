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
from .loads import LoadPart, load_impedance_ohm, load_reflection, part_of
from .meter import counting_sd
from .reflection import rho_from_return_loss

__all__ = ["BAND_SIZE", "LEAK_SD", "BenchModel", "group_bands"]

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
LEAK_SD = 0.1
#: ln of reflected over forward gain: both sides of a coupler are usually built alike (common practice).
_BALANCE_SD = 0.35
#: The bridge's own loss between the reflected detector and the wattmeter [dB] (a 20-30 dB coupler; common practice).
_OWN_LOSS = (0.05, 0.04)
_LINE_DEG_SD = 0.5
#: Relative sd of a resistance of which only the order is believed.
_FREED_SD = 0.5
_LINE_LOSS_DB = 0.05
#: The laws' squares at that many sets of vectors are kept: a Jacobian, and where it was taken, for both sides.
_KEPT_SQUARES = 6


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

    def __init__(
        self,
        steps: list[BenchStep],
        ratings: BenchRatings,
        z0_ohm: float,
        kind: type[Law],
        *,
        aside: frozenset[int] = frozenset(),
        freed: frozenset[LoadPart] = frozenset(),
        laws: tuple[Law, Law] | None = None,
    ) -> None:
        """Sort `steps` into bands, load parts and lines, and find first laws of `kind`, or take `laws` for them.

        aside: steps that say nothing in this model. freed: parts whose resistance counts as unknown.
        UnitError where a load cannot be read, SheetError where the powers do not carry such a law.
        """
        self.steps = steps
        self.ratings = ratings
        self.z0_ohm = z0_ohm
        self.scatter = 0.01  # the wattmeter's scatter from step to step, relative sd of power
        # A factor on the residuals of each step.
        self.weights = np.where(np.isin(np.arange(len(steps)), list(aside)), 0.0, 1.0)
        self.freed = freed
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
        self._known_squares: dict[tuple[object, ...], tuple[Array, Array]] = {}
        self.first_laws = laws or self._first_laws(kind)
        self._law_sizes = [len(law.parameters) for law in self.first_laws]

    @property
    def size(self) -> int:
        """Length of a parameter vector."""
        return self._lines_at + 2 * len(self.lines)

    def band_slice(self, band: int) -> slice:
        """Where band `band` has its parameters."""
        start = self._bands_at + BAND_SIZE * band
        return slice(start, start + BAND_SIZE)

    @property
    def loads_slice(self) -> slice:
        """Where load parts and lines have their parameters."""
        return slice(self._parts_at, self.size)

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
            used = self.weights[self.of_kind[kind]] > 0.0
            at = self.of_kind[kind][used]
            off_db = _DB * np.log(self._power[at] / seen_w[used])
            laws[side] = laws[side].refined(self._counts[side][at], off_db, _DB * self.scatter)
        self.first_laws = (laws[0], laws[1])
        self._known_squares.clear()

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
        told = np.concatenate([*self._dark_steps(vectors), power, reflections, turned, load_reflections], axis=-1)
        return np.concatenate([told * self.weights[self._residual_step], priors], axis=-1)

    @cached_property
    def residual_steps(self) -> list[tuple[int, str]]:
        """Step index and what is compared ("forward", "reflected", "power") of each residual before the priors."""
        kinds = [("dark", "forward"), ("dark", "reflected"), ("power", "power"), ("power", "reflected")]
        kinds += [("reversed", "power"), ("load", "reflected")]
        return [(int(step), what) for kind, what in kinds for step in self.of_kind[kind]]

    @cached_property
    def _residual_step(self) -> Places:
        return np.array([step for step, _ in self.residual_steps], dtype=int)

    @cached_property
    def residual_bands(self) -> Places:
        """The band whose own parameters each residual depends on, priors too; -1 where it depends on none's."""
        _, sd = self.priors
        of_parameter = np.full(self.size, -1)
        for band in range(len(self.bands)):
            of_parameter[self.band_slice(band)] = band
        alike = np.full(int(np.isfinite(self.first_laws[0].likeness()).sum()), -1)
        told = self.band[self._residual_step]
        return np.concatenate([told, of_parameter[np.isfinite(sd)], alike, np.arange(len(self.bands))])

    @cached_property
    def load_kinds(self) -> Places:
        """How many loads unlike each other (a part, or a part behind a line) each band has been shown, int[bands]."""
        at = self.of_kind["load"]
        used = self.weights[at] > 0.0
        seen = set(zip(self.band[at][used], self._part[used], self._line[used], strict=True))
        return np.array([sum(band == own for own, _, _ in seen) for band in range(len(self.bands))], dtype=int)

    @property
    def has_loads(self) -> npt.NDArray[np.bool_]:
        """Which bands have load steps, bool[bands]."""
        return np.asarray(self.load_kinds > 0)

    def turned(self, vector: Array) -> Array:
        """The same fit with d + dummy real in bands without load steps: nothing there tells the leaks' angles."""
        told = vector.copy()
        for band in np.flatnonzero(~self.has_loads):
            d, c, dummy = (complex(value[0]) for value in self.leaks(vector, np.array([band])))
            turn = np.exp(-1j * np.angle(d + dummy))
            start = self.band_slice(int(band)).start
            pairs = [(value.real, value.imag) for value in (d * turn, c / turn, dummy * turn)]
            told[start + 2 : start + 8] = np.ravel(pairs)
        return told

    def reversed_leaks(self, vector: Array) -> dict[int, float]:
        """What the forward detector saw of the whole wave in each band's reversed steps: mean |leak| per band."""
        forward, reflected = self.laws(vector)
        seen: dict[int, list[float]] = {}
        for step in self.of_kind["reversed"]:
            if self.weights[step] == 0.0:
                continue
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
        own = vectors[..., self.law_slice(side)]
        key = (side, own.shape, own.tobytes())
        if key not in self._known_squares:
            if len(self._known_squares) >= _KEPT_SQUARES:
                del self._known_squares[next(iter(self._known_squares))]
            self._known_squares[key] = self._squares_of_all(own, side)
        square, slope = self._known_squares[key]
        return square[..., at], slope[..., at]

    def _squares_of_all(self, own: Array, side: int) -> tuple[Array, Array]:
        counts, first = self._counts[side], self.first_laws[side]
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
            at = at[self.weights[at] > 0.0]
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
            sd[at + 2 : at + 6] = LEAK_SD
            sd[at + 6 : at + 8] = self.dummy_limit / 2.0
            mean[at + 8], sd[at + 8] = _OWN_LOSS
        for number, part in enumerate(self.parts):
            at = self._parts_at + 3 * number
            # A tolerance is a limit: its sd is that of an even spread. Inductance and capacitance lie in 0..limit.
            mean[at : at + 3] = 0.0, part.nh / 2.0, part.pf / 2.0
            sd[at : at + 3] = np.array([2.0 * part.pct / 100.0, part.nh, part.pf]) / np.sqrt(12.0) + 1e-9
            if part in self.freed:
                sd[at] = _FREED_SD
        for number, (_, _, loss) in enumerate(self.lines):
            at = self._lines_at + 2 * number
            mean[at : at + 2] = 0.0, _LINE_LOSS_DB / 2.0 if loss is None else loss
            sd[at : at + 2] = _LINE_DEG_SD, _LINE_LOSS_DB / 2.0
        return mean, sd
