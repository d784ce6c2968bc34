"""One look at pairs of counts: linearised powers, what the edges make of them, and the terms of their intervals.

One rule: a look is at one temperature and with one zero; what is not known of either is told by several looks, whose
intervals the meter joins.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from . import flags as flag
from .bridge import Band, Bridge
from .directivity import NORMAL_DEVIATE
from .law_table import LawTable
from .laws import Law
from .readings import Terms

__all__ = ["BandTerms", "Look", "Taken", "below_span", "counting_sd"]

Array = npt.NDArray[np.float64]
Places = npt.NDArray[np.intp]
Bools = npt.NDArray[np.bool_]
Bits = npt.NDArray[np.uint32]

#: Bits of a counts frame's flags on the wire.
_WIRE_FORWARD_CLIPPED, _WIRE_REFLECTED_CLIPPED = 1, 2
#: Forward within this many sd of dark is no carrier; reflected within that many is below reading.
NO_CARRIER_SD, BELOW_READING_SD = 4.0, 3.0
#: At 99 % of full scale a detector is taken as clipped, whatever the frame says.
CLIPPED_PART = 0.99
_LIMITS = ("directivity_limit", "forward_leak_limit", "angle_cosine", "directivity_least")


@dataclass(frozen=True, slots=True)
class BandTerms:
    """What bands say, as arrays over them [B]: gains squared, (d, c) best, limits by _LIMITS, covariance."""

    gain_forward_squared: Array
    gain_reflected_squared: Array
    estimates: Array
    limits: Array
    covariance: Array

    @classmethod
    def of(cls, bands: tuple[Band, ...]) -> BandTerms:
        """The terms of `bands`."""
        return cls(
            np.square([band.gain_forward for band in bands]),
            np.square([band.gain_reflected for band in bands]),
            np.array([(band.directivity, band.forward_leak) for band in bands]).T,
            np.array([[getattr(band, name) for name in _LIMITS] for band in bands]).T,
            np.stack([band.covariance for band in bands]),
        )


@dataclass(frozen=True, slots=True)
class Taken:
    """What a look saw: ratio M [k, n]; power [W], flags and edges [n]; terms of the intervals."""

    ratio: Array
    power_w: Array
    bits: Bits
    blank_rho: Bools
    beyond_open: Bools
    terms: Terms


class Look:
    """Laws of both sides as tables, at one temperature and with one zero."""

    def __init__(
        self, bridge: Bridge, *, gains: tuple[float, float] = (1.0, 1.0), zero: tuple[float, float] | None = None
    ) -> None:
        """Tabulate the laws of `bridge`; gains: factors on its gains; zero: dark counts in place of the laws'."""
        self._bridge = bridge
        laws: list[Law] = [bridge.forward_law, bridge.reflected_law]
        if zero is not None:
            laws = [
                law.with_parameters(np.concatenate([[dark], law.parameters[1:]]))
                for law, dark in zip(laws, zero, strict=True)
            ]
        self._laws = laws
        self._tables = [LawTable(law, bridge.full_scale) for law in laws]
        self._gain_factors = np.square(gains)
        sizes = [len(law.parameters) for law in laws]
        # Covariance runs over (ln gain forward, ln gain reflected, forward law, reflected law).
        self._forward_places = [0, *range(2, 2 + sizes[0])]
        self._reflected_places = [1, *range(2 + sizes[0], 2 + sum(sizes))]

    def mean_counts(self, forward: Array, reflected: Array) -> tuple[float, float]:
        """The counts whose powers are the mean powers of n pairs."""
        sides = zip(self._laws, self._tables, (forward, reflected), strict=True)
        first, second = (float(law.counts(table.square(counts).mean())) for law, table, counts in sides)
        return first, second

    def take(
        self, nf: Array, nr: Array, bands: BandTerms, place: Places, samples: Array, wire: npt.NDArray[np.int_]
    ) -> Taken:
        """Look at counts [n], each in the bands of `place` [k, n] (-1: none), means of `samples` readings."""
        at = np.maximum(place, 0)
        gain_f = bands.gain_forward_squared[at] * self._gain_factors[0]
        gain_r = bands.gain_reflected_squared[at] * self._gain_factors[1]
        sds = self._counting_sds(bands.covariance[at], samples)
        edges = self._edges(nf, nr, place[0] >= 0, sds, wire)
        forward, reflected = self._tables[0].look_up(nf), self._tables[1].look_up(nr)
        forward_w = np.where(edges.known, forward.square / gain_f, np.nan)
        reflected_w = np.where(edges.known, reflected.square / gain_r, np.nan)
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = np.where(edges.silent, np.nan, reflected_w / forward_w)
        power = np.where(edges.silent, 0.0, forward_w.mean(axis=0))
        noises = forward.slope / gain_f * sds[0], reflected.slope / gain_r * sds[1]
        sensitivities = forward.sensitivity / gain_f[..., None], reflected.sensitivity / gain_r[..., None]
        fixed = self._fixed_limits(nf, nr, sensitivities, bands.covariance[at], forward_w, ratio)
        terms = self._terms(edges, bands.limits[:, at], forward_w, ratio, noises, fixed)
        return Taken(ratio, power, edges.bits, edges.below | edges.reflected_clipped, _beyond_open(terms), terms)

    def _counting_sds(self, covariance: Array, samples: Array) -> tuple[Array, Array]:
        """Sd [counts] of each side's mean against its dark count, [k, n]."""
        places = self._forward_places[1], self._reflected_places[1]
        own = self._bridge.forward_sd, self._bridge.reflected_sd
        variances = [
            counting_sd(sd, samples) ** 2 + covariance[..., at, at] for sd, at in zip(own, places, strict=True)
        ]
        return np.sqrt(variances[0]), np.sqrt(variances[1])

    def _edges(
        self, nf: Array, nr: Array, known: Bools, sds: tuple[Array, Array], wire: npt.NDArray[np.int_]
    ) -> _Edges:
        ceiling = CLIPPED_PART * self._bridge.full_scale
        forward, reflected = self._laws
        silent = known & (nf - forward.offset < NO_CARRIER_SD * sds[0][0])
        near_dark = nr - reflected.offset < BELOW_READING_SD * sds[1][0]
        under = below_span(reflected, nr)
        known = known & (silent | (forward.covers(nf) & (reflected.covers(nr) | under)))
        forward_clipped = known & ((wire & _WIRE_FORWARD_CLIPPED != 0) | (nf >= ceiling))
        reflected_clipped = known & ((wire & _WIRE_REFLECTED_CLIPPED != 0) | (nr >= ceiling))
        return _Edges(known, silent, known & ~silent & (near_dark | under), forward_clipped, reflected_clipped)

    def _terms(
        self,
        edges: _Edges,
        limits: Array,
        forward_w: Array,
        ratio: Array,
        noises: tuple[Array, Array],
        fixed: tuple[Array, Array],
    ) -> Terms:
        forward_limit, ratio_limit = fixed
        with np.errstate(divide="ignore", invalid="ignore"):
            noise_f = np.abs(noises[0] / forward_w)
            noise_m = np.hypot(noises[1] / forward_w, ratio * noise_f)
        bound = np.maximum(forward_w, 0.0) + forward_limit + NORMAL_DEVIATE * noises[0]
        highest = np.where(edges.forward_clipped, np.inf, forward_w + forward_limit)
        d, c, cosine, least = limits
        shown = ~np.isnan(ratio)
        return Terms(
            forward_low_w=np.where(edges.silent, 0.0, forward_w - forward_limit),
            forward_high_w=np.where(edges.silent, bound, highest),
            forward_noise=np.where(edges.silent, 0.0, noise_f),
            ratio_low=np.where((edges.below | edges.forward_clipped) & shown, 0.0, ratio - ratio_limit),
            ratio_high=np.where(edges.reflected_clipped & shown, np.inf, ratio + ratio_limit),
            ratio_noise=noise_m,
            directivity=d,
            leak=np.where(edges.silent, 0.0, c),
            angle_cosine=cosine,
            directivity_least=least,
        )

    def _fixed_limits(
        self, nf: Array, nr: Array, by_law: tuple[Array, Array], covariance: Array, forward_w: Array, ratio: Array
    ) -> tuple[Array, Array]:
        """95 % limits of what is fixed: of forward power [W] (law, gain, reference) and of M (laws, balance).

        by_law: powers' derivatives by the laws' parameters [k, n, p].
        """
        forward, reflected = by_law
        with np.errstate(divide="ignore", invalid="ignore"):
            # d W/d ln gain = -2 W; d M = (d R - M d F)/F.
            by_forward = np.concatenate([-2.0 * forward_w[..., None], forward], axis=-1)
            by_reflected = np.concatenate([-2.0 * (ratio * forward_w)[..., None], reflected], axis=-1)
            by_ratio = np.zeros(covariance.shape[:-1])
            by_ratio[..., self._forward_places] = -ratio[..., None] * by_forward / forward_w[..., None]
            by_ratio[..., self._reflected_places] = by_reflected / forward_w[..., None]
        own = covariance[..., self._forward_places, :][..., self._forward_places]
        reference = np.abs(forward_w) * self._bridge.reference_pct / 100.0
        strays = [law.misfit(counts) for law, counts in zip(self._laws, (nf, nr), strict=True)]
        forward_sd = np.hypot(_sd(by_forward, own), strays[0] * forward_w)
        ratio_sd = np.hypot(_sd(by_ratio, covariance), np.hypot(*strays) * ratio)
        return np.hypot(NORMAL_DEVIATE * forward_sd, reference), NORMAL_DEVIATE * ratio_sd


@dataclass(frozen=True, slots=True)
class _Edges:
    """What pairs of counts are, bool[n] each."""

    known: Bools
    silent: Bools
    below: Bools
    forward_clipped: Bools
    reflected_clipped: Bools

    @property
    def bits(self) -> Bits:
        """The same as flags."""
        said = {
            "uncalibrated": ~self.known,
            "no-carrier": self.silent,
            "below-reading": self.below,
            "clipped": self.forward_clipped | self.reflected_clipped,
        }
        bits = np.zeros(self.known.shape, dtype=np.uint32)
        for name, where in said.items():
            bits |= np.where(where, np.uint32(flag.bit(name)), np.uint32(0))
        return bits


def counting_sd(sd: float, samples: npt.ArrayLike) -> Array:
    """Sd [counts] of a mean of `samples` readings with scatter `sd`, the converter's steps included.

    Averaging dithers the steps away only where the noise is some part of a count: what remains of them is at
    most exp(-2 pi^2 sd^2)/pi (B. Widrow, I. Kollar, Quantization Noise, 2008; from memory).
    """
    steps = np.exp(-2.0 * np.pi**2 * sd * sd) / np.pi
    return np.asarray(np.sqrt(sd * sd / np.asarray(samples, dtype=float) + steps * steps))


def _beyond_open(terms: Terms) -> Bools:
    """Where even the least M is above the largest that an open load can show, ((1 + d)/(1 - c))^2."""
    with np.errstate(invalid="ignore", divide="ignore"):
        largest = np.where(terms.leak < 1.0, ((1.0 + terms.directivity) / (1.0 - terms.leak)) ** 2, np.inf)
        least = terms.ratio_low - NORMAL_DEVIATE * terms.ratio_noise
        return np.asarray((least > largest).all(axis=0))


def below_span(law: Law, counts: Array) -> Bools:
    """Where counts lie below the span of a table law: reflected is then bounded by the span's lower end."""
    return ~law.covers(counts) & law.covers(np.maximum(counts, law.lowest))


def _sd(derivative: Array, covariance: Array) -> Array:
    return np.asarray(np.sqrt(np.maximum(np.einsum("...i,...ij,...j->...", derivative, covariance, derivative), 0.0)))
