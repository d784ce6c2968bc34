"""The simulated detectors: a diode, a hold capacitor, a divider and a 12-bit converter.

One rule: the diode's DC voltage is found from its current, integrated over the RF cycle and balanced against
the load by bisection; the closed form that the correction uses appears nowhere.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = ["FORWARD", "REFLECTED", "SUMMED", "ZERO_C", "Detector", "Held", "Table", "convert", "pin_v", "solve_dc_v"]

Array = npt.NDArray[np.float64]

ZERO_C = 273.15
VOLTS_PER_KELVIN = 1.380649e-23 / 1.602176634e-19  # k/q, exact since 2019
REFERENCE_V = 2.5
TOP_CODE = 4095
SUMMED = 16  # conversions added up in one tally
NOISE_CODES = 0.8  # rms of one conversion
PHASES = 256
TABLE_TOP_V = 16.0
TABLE_NODES = 700


@dataclass(frozen=True, slots=True)
class Detector:
    """Diode (saturation current at 25 C [A], ideality, barrier [eV]), load, hold, divider, offset."""

    saturation_a: float
    ideality: float
    load_ohm: float
    hold_f: float
    divider: float
    offset_codes: float
    barrier_ev: float = 0.64

    @property
    def hold_s(self) -> float:
        """Time constant [s] with which the hold capacitor falls through the load once the diode is off."""
        return self.load_ohm * self.hold_f

    def saturation_at_a(self, temperature_k: float) -> float:
        """Saturation current [A] by thermionic emission, T^2 exp(-barrier/kT) (Richardson, from memory)."""
        warm = temperature_k / 298.15
        lift = self.barrier_ev / VOLTS_PER_KELVIN * (1.0 / 298.15 - 1.0 / temperature_k)
        return float(self.saturation_a * warm**2 * np.exp(lift))


#: A zero-bias-like Schottky diode with a load near its own junction resistance; the second is a spread part.
FORWARD = Detector(6.0e-8, 1.08, 330e3, 10e-9, 0.400, 7.3)
REFLECTED = Detector(7.4e-8, 1.07, 334e3, 10e-9, 0.398, 4.4)


def solve_dc_v(
    peak_v: npt.ArrayLike, *, saturation_a: float, ideality: float, load_ohm: float, temperature_k: float
) -> Array:
    """DC volts held at the load for RF of `peak_v` [V peak] at the diode; an array like `peak_v`.

    The mean over the cycle of Is(exp((Vp cos t - V)/(n Vt)) - 1), by midpoints of half a cycle, must be V/RL.
    """
    peak = np.atleast_1d(np.asarray(peak_v, dtype=float))
    thermal_v = ideality * VOLTS_PER_KELVIN * temperature_k
    phases = (np.arange(PHASES) + 0.5) * (np.pi / PHASES)
    # The crest is taken out of the integral, for exp(Vp/nVt) itself overflows from 20 V on.
    below_crest = np.exp(np.outer(peak / thermal_v, np.cos(phases) - 1.0)).mean(axis=1)
    crest = peak / thermal_v + np.log(below_crest)
    low, high = np.zeros_like(peak), peak.copy()
    for _ in range(64):
        middle = 0.5 * (low + high)
        charging_a = saturation_a * np.expm1(np.minimum(crest - middle / thermal_v, 600.0))
        rising = charging_a > middle / load_ohm
        low, high = np.where(rising, middle, low), np.where(rising, high, middle)
    return np.asarray(0.5 * (low + high))


class Table:
    """DC volts against RF peak volts of one detector at one temperature, solved once, then looked up."""

    def __init__(self, detector: Detector, temperature_c: float) -> None:
        kelvin = temperature_c + ZERO_C
        # Nodes crowd towards zero, where the curve bends: straight lines between them miss by 1e-5 V at most.
        self._peak_v = TABLE_TOP_V * np.linspace(0.0, 1.0, TABLE_NODES) ** 2
        self._dc_v = solve_dc_v(
            self._peak_v,
            saturation_a=detector.saturation_at_a(kelvin),
            ideality=detector.ideality,
            load_ohm=detector.load_ohm,
            temperature_k=kelvin,
        )

    def dc_v(self, peak_v: Array) -> Array:
        """DC volts [V] for RF peak volts [V], any shape."""
        return np.interp(peak_v, self._peak_v, self._dc_v)


class Held:
    """The hold capacitor over time: charged at once, falling exponentially while the diode is off.

    What is held at an instant is the largest of all earlier drives, each fallen since: a running maximum of
    log(volts) + t/hold. Charging takes no time here, and the diode's own help in falling is left out.
    """

    def __init__(self, hold_s: float) -> None:
        self._hold_s = hold_s
        self._carried = -np.inf

    def follow(self, t_s: Array, drive_v: Array) -> Array:
        """Held volts at rising times `t_s` [s] for `drive_v` [V], both of one shape; later calls go on."""
        fallen = np.log(np.maximum(drive_v, 1e-9)) + t_s / self._hold_s
        fallen = np.maximum(np.maximum.accumulate(fallen), self._carried)
        self._carried = float(fallen[-1])
        return np.asarray(np.exp(fallen - t_s / self._hold_s))


def pin_v(detector: Detector, dc_v: Array) -> Array:
    """Volts [V] at the converter's pin: the held `dc_v` [V] through the divider, and the offset; any shape."""
    return np.asarray(dc_v * detector.divider + detector.offset_codes * REFERENCE_V / TOP_CODE)


def convert(detector: Detector, dc_v: Array, noise: Array) -> Array:
    """Codes 0..TOP_CODE of conversions of `dc_v` [V]; `noise` is standard normal, of the same shape."""
    level = pin_v(detector, dc_v) * (TOP_CODE / REFERENCE_V)
    return np.clip(np.rint(level + NOISE_CODES * noise), 0.0, float(TOP_CODE))
