"""The meter: counts of a bridge to readings. Arrays all the way; a live reading is an array of length one.

One rule: every sample is linearised, then powers are averaged; volts, decibels and SWR are never averaged. What the
counts cannot carry is flagged and blank.
"""

from __future__ import annotations

from dataclasses import fields, replace
from functools import lru_cache

import numpy as np
import numpy.typing as npt

from . import flags as flag
from .bridge import Band, Bridge, band_at
from .directivity import rho_estimate
from .look import BandTerms, Look, counting_sd
from .readings import Readings, Terms
from .warmth import DIODES, warmed

__all__ = ["Meter", "Readings", "Zero", "counting_sd", "uncalibrated"]

Array = npt.NDArray[np.float64]
Bits = npt.NDArray[np.uint32]
Zero = tuple[float, float]

#: Nearer than this to the bench's temperature [K] a reading is taken at it.
_SAME_TEMPERATURE_K = 0.75
#: A bench that spans more [K] than this has no one temperature to fall back on.
_BENCH_SPAN_K = 10.0


class Meter:
    """Turns counts into `Readings` by one bridge's calibration."""

    def __init__(self, bridge: Bridge) -> None:
        """Tabulate the laws of `bridge` over its converter's codes."""
        self.bridge = bridge
        self._look = Look(bridge)
        self._calibrated = BandTerms.of(bridge.bands)
        # A bounded memory of laws at other temperatures and zeros: both wander slowly while a bridge is in use.
        self._look_at = lru_cache(maxsize=32)(self._make_look)

    def read(
        self,
        forward: npt.ArrayLike,
        reflected: npt.ArrayLike,
        *,
        frequency_hz: npt.ArrayLike | None = None,
        samples: npt.ArrayLike = 1,
        wire_flags: npt.ArrayLike = 0,
        temperature_c: float | None = None,
        zero: Zero | None = None,
        moved_zero: Zero | None = None,
        after: Readings | None = None,
        hard: bool = False,
        checked: bool = True,
        simulated: bool = False,
    ) -> Readings:
        """Read n pairs of counts.

        forward, reflected: counts or means of counts [n]. frequency_hz: one or n [Hz]; None or NaN is unknown, then
        the interval covers all bands. samples: how many readings each pair is a mean of. wire_flags: flags of the
        counts frames. temperature_c: of the box; None is the bench's. zero: dark counts to use in place of the bench's;
        moved_zero: dark counts seen now, which the interval then allows for. after: the readings just before these.
        hard: bounds in place of 95 % intervals. checked: False for plain lines. Returns `Readings` of length n.
        """
        nf, nr = (np.atleast_1d(np.asarray(counts, dtype=float)) for counts in (forward, reflected))
        f = np.broadcast_to(np.asarray(np.nan if frequency_hz is None else frequency_hz, dtype=float), nf.shape)
        bands, place, bits = self._bands(f, np.ndim(np.asarray(frequency_hz)) == 0)
        band_terms = self._calibrated if len(bands) == len(self.bridge.bands) else BandTerms.of(bands)
        n = np.asarray(samples, dtype=float)
        wire = np.asarray(wire_flags)
        looks = [look.take(nf, nr, band_terms, place, n, wire) for look in self._looks(temperature_c, zero, moved_zero)]
        first = looks[0]
        bits = bits | first.bits | _outside_bits(nf.shape, checked, simulated)
        if temperature_c is None and self.bridge.temperature_span_c > _BENCH_SPAN_K:
            bits = bits | np.uint32(flag.bit("no-temperature"))
        if moved_zero is not None:
            bits = bits | np.uint32(flag.bit("dark-moved"))
        beyond = first.beyond_open
        before = np.concatenate([[after is not None and bool(after.beyond_open[-1])], beyond[:-1]])
        bits = bits | _bits("swapped", beyond & before)
        leaks = band_terms.estimates[:, place]
        rho = rho_estimate(first.ratio, *leaks).mean(axis=0)
        shown = np.where(first.blank_rho, np.nan, rho)
        power = first.power_w
        columns = {
            "forward_counts": nf,
            "reflected_counts": nr,
            "frequency_hz": f,
            "forward_w": power,
            "reflected_w": np.where(power == 0.0, 0.0, power * rho**2),
            "rho": shown,
        }
        terms = Terms.joined([look.terms for look in looks])
        return Readings(columns, bits | _bits("over-unity", shown > 1.0), terms, beyond_open=beyond, hard=hard)

    def mean_counts(
        self, forward: Array, reflected: Array, *, temperature_c: float | None = None, zero: Zero | None = None
    ) -> tuple[float, float]:
        """The counts whose powers are the mean powers of n pairs: each sample is linearised, then averaged."""
        return self._at_temperature(temperature_c, zero)[0].mean_counts(forward, reflected)

    def _bands(self, f: Array, one: bool) -> tuple[tuple[Band, ...], npt.NDArray[np.intp], Bits]:
        """Bands in use, the place in them of each reading [k, n] (-1: none), and what that says as flags."""
        calibrated = self.bridge.bands
        found: list[Band] = list(calibrated)
        place = np.full(f.shape, -1, dtype=np.intp)
        for hz in f[:1] if one else np.unique(f[~np.isnan(f)]):
            band = None if np.isnan(hz) else band_at(float(hz), calibrated)
            if band is not None:
                if band.interpolated:
                    found.append(band)
                place[f == hz] = len(found) - 1 if band.interpolated else calibrated.index(band)
        unknown = np.isnan(f)
        bits = _bits("interpolated", place >= len(calibrated))
        if not unknown.any():
            return tuple(found), place[None, :], bits
        if len(calibrated) == 1:
            return tuple(found), np.where(unknown, 0, place)[None, :], bits
        hull = np.where(unknown, np.arange(len(calibrated))[:, None], place)
        return tuple(found), hull, bits | _bits("band-unknown", unknown)

    def _looks(self, temperature_c: float | None, zero: Zero | None, moved_zero: Zero | None) -> list[Look]:
        """The look that gives the values, and those whose intervals are joined to its own."""
        looks = self._at_temperature(temperature_c, zero)
        return looks if moved_zero is None else looks + self._at_temperature(temperature_c, moved_zero)

    def _at_temperature(self, temperature_c: float | None, zero: Zero | None) -> list[Look]:
        bench_c = self.bridge.temperature_c
        if temperature_c is None or abs(temperature_c - bench_c) < _SAME_TEMPERATURE_K:
            return [self._look if zero is None else self._look_at(None, None, zero)]
        rounded = round(2.0 * temperature_c) / 2.0
        if self.bridge.diode is not None:
            return [self._look_at("named", rounded, zero)]
        # Nobody has said which diode: values as at the bench, intervals over all it might be.
        return [self._look_at(kind, rounded, zero) for kind in (None, *DIODES)]

    def _make_look(self, kind: str | None, temperature_c: float | None, zero: Zero | None) -> Look:
        bridge = self.bridge
        if kind is not None and temperature_c is not None:
            diode = bridge.diode if kind == "named" else DIODES[kind]
            assert diode is not None
            (forward, gain_f), (reflected, gain_r) = (
                warmed(law, diode, bridge.temperature_c, temperature_c)
                for law in (bridge.forward_law, bridge.reflected_law)
            )
            bridge = replace(bridge, forward_law=forward, reflected_law=reflected)
            return Look(bridge, gains=(gain_f, gain_r), zero=zero)
        return Look(bridge, zero=zero)


def uncalibrated(
    forward: npt.ArrayLike, reflected: npt.ArrayLike, *, checked: bool = True, simulated: bool = False
) -> Readings:
    """Readings of counts alone [n], where no calibration may be used: flag `uncalibrated`, all else NaN."""
    nf, nr = (np.atleast_1d(np.asarray(counts, dtype=float)) for counts in (forward, reflected))
    blank = np.full(nf.shape, np.nan)
    columns = {"forward_counts": nf, "reflected_counts": nr, "frequency_hz": blank}
    columns |= {"forward_w": blank, "rho": blank, "reflected_w": blank}
    bits = _outside_bits(nf.shape, checked, simulated) | np.uint32(flag.bit("uncalibrated"))
    terms = Terms(*([blank[None, :]] * len(fields(Terms))))
    return Readings(columns, bits, terms, beyond_open=np.zeros(nf.shape, dtype=bool))


def _outside_bits(shape: tuple[int, ...], checked: bool, simulated: bool) -> Bits:
    bits = (0 if checked else flag.bit("unchecked")) | (flag.bit("simulated") if simulated else 0)
    return np.full(shape, bits, dtype=np.uint32)


def _bits(name: str, where: npt.NDArray[np.bool_]) -> Bits:
    return np.where(where, np.uint32(flag.bit(name)), np.uint32(0))
