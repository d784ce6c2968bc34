"""Whole codes by the million: what a contest's log is read with.

One rule: it gives what `Meter.read` gives, by look-up alone. In logarithms the ratio of two powers is a difference, so
rho and SWR are tables over that difference, fine enough that a step is below a part in ten thousand of rho.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from . import flags as flag
from .bridge import Band, Bridge
from .directivity import rho_estimate
from .look import BELOW_READING_SD, CLIPPED_PART, NO_CARRIER_SD, below_span, counting_sd
from .reflection import swr_from_rho

__all__ = ["Block", "BlockReader"]

Array = npt.NDArray[np.float32]
Codes = npt.NDArray[np.integer]

#: ln M from a thousandth of what any bridge resolves to beyond an open; past it rho stands still.
_LOWEST, _HIGHEST = -18.0, 2.0
_STEPS = 1 << 17
#: Pairs worked at once: their columns stay in the processor's cache.
_CHUNK = 1 << 14
_MOST_CODE = 65535
_NOTHING_W = 1e-30
_COLUMNS = ("forward_w", "reflected_w", "net_w", "rho", "swr")


@dataclass(frozen=True, slots=True)
class Block:
    """Columns of n readings, float32[n]; NaN where `Meter.read` has NaN. flags: uint32[n] as in `calibration.flags`."""

    forward_w: Array
    reflected_w: Array
    net_w: Array
    rho: Array
    swr: Array
    flags: npt.NDArray[np.uint32]


class BlockReader:
    """Reads blocks of whole codes at one band of a bridge, at the bench's temperature and zero."""

    def __init__(self, bridge: Bridge, band: Band) -> None:
        """Tabulate. ValueError for a full scale beyond 65535: such counts go through `Meter.read`."""
        if bridge.full_scale > _MOST_CODE:
            raise ValueError(f"full scale {bridge.full_scale}; blocks hold codes up to {_MOST_CODE}")
        edges = _Edges(bridge, band)
        forward_w, reflected_w = edges.watts
        steps = (_STEPS - 1) / (_HIGHEST - _LOWEST)
        places = [np.log(np.maximum(watts, _NOTHING_W)) * steps for watts in edges.watts]
        # No carrier divides by what no reflected power can reach, so that the ratio falls to the foot.
        self._forward_place = np.where(edges.silent, 1e9, places[0] + _LOWEST * steps).astype(np.float32)
        self._reflected_place = places[1].astype(np.float32)
        self._forward_w = np.where(edges.silent, 0.0, forward_w).astype(np.float32)
        self._forward_bits, self._reflected_bits = edges.forward_bits, edges.reflected_bits
        # Without a carrier nothing is said of the reflected power.
        self._kept_bits = np.where(edges.silent, ~np.uint32(flag.bit("below-reading")), ~np.uint32(0))
        self._forward_shown = np.where(edges.silent | np.isnan(forward_w), np.nan, 1.0).astype(np.float32)
        self._reflected_shown = np.where(edges.hidden | np.isnan(reflected_w), np.nan, 1.0).astype(np.float32)
        rho = rho_estimate(np.exp(np.linspace(_LOWEST, _HIGHEST, _STEPS)), band.directivity, band.forward_leak)
        rho[0] = 0.0  # the foot stands for all below it, negative powers included
        swr = swr_from_rho(rho)
        self._rho, self._part = rho.astype(np.float32), np.square(rho).astype(np.float32)
        self._swr = np.where(np.isfinite(swr), swr, np.nan).astype(np.float32)

    def read(self, forward: Codes, reflected: Codes, wire_flags: npt.NDArray[np.uint8] | None = None) -> Block:
        """Read n pairs of whole codes; wire_flags: flags of their frames."""
        n = len(forward)
        columns = {name: np.empty(n, dtype=np.float32) for name in _COLUMNS}
        bits = np.empty(n, dtype=np.uint32)
        for start in range(0, n, _CHUNK):
            rows = slice(start, start + _CHUNK)
            self._chunk(forward[rows], reflected[rows], {name: columns[name][rows] for name in _COLUMNS}, bits[rows])
        if wire_flags is not None and (wire_flags & 3).any():
            self._clip(columns, bits, wire_flags)
        return Block(**columns, flags=bits)

    def _chunk(self, forward: Codes, reflected: Codes, out: dict[str, Array], bits: npt.NDArray[np.uint32]) -> None:
        nf, nr = forward.astype(np.intp), reflected.astype(np.intp)
        place = self._reflected_place.take(nr)
        place -= self._forward_place.take(nf)
        np.clip(place, 0.0, _STEPS - 1.0, out=place)
        place += np.float32(0.5)
        at = place.astype(np.intp)
        shown = self._forward_shown.take(nf)
        shown *= self._reflected_shown.take(nr)
        self._forward_w.take(nf, out=out["forward_w"])
        np.multiply(self._part.take(at), out["forward_w"], out=out["reflected_w"])
        np.subtract(out["forward_w"], out["reflected_w"], out=out["net_w"])
        np.multiply(self._rho.take(at), shown, out=out["rho"])
        np.multiply(self._swr.take(at), shown, out=out["swr"])
        self._reflected_bits.take(nr, out=bits)
        bits &= self._kept_bits.take(nf)
        bits |= self._forward_bits.take(nf)

    @staticmethod
    def _clip(columns: dict[str, Array], bits: npt.NDArray[np.uint32], wire_flags: npt.NDArray[np.uint8]) -> None:
        bits[(wire_flags & 3) != 0] |= np.uint32(flag.bit("clipped"))
        for name in ("rho", "swr"):
            columns[name][(wire_flags & 2) != 0] = np.nan


class _Edges:
    """What each code is, arrays over codes [65536]."""

    def __init__(self, bridge: Bridge, band: Band) -> None:
        codes = np.arange(_MOST_CODE + 1.0)
        forward, reflected = bridge.forward_law, bridge.reflected_law
        gains = band.gain_forward, band.gain_reflected
        self.watts = [
            law.square(np.minimum(codes, bridge.full_scale)) / gain**2
            for law, gain in zip((forward, reflected), gains, strict=True)
        ]
        offset_variance = (
            band.covariance[2, 2],
            band.covariance[2 + len(forward.parameters)][2 + len(forward.parameters)],
        )
        sds = [
            float(np.sqrt(counting_sd(sd, 1) ** 2 + variance))
            for sd, variance in zip((bridge.forward_sd, bridge.reflected_sd), offset_variance, strict=True)
        ]
        self.silent = codes - forward.offset < NO_CARRIER_SD * sds[0]
        under = below_span(reflected, codes)
        below = (codes - reflected.offset < BELOW_READING_SD * sds[1]) | under
        clipped = codes >= CLIPPED_PART * bridge.full_scale
        outside = [~self.silent & ~forward.covers(codes), ~under & ~reflected.covers(codes)]
        for watts, away in zip(self.watts, outside, strict=True):
            watts[away] = np.nan
        self.hidden = below | clipped
        said = [("no-carrier", self.silent), ("clipped", clipped), ("uncalibrated", outside[0])]
        self.forward_bits = _bits(said)
        self.reflected_bits = _bits([("below-reading", below), ("clipped", clipped), ("uncalibrated", outside[1])])


def _bits(said: list[tuple[str, npt.NDArray[np.bool_]]]) -> npt.NDArray[np.uint32]:
    bits = np.zeros(len(said[0][1]), dtype=np.uint32)
    for name, where in said:
        bits |= np.where(where, np.uint32(flag.bit(name)), np.uint32(0))
    return bits
