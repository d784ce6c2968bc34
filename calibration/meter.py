"""The meter: counts of a bridge to readings. Arrays all the way; a live reading is an array of length one.

One rule: every sample is linearised, then powers are averaged; volts, decibels and SWR are never averaged. What the
counts cannot carry is flagged and blank.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from . import flags as flag
from .bridge import Bridge, band_index
from .directivity import NORMAL_DEVIATE, rho_estimate
from .law_table import LawTable
from .laws import Law
from .readings import Readings, Terms

__all__ = ["WIRE_FORWARD_CLIPPED", "WIRE_REFLECTED_CLIPPED", "Meter", "Readings", "counting_sd", "uncalibrated"]

Array = npt.NDArray[np.float64]
Bits = npt.NDArray[np.uint32]

#: Bits of a counts frame's flags on the wire.
WIRE_FORWARD_CLIPPED = 1
WIRE_REFLECTED_CLIPPED = 2
#: Forward within this many sd of dark is no carrier; reflected within that many is below reading.
NO_CARRIER_SD = 4.0
BELOW_READING_SD = 3.0
#: At 99 % of full scale a detector is taken as clipped, whatever the frame says.
CLIPPED_PART = 0.99


@dataclass(frozen=True, slots=True)
class _Channel:
    """One channel's law as table, and what its band adds; arrays over bands."""

    table: LawTable
    offset: float
    sd: float
    gain_squared: Array

    def counting_sd(self, samples: Array, offset_variance: Array) -> Array:
        """Sd [counts] of a mean of `samples` readings against the dark count."""
        return np.asarray(np.sqrt(counting_sd(self.sd, samples) ** 2 + offset_variance))


class Meter:
    """Turns counts into `Readings` by one bridge's calibration."""

    def __init__(self, bridge: Bridge) -> None:
        """Tabulate the laws of `bridge` over its converter's codes."""
        self.bridge = bridge
        bands = bridge.bands
        self._forward = self._channel(bridge.forward_law, bridge.forward_sd, [b.gain_forward for b in bands])
        self._reflected = self._channel(bridge.reflected_law, bridge.reflected_sd, [b.gain_reflected for b in bands])
        self._covariance = np.stack([b.covariance for b in bands])
        self._leakage = np.array([(b.directivity, b.forward_leak) for b in bands]).T
        self._limits = np.array([(b.directivity_limit, b.forward_leak_limit, b.angle_cosine) for b in bands]).T

    def read(
        self,
        forward: npt.ArrayLike,
        reflected: npt.ArrayLike,
        *,
        frequency_hz: npt.ArrayLike | None = None,
        samples: npt.ArrayLike = 1,
        wire_flags: npt.ArrayLike = 0,
        checked: bool = True,
        simulated: bool = False,
    ) -> Readings:
        """Read n pairs of counts.

        forward, reflected: counts or means of counts [n]. frequency_hz: one or n [Hz]; None or NaN is unknown, then
        the interval covers all bands. samples: how many readings each pair is a mean of. wire_flags: flags of the
        counts frames. checked: False for plain lines. Returns `Readings` of length n.
        """
        nf, nr = (np.atleast_1d(np.asarray(counts, dtype=float)) for counts in (forward, reflected))
        f = np.broadcast_to(np.asarray(np.nan if frequency_hz is None else frequency_hz, dtype=float), nf.shape)
        bits = _outside_bits(nf.shape, checked, simulated)
        if np.isnan(f).any() and len(self.bridge.bands) > 1:
            return self._read_unknown(nf, nr, f, samples, wire_flags, bits)
        band = np.where(np.isnan(f), 0, band_index(f, self.bridge.bands))
        return self._read(nf, nr, f, band[None, :], samples, wire_flags, bits)

    def _read_unknown(
        self, nf: Array, nr: Array, f: Array, samples: npt.ArrayLike, wire_flags: npt.ArrayLike, bits: Bits
    ) -> Readings:
        """As `_read`, over all bands where the frequency is unknown."""
        every = np.arange(len(self.bridge.bands))[:, None]
        unknown = np.isnan(f)
        band = np.where(unknown, every, band_index(np.where(unknown, 0.0, f), self.bridge.bands))
        bits = bits | np.where(unknown, np.uint32(flag.bit("band-unknown")), np.uint32(0))
        return self._read(nf, nr, f, band, samples, wire_flags, bits)

    def _read(
        self,
        nf: Array,
        nr: Array,
        f: Array,
        band: npt.NDArray[np.intp],
        samples: npt.ArrayLike,
        wire_flags: npt.ArrayLike,
        bits: Bits,
    ) -> Readings:
        known = band >= 0
        at = np.where(known, band, 0)
        forward_w = np.where(known, self._forward.table.square(nf) / self._forward.gain_squared[at], np.nan)
        reflected_w = np.where(known, self._reflected.table.square(nr) / self._reflected.gain_squared[at], np.nan)
        sd_f, sd_r = self._counting_sds(np.asarray(samples, dtype=float), at)
        marks = self._marks(nf, nr, known[0], sd_f, sd_r, np.asarray(wire_flags))
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = np.where(marks.silent, np.nan, reflected_w / forward_w)
        rho = rho_estimate(ratio, *self._leakage[:, at]).mean(axis=0)
        shown = np.where(marks.below | marks.reflected_clipped, np.nan, rho)
        bits = bits | marks.bits | _bits("over-unity", shown > 1.0)
        power = np.where(marks.silent, 0.0, forward_w.mean(axis=0))
        columns = {
            "forward_counts": nf,
            "reflected_counts": nr,
            "frequency_hz": f,
            "forward_w": np.where(known[0], power, np.nan),
            "rho": shown,
            "reflected_w": np.where(marks.silent, 0.0, power * rho**2),
        }
        terms = self._terms(nf, nr, at, forward_w, ratio, sd_f, sd_r, marks)
        return Readings(columns, bits, terms)

    def _counting_sds(self, samples: Array, at: npt.NDArray[np.intp]) -> tuple[Array, Array]:
        half = self._covariance.shape[1] // 2
        offsets = self._covariance[at][..., 0, 0], self._covariance[at][..., half, half]
        return self._forward.counting_sd(samples, offsets[0]), self._reflected.counting_sd(samples, offsets[1])

    def _marks(
        self,
        nf: Array,
        nr: Array,
        known: npt.NDArray[np.bool_],
        sd_f: Array,
        sd_r: Array,
        wire: npt.NDArray[np.int_],
    ) -> _Marks:
        ceiling = CLIPPED_PART * self.bridge.full_scale
        silent = known & (nf - self._forward.offset < NO_CARRIER_SD * sd_f[0])
        forward_clipped = (wire & WIRE_FORWARD_CLIPPED != 0) | (nf >= ceiling)
        reflected_clipped = (wire & WIRE_REFLECTED_CLIPPED != 0) | (nr >= ceiling)
        below = known & ~silent & (nr - self._reflected.offset < BELOW_READING_SD * sd_r[0])
        return _Marks(known, silent, below, known & forward_clipped, known & reflected_clipped)

    def _terms(
        self,
        nf: Array,
        nr: Array,
        at: npt.NDArray[np.intp],
        forward_w: Array,
        ratio: Array,
        sd_f: Array,
        sd_r: Array,
        marks: _Marks,
    ) -> Terms:
        slope_f = self._forward.table.slope(nf) / self._forward.gain_squared[at]
        slope_r = self._reflected.table.slope(nr) / self._reflected.gain_squared[at]
        forward_limit, ratio_limit = self._fixed_limits(nf, nr, at, forward_w, ratio)
        with np.errstate(divide="ignore", invalid="ignore"):
            noise_f = np.abs(slope_f * sd_f / forward_w)
            noise_m = np.hypot(slope_r * sd_r / forward_w, ratio * noise_f)
        bound = np.maximum(forward_w, 0.0) + forward_limit + NORMAL_DEVIATE * slope_f * sd_f
        d, c, cosine = self._limits[:, at]
        return Terms(
            forward_low_w=np.where(marks.silent, 0.0, forward_w - forward_limit),
            forward_high_w=np.where(
                marks.silent, bound, np.where(marks.forward_clipped, np.inf, forward_w + forward_limit)
            ),
            forward_noise=np.where(marks.silent, 0.0, noise_f),
            ratio_low=np.where((marks.below | marks.forward_clipped) & ~np.isnan(ratio), 0.0, ratio - ratio_limit),
            ratio_high=np.where(marks.reflected_clipped & ~np.isnan(ratio), np.inf, ratio + ratio_limit),
            ratio_noise=noise_m,
            directivity=d,
            leak=np.where(marks.silent, 0.0, c),
            angle_cosine=cosine,
        )

    def _fixed_limits(
        self, nf: Array, nr: Array, at: npt.NDArray[np.intp], forward_w: Array, ratio: Array
    ) -> tuple[Array, Array]:
        """95 % limits of what is fixed: of forward power [W] (law, gain, reference) and of M (laws, balance)."""
        forward = self._forward.table.sensitivity(nf) / self._forward.gain_squared[at][..., None]
        reflected = self._reflected.table.sensitivity(nr) / self._reflected.gain_squared[at][..., None]
        with np.errstate(divide="ignore", invalid="ignore"):
            # d W/d ln gain = -2 W; d M = (d R - M d F)/F.
            by_forward = np.concatenate([forward, -2.0 * forward_w[..., None]], axis=-1)
            reflected_w = ratio * forward_w
            by_reflected = np.concatenate([reflected, -2.0 * reflected_w[..., None]], axis=-1)
            by_ratio = np.concatenate([-ratio[..., None] * by_forward, by_reflected], axis=-1) / forward_w[..., None]
        covariance = self._covariance[at]
        half = by_forward.shape[-1]
        forward_sd = _sd(by_forward, covariance[..., :half, :half])
        reference = np.abs(forward_w) * self.bridge.reference_pct / 100.0
        return np.hypot(NORMAL_DEVIATE * forward_sd, reference), NORMAL_DEVIATE * _sd(by_ratio, covariance)

    def _channel(self, law: Law, sd: float, gains: list[float]) -> _Channel:
        return _Channel(LawTable(law, self.bridge.full_scale), law.offset, sd, np.square(gains))


@dataclass(frozen=True, slots=True)
class _Marks:
    """What a pair of counts is, bool[n]."""

    known: npt.NDArray[np.bool_]
    silent: npt.NDArray[np.bool_]
    below: npt.NDArray[np.bool_]
    forward_clipped: npt.NDArray[np.bool_]
    reflected_clipped: npt.NDArray[np.bool_]

    @property
    def bits(self) -> Bits:
        """The same as flags."""
        return (
            _bits("uncalibrated", ~self.known)
            | _bits("no-carrier", self.silent)
            | _bits("below-reading", self.below)
            | _bits("clipped", self.forward_clipped | self.reflected_clipped)
        )


def counting_sd(sd: float, samples: npt.ArrayLike) -> Array:
    """Sd [counts] of a mean of `samples` readings with scatter `sd`, the converter's steps included.

    Averaging dithers the steps away only where the noise is some part of a count: what remains of them is at
    most exp(-2 pi^2 sd^2)/pi (B. Widrow, I. Kollar, Quantization Noise, 2008; from memory).
    """
    steps = np.exp(-2.0 * np.pi**2 * sd * sd) / np.pi
    return np.asarray(np.sqrt(sd * sd / np.asarray(samples, dtype=float) + steps * steps))


def uncalibrated(
    forward: npt.ArrayLike, reflected: npt.ArrayLike, *, checked: bool = True, simulated: bool = False
) -> Readings:
    """Readings of counts alone [n], where no calibration may be used: flag `uncalibrated`, all else NaN."""
    nf, nr = (np.atleast_1d(np.asarray(counts, dtype=float)) for counts in (forward, reflected))
    blank = np.full(nf.shape, np.nan)
    columns = {"forward_counts": nf, "reflected_counts": nr, "frequency_hz": blank}
    columns |= {"forward_w": blank, "rho": blank, "reflected_w": blank}
    bits = _outside_bits(nf.shape, checked, simulated) | np.uint32(flag.bit("uncalibrated"))
    return Readings(columns, bits, Terms(*([blank[None, :]] * 9)))


def _outside_bits(shape: tuple[int, ...], checked: bool, simulated: bool) -> Bits:
    bits = (0 if checked else flag.bit("unchecked")) | (flag.bit("simulated") if simulated else 0)
    return np.full(shape, bits, dtype=np.uint32)


def _bits(name: str, where: npt.NDArray[np.bool_]) -> Bits:
    return np.where(where, np.uint32(flag.bit(name)), np.uint32(0))


def _sd(derivative: Array, covariance: Array) -> Array:
    return np.asarray(np.sqrt(np.einsum("...i,...ij,...j->...", derivative, covariance, derivative)))
