"""Reflection arithmetic: rho, SWR, return loss and powers, in forms that keep their digits at both ends.

One rule: nothing is clamped. What cannot be is NaN (unknown) or infinity (an open), for the caller to name.
Sources: D. M. Pozar, Microwave Engineering, ch. 2 (from memory).
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

__all__ = [
    "line_voltage_v",
    "mismatch_loss_db",
    "reflection_of",
    "return_loss_db",
    "rho_from_return_loss",
    "rho_from_swr",
    "swr_from_powers",
    "swr_from_rho",
]

Array = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]


def swr_from_rho(rho: npt.ArrayLike) -> Array:
    """SWR of reflection magnitude `rho`: (1 + rho)/(1 - rho). Infinity at 1, NaN above 1 or below 0."""
    r = np.asarray(rho, dtype=float)
    with np.errstate(divide="ignore", invalid="ignore"):
        swr = (1.0 + r) / (1.0 - r)
    return np.where((r >= 0.0) & (r <= 1.0), swr, np.nan)


def rho_from_swr(swr: npt.ArrayLike) -> Array:
    """Reflection magnitude of an SWR: (S - 1)/(S + 1). 1 at infinity, NaN below 1."""
    s = np.asarray(swr, dtype=float)
    with np.errstate(invalid="ignore"):
        rho = np.where(np.isinf(s), 1.0, (s - 1.0) / (s + 1.0))
    return np.where(s >= 1.0, rho, np.nan)


def swr_from_powers(forward_w: npt.ArrayLike, reflected_w: npt.ArrayLike) -> Array:
    """SWR of forward and reflected power [W], (sqrt F + sqrt R)^2/(F - R).

    This form keeps its digits where the powers are nearly equal; (1 + sqrt m)/(1 - sqrt m) loses them.
    Infinity where they are equal, NaN where more comes back than went out, forward is not positive or
    reflected is negative.
    """
    f = np.asarray(forward_w, dtype=float)
    r = np.asarray(reflected_w, dtype=float)
    legal = (f > 0.0) & (r >= 0.0) & (r <= f)
    with np.errstate(divide="ignore", invalid="ignore"):
        swr = (np.sqrt(f) + np.sqrt(r)) ** 2 / (f - r)
    return np.where(legal, swr, np.nan)


def return_loss_db(rho: npt.ArrayLike) -> Array:
    """Return loss [dB, positive], -20 log10 rho. NaN where rho is not positive: state the floor."""
    r = np.asarray(rho, dtype=float)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(r > 0.0, -20.0 * np.log10(r), np.nan)


def rho_from_return_loss(db: npt.ArrayLike) -> Array:
    """Reflection magnitude of a return loss [dB, positive]."""
    return np.asarray(10.0 ** (-np.asarray(db, dtype=float) / 20.0))


def mismatch_loss_db(rho: npt.ArrayLike) -> Array:
    """Mismatch loss [dB], -10 log10(1 - rho^2), by log1p so that a small rho is not lost. Infinity at 1."""
    r = np.asarray(rho, dtype=float)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(-10.0 / np.log(10.0) * np.log1p(-r * r))


def reflection_of(impedance_ohm: npt.ArrayLike, z0_ohm: float = 50.0) -> Complex:
    """Complex reflection of an impedance [ohm] in `z0_ohm`; an infinite impedance reflects +1."""
    z = np.asarray(impedance_ohm, dtype=complex)
    with np.errstate(invalid="ignore", divide="ignore"):
        gamma = (z - z0_ohm) / (z + z0_ohm)
    return np.where(np.isinf(z), 1.0 + 0.0j, gamma)


def line_voltage_v(net_w: npt.ArrayLike, swr: npt.ArrayLike, z0_ohm: float = 50.0) -> Array:
    """Highest rms voltage [V] on a line with net power [W] at an SWR: sqrt(P S Z0)."""
    return np.asarray(np.sqrt(np.asarray(net_w, dtype=float) * np.asarray(swr, dtype=float) * z0_ohm))
