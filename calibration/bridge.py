"""One bridge as the meter needs it: laws, gains, leakage and their limits, per band.

One rule: everything here was fitted from bench steps or typed by hand; nothing changes while reading.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
import numpy.typing as npt

from .laws import Law
from .warmth import DiodeKind

__all__ = ["BAND_REACH", "Band", "Bridge", "band_at"]

Array = npt.NDArray[np.float64]

#: A reading or step within 10 % of a band's frequency belongs to it.
BAND_REACH = 0.10


@dataclass(frozen=True, slots=True)
class Band:
    """One calibrated frequency [Hz]: power at a port [W] is the law's square over the gain squared.

    covariance: of (ln forward gain, ln reflected gain, forward law parameters, reflected law parameters), without
    the reference's own accuracy. Limits are 95 %. angle_cosine: cos(arg d + arg c), the least favourable within its
    95 % limits, or -1 where no loads behind line have identified it. interpolated: made from its two neighbours.
    directivity_least: the truth is known not to leak less; 0 for a bridge that was fitted.
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
    interpolated: bool = False
    directivity_least: float = 0.0


@dataclass(frozen=True, slots=True)
class Bridge:
    """A calibrated bridge. Counts run to `full_scale`; sd are of single readings [counts]; limits are 95 %.

    bands rise in frequency. diode: temperature behaviour, None where nobody has named the diode. temperature_c and
    temperature_span_c: mean of the bench and its span [degrees Celsius].
    """

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
    diode: DiodeKind | None = None
    temperature_c: float = 25.0
    temperature_span_c: float = 0.0


def band_at(frequency_hz: float, bands: tuple[Band, ...]) -> Band | None:
    """The band for a frequency [Hz]: the nearest within 10 %; between two, one made of both; else None."""
    away = [abs(frequency_hz / band.frequency_hz - 1.0) for band in bands]
    nearest = int(np.argmin(away))
    if away[nearest] <= BAND_REACH:
        return bands[nearest]
    below = [band for band in bands if band.frequency_hz < frequency_hz]
    above = [band for band in bands if band.frequency_hz > frequency_hz]
    if not below or not above:
        return None
    return _between(max(below, key=_hertz), min(above, key=_hertz), frequency_hz)


def _hertz(band: Band) -> float:
    return band.frequency_hz


def _between(low: Band, high: Band, frequency_hz: float) -> Band:
    """Log gain linear in log frequency; leaks and limits the larger; what the neighbours differ by is uncertainty."""
    part = float(np.log(frequency_hz / low.frequency_hz) / np.log(high.frequency_hz / low.frequency_hz))
    covariance = (1.0 - part) * low.covariance + part * high.covariance
    gains = {}
    for name, place in (("gain_forward", 0), ("gain_reflected", 1)):
        first, second = np.log(getattr(low, name)), np.log(getattr(high, name))
        gains[name] = float(np.exp((1.0 - part) * first + part * second))
        covariance[place, place] += part * (1.0 - part) * (second - first) ** 2
    larger = {
        name: max(getattr(low, name), getattr(high, name))
        for name in ("directivity", "directivity_limit", "forward_leak", "forward_leak_limit")
    }
    worst = min(low.angle_cosine, high.angle_cosine)
    least = min(low.directivity_least, high.directivity_least)
    return replace(
        low,
        frequency_hz=frequency_hz,
        angle_cosine=worst,
        covariance=covariance,
        interpolated=True,
        directivity_least=least,
        **gains,
        **larger,
    )
