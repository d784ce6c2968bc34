"""One bridge as the meter needs it: laws, gains, leakage and their limits, per band.

One rule: everything here was fitted from bench steps or typed by hand; nothing changes while reading.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from .laws import Law

__all__ = ["BAND_REACH", "Band", "Bridge", "band_index"]

Array = npt.NDArray[np.float64]

#: A reading or step within 10 % of a band's frequency belongs to it.
BAND_REACH = 0.10


@dataclass(frozen=True, slots=True)
class Band:
    """One calibrated frequency [Hz]: power at a port [W] is the law's square over the gain squared.

    covariance: of (forward law parameters, ln forward gain, reflected law parameters, ln reflected gain), without
    the reference's own accuracy. Limits are 95 %. angle_cosine: cos(arg d + arg c), the least favourable within its
    95 % limits, or -1 where no loads behind line have identified it.
    """

    frequency_hz: float
    gain_forward: float
    gain_reflected: float
    directivity: float
    directivity_limit: float
    forward_leak: float
    forward_leak_limit: float
    angle_cosine: float = -1.0
    covariance: Array = field(default_factory=lambda: np.zeros((8, 8)))


@dataclass(frozen=True, slots=True)
class Bridge:
    """A calibrated bridge. Counts run to `full_scale`; sd are of single readings [counts]; limits are 95 %."""

    name: str
    full_scale: int
    forward_law: Law
    reflected_law: Law
    bands: tuple[Band, ...]
    z0_ohm: float = 50.0
    forward_sd: float = 1.0
    reflected_sd: float = 1.0
    reference_pct: float = 5.0
    device_id: int | None = None


def band_index(frequency_hz: npt.ArrayLike, bands: tuple[Band, ...]) -> npt.NDArray[np.intp]:
    """Index of the nearest band within 10 % of each frequency [Hz], any shape; -1 where there is none (or NaN)."""
    f = np.asarray(frequency_hz, dtype=float)
    centres = np.array([band.frequency_hz for band in bands])
    away = np.abs(f[..., None] / centres - 1.0)
    nearest = np.argmin(np.where(np.isnan(away), np.inf, away), axis=-1)
    reached = np.take_along_axis(away, nearest[..., None], axis=-1)[..., 0] <= BAND_REACH
    return np.where(reached, nearest, -1)
