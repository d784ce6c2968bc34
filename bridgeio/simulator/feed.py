"""The simulated antenna and feed line, as complex reflections.

One rule: impedances and waves only; SWR and rho are for those who read.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from .options import ANTENNAS, FIXED_LOADS, LINES

__all__ = ["Z0_OHM", "antenna_ohm", "reflection", "seen_through"]

Array = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complexfloating[Any, Any]]

Z0_OHM = 50.0
LIGHT_M_S = 299_792_458.0
NEPER_DB = 8.685889638065037


def antenna_ohm(name: str, frequency_hz: Array, resonance_hz: Array) -> Complex:
    """Impedance [ohm] of an antenna by name or number: a series circuit about resonance, or fixed."""
    if name not in ANTENNAS:
        fixed = FIXED_LOADS[name] if name in FIXED_LOADS else complex(name)
        return np.full(np.shape(frequency_hz), fixed)
    resistance, q = ANTENNAS[name]
    away = frequency_hz / resonance_hz - resonance_hz / frequency_hz
    return np.asarray(resistance * (1.0 + 1j * q * away))


def reflection(ohm: npt.ArrayLike) -> Complex:
    """Reflection of an impedance [ohm] in Z0 = 50 ohm."""
    z = np.asarray(ohm, dtype=complex)
    return np.asarray((z - Z0_OHM) / (z + Z0_OHM))


def seen_through(line: tuple[str, float] | None, frequency_hz: Array, gamma: Complex) -> Complex:
    """Reflection at the near end of a line (name, length [m]) whose far end shows `gamma`.

    There and back with alpha + j beta per metre; alpha from k1 sqrt(f) + k2 f (common practice).
    """
    if line is None:
        return gamma
    k1, k2, velocity = LINES[line[0]]
    mhz = frequency_hz / 1e6
    alpha = (k1 * np.sqrt(mhz) + k2 * mhz) / 100.0 / NEPER_DB
    beta = 2.0 * np.pi * frequency_hz / (velocity * LIGHT_M_S)
    return np.asarray(gamma * np.exp(-2.0 * (alpha + 1j * beta) * line[1]))
