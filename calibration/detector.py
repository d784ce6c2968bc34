"""The diode peak detector as a circuit: RF volts at the diode to DC volts at the load resistor, and back.

One rule: this is physics with ohms and amperes; the counts of one bridge are the business of `laws`.
Source: the current balance of a diode with a large hold capacitor, I0(Vp/nVt) = (1 + Vdc/(RL Is)) exp(Vdc/nVt);
D. W. Knight, Diode detectors for RF measurement, Part 1 (2016) uses the same Bessel term.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .bessel import inverse_log_i0, log_i0

__all__ = ["Diode", "detected_v", "peak_v", "thermal_v"]

Array = npt.NDArray[np.float64]

_BOLTZMANN_OVER_CHARGE = 1.380649e-23 / 1.602176634e-19  # V/K, both exact in the SI


@dataclass(frozen=True, slots=True)
class Diode:
    """A diode: saturation current [A] and ideality factor at the temperature in question."""

    saturation_a: float
    ideality: float


def thermal_v(kelvin: float) -> float:
    """Thermal voltage kT/q [V] at a temperature [K]."""
    return _BOLTZMANN_OVER_CHARGE * kelvin


def peak_v(detected: npt.ArrayLike, diode: Diode, load_ohm: float, kelvin: float = 298.15) -> Array:
    """Peak RF volts [V] that give `detected` DC volts [V, >= 0] across `load_ohm` [ohm]; any shape."""
    v = np.asarray(detected, dtype=float)
    nvt = diode.ideality * thermal_v(kelvin)
    return nvt * inverse_log_i0(np.log1p(v / (load_ohm * diode.saturation_a)) + v / nvt)


def detected_v(peak: npt.ArrayLike, diode: Diode, load_ohm: float, kelvin: float = 298.15) -> Array:
    """DC volts [V] across `load_ohm` [ohm] from `peak` RF volts [V, >= 0] at the diode; any shape."""
    nvt = diode.ideality * thermal_v(kelvin)
    level = log_i0(np.asarray(peak, dtype=float) / nvt)
    return nvt * solve_load_term(level, load_ohm * diode.saturation_a / nvt)


def solve_load_term(level: npt.ArrayLike, b: float) -> Array:
    """The u >= 0 with u + ln(1 + u/b) = level >= 0, any shape.

    Newton's method from the left: the function is concave and rising, so every step stays left of the root.
    """
    target = np.asarray(level, dtype=float)
    u = target / (1.0 + 1.0 / b)
    for _ in range(60):
        step = (target - u - np.log1p(u / b)) / (1.0 + 1.0 / (b + u))
        u = u + step
        if np.all(~(np.abs(step) > 1e-15 * np.abs(u))):
            break
    return u
