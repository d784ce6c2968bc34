"""The simulated coupler: a lossy, imperfectly matched four-port, in complex waves and either direction.

One rule: leaks, matches and loss are properties of the part; what a user would call c and d comes out of the
wave equations, it is put in nowhere. All values are this simulator's own, chosen by hand.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

__all__ = ["Part", "Ports", "looking_back", "looking_forward"]

Complex = npt.NDArray[np.complexfloating[Any, Any]]


@dataclass(frozen=True, slots=True)
class Ports:
    """What the two detector ports see, per unit wave incident on the load.

    forward port = wave * (forward_wave + forward_echo * gamma), reflected port likewise; arrays like the
    frequency.
    """

    forward_wave: Complex
    forward_echo: Complex
    reflected_wave: Complex
    reflected_echo: Complex

    @property
    def c(self) -> Complex:
        """What a user calls c: forward port = a(1 + c gamma)."""
        return np.asarray(self.forward_echo / self.forward_wave)

    @property
    def d(self) -> Complex:
        """What a user calls d: reflected port = a(gamma + d)."""
        return np.asarray(self.reflected_wave / self.reflected_echo)

    def amplitudes(self, gamma: npt.ArrayLike) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.float64]]:
        """Magnitudes at forward and reflected port, per unit wave incident on a load of `gamma`."""
        load = np.asarray(gamma, dtype=complex)
        forward = np.abs(self.forward_wave + self.forward_echo * load)
        return forward, np.abs(self.reflected_wave + self.reflected_echo * load)


def looking_forward(frequency_hz: npt.ArrayLike) -> Ports:
    """Bridge the right way round: transmitter at side 1, load at side 2.

    Side 2 sends out b2 = t a1 + s22 a2 and the load returns a2 = gamma b2; the forward port takes its share
    of a1 and a leak of a2, the reflected port its share of a2 and a leak of a1 (scattering matrix of the main
    line).
    """
    part = Part(frequency_hz)
    seen = (1.0 / part.through, -part.match_2 / part.through)  # a1 = b2 (seen[0] + seen[1] gamma)
    return Ports(
        part.forward * seen[0],
        part.forward * (seen[1] + part.forward_leak),
        part.reflected * part.reflected_leak * seen[0],
        part.reflected * (1.0 + part.reflected_leak * seen[1]),
    )


def looking_back(frequency_hz: npt.ArrayLike) -> Ports:
    """Bridge turned end for end, load at side 1: now the reflected port sees the full wave.

    The bridge's own loss now lies between that port and the load, and so enters.
    """
    part = Part(frequency_hz)
    seen = (1.0 / part.through, -part.match_1 / part.through)
    return Ports(
        part.forward * part.forward_leak * seen[0],
        part.forward * (1.0 + part.forward_leak * seen[1]),
        part.reflected * seen[0],
        part.reflected * (seen[1] + part.reflected_leak),
    )


class Part:
    """The coupler's own numbers at a frequency: coupling, leaks, matches, transmission."""

    def __init__(self, frequency_hz: npt.ArrayLike) -> None:
        hz = np.asarray(frequency_hz, dtype=float)
        high = hz / 30e6
        low = 1.8e6 / hz
        # Coupling droops where the transformers run out of inductance, and rises with stray capacitance.
        self.forward: Complex = 0.0491 * (1.0 + 0.012 * high**2) / (1.0 - 0.11j * low)
        self.reflected: Complex = 0.0503 * (1.0 + 0.009 * high**2) / (1.0 - 0.14j * low)
        self.forward_leak: Complex = 0.021 * np.exp(-2.4j) + 0.024 * high * np.exp(-0.9j) + 0.006 * low * np.exp(2.6j)
        self.reflected_leak: Complex = 0.027 * np.exp(1.7j) + 0.033 * high * np.exp(2.9j) + 0.007 * low * np.exp(0.4j)
        self.match_1: Complex = 0.004 + 0.014j * high
        self.match_2: Complex = -0.005 + 0.017j * high
        self.through = 10.0 ** (-(0.036 + 0.034 * high) / 20.0)
