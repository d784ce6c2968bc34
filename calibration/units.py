"""Units: decibels of powers and of waves, watts and volts, and frequencies as people write them.

One rule: 10 log (powers) and 20 log (waves) never share a name.
"""

from __future__ import annotations

import re

import numpy as np
import numpy.typing as npt

from .errors import UnitError

__all__ = [
    "BANDS",
    "band_name",
    "frequency_hz",
    "power_db",
    "power_from_volts_w",
    "power_ratio",
    "wave_db",
    "wave_ratio",
]

Array = npt.NDArray[np.float64]

#: Amateur bands, lower and upper edge [Hz]: the limits of the ADIF band enumeration (open specification; 160 m
#: from memory). They name a frequency; what may be used where is for national rules.
BANDS: dict[str, tuple[float, float]] = {
    "160m": (1.8e6, 2.0e6),
    "80m": (3.5e6, 4.0e6),
    "60m": (5.06e6, 5.45e6),
    "40m": (7.0e6, 7.3e6),
    "30m": (10.1e6, 10.15e6),
    "20m": (14.0e6, 14.35e6),
    "17m": (18.068e6, 18.168e6),
    "15m": (21.0e6, 21.45e6),
    "12m": (24.89e6, 24.99e6),
    "10m": (28.0e6, 29.7e6),
    "6m": (50.0e6, 54.0e6),
}

_FREQUENCY = re.compile(r"(?P<number>\d+(?:[._]\d+)*)\s*(?P<prefix>[kMG]?)(?:Hz)?")
_PREFIX = {"": 1.0, "k": 1e3, "M": 1e6, "G": 1e9}


def power_db(ratio: npt.ArrayLike) -> Array:
    """Decibels of a power ratio, 10 log10."""
    return np.asarray(10.0 * np.log10(np.asarray(ratio, dtype=float)))


def power_ratio(db: npt.ArrayLike) -> Array:
    """Power ratio of decibels, 10^(db/10)."""
    return np.asarray(10.0 ** (np.asarray(db, dtype=float) / 10.0))


def wave_db(ratio: npt.ArrayLike) -> Array:
    """Decibels of a ratio of waves, volts or amplitudes, 20 log10."""
    return np.asarray(20.0 * np.log10(np.asarray(ratio, dtype=float)))


def wave_ratio(db: npt.ArrayLike) -> Array:
    """Ratio of waves, volts or amplitudes of decibels, 10^(db/20)."""
    return np.asarray(10.0 ** (np.asarray(db, dtype=float) / 20.0))


def power_from_volts_w(volts: float, kind: str, ohm: float) -> float:
    """Power [W] of `volts` across `ohm` [ohm]; `kind` is "rms" or "peak" (sine: peak is sqrt 2 times rms)."""
    if kind not in ("rms", "peak"):
        raise UnitError(f"volts of kind {kind!r}; wanted 'rms' or 'peak'")
    return volts * volts / (ohm if kind == "rms" else 2.0 * ohm)


def band_name(hz: float) -> str | None:
    """Name of the amateur band that holds the frequency [Hz], or None."""
    for name, (low, high) in BANDS.items():
        if low <= hz <= high:
            return name
    return None


def frequency_hz(text: str) -> float:
    """Frequency [Hz] of "14.1M", "14100k", "14100000" or a band's name ("20m": the middle of the band).

    UnitError where it is none of these.
    """
    plain = text.strip()
    band = BANDS.get(plain.replace(" ", ""))
    if band is not None:
        return (band[0] + band[1]) / 2.0
    match = _FREQUENCY.fullmatch(plain)
    value = _number(match["number"]) * _PREFIX[match["prefix"]] if match else 0.0
    if not match or not 1e3 <= value <= 1e11:
        raise UnitError(_wanted(plain, value))
    return value


def _number(digits: str) -> float:
    return float(digits.replace("_", ""))


def _wanted(plain: str, value: float) -> str:
    hint = ""
    if 0.0 < value < 1e3:
        hint = f"; did you mean {plain}M or {plain}k?"
    elif re.fullmatch(r"\d+\s*m", plain):
        hint = f"; bands known: {', '.join(BANDS)}"
    return f"{plain!r} is no frequency; wanted like 14.1M, 14100k, hertz from 1000 up, or a band like 20m{hint}"
