"""The simulated station: transmitter, a hand on a knob, line, antenna. It knows the truth at every instant.

One rule: all of it is a function of time; the board asks it what to measure, a test asks it what was true.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from . import coupler, envelope, feed
from .options import ANTENNAS, Scenario

__all__ = ["SOURCE_REFLECTION", "Station", "Truth", "source_lift"]

Array = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complexfloating[Any, Any]]

SOURCE_REFLECTION = 0.13 * np.exp(0.7j)  # a transmitter is not quite 50 ohm
KNOB_CYCLE_S = 22.0
KNOB_SWING = 0.6  # of resonance/Q: takes the antenna to about SWR 3.4
SWEEP_SPAN = 0.025  # the sweep goes this share of the frequency to either side


@dataclass(frozen=True, slots=True)
class Truth:
    """What was true at the asked instants, as arrays. Powers [W] and gamma at the bridge's load side."""

    t_s: Array
    frequency_hz: Array
    envelope: Array
    forward_w: Array
    gamma: Complex
    antenna_gamma: Complex

    @property
    def rho(self) -> Array:
        """Magnitude of the reflection at the bridge."""
        return np.abs(self.gamma)

    @property
    def swr(self) -> Array:
        """SWR at the bridge; infinite at total reflection."""
        with np.errstate(divide="ignore"):
            return np.asarray((1.0 + self.rho) / (1.0 - self.rho))

    @property
    def reflected_w(self) -> Array:
        """Reflected power [W] at the bridge."""
        return np.asarray(self.forward_w * self.rho**2)

    @property
    def net_w(self) -> Array:
        """Net power [W] from the bridge to the line."""
        return self.forward_w - self.reflected_w


class Station:
    """Everything but the bridge, of one scenario."""

    def __init__(self, scenario: Scenario) -> None:
        self.scenario = scenario
        self.envelope = envelope.envelope(scenario.mode, scenario.seed)

    def at(self, t_s: npt.ArrayLike) -> Truth:
        """Return the truth at device times `t_s` [s], any shape."""
        t = np.asarray(t_s, dtype=float)
        key = self.envelope(t)
        frequency, antenna, gamma = self._reflections(t)
        forward_w = self.scenario.power_w * (key * source_lift(gamma)) ** 2
        return Truth(t, frequency, key, forward_w, gamma, antenna)

    def port_peaks_v(self, t_s: Array) -> tuple[Array, Array]:
        """RF peak volts [V] at the forward and reflected detectors with the key fully down, times as `at`."""
        frequency, _, gamma = self._reflections(t_s)
        wave_v = np.sqrt(2.0 * feed.Z0_OHM * self.scenario.power_w) * source_lift(gamma)
        forward, reflected = coupler.looking_forward(frequency).amplitudes(gamma)
        return wave_v * forward, wave_v * reflected

    def frequency_hz(self, t_s: Array) -> Array:
        """Return the carrier's frequency [Hz]: fixed, or stepping through the span in the mode sweep."""
        centre = self.scenario.frequency_hz
        if self.scenario.mode != "sweep":
            return np.full_like(t_s, centre)
        point = np.floor(t_s / envelope.SWEEP_STEP_S) % envelope.SWEEP_POINTS
        return np.asarray(centre * (1.0 + SWEEP_SPAN * (2.0 * point / (envelope.SWEEP_POINTS - 1) - 1.0)))

    def _reflections(self, t_s: Array) -> tuple[Array, Complex, Complex]:
        frequency = self.frequency_hz(t_s)
        far = feed.reflection(feed.antenna_ohm(self.scenario.antenna, frequency, self._resonance_hz(t_s)))
        return frequency, far, feed.seen_through(self.scenario.line, frequency, far)

    def _resonance_hz(self, t_s: Array) -> Array:
        resonance = self.scenario.frequency_hz + 1e3 * self.scenario.detune_khz
        if not self.scenario.turning or self.scenario.mode == "sweep":
            return np.full_like(t_s, resonance)
        # There and back, lingering near the dip as a hand does.
        swing = np.cos(2.0 * np.pi * t_s / KNOB_CYCLE_S)
        swing = 0.45 * swing + 0.55 * swing**3
        return np.asarray(resonance * (1.0 + KNOB_SWING / ANTENNAS[self.scenario.antenna][1] * swing))


def source_lift(gamma: npt.ArrayLike) -> Array:
    """Incident wave at a load over that at a matched one: 1/|1 - source reflection * gamma|."""
    return np.asarray(1.0 / np.abs(1.0 - SOURCE_REFLECTION * np.asarray(gamma)))
