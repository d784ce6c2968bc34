"""Five couplers unlike each other, as complex waves with simulated diodes, and what a builder measures on them.

Nothing here knows what the fit or the advice expects: waves, diodes and converter are the simulator's, parts and
wattmeter those of its bench.
"""

from dataclasses import dataclass
from functools import cache

import numpy as np

from bridgeio.simulator import detector, feed
from bridgeio.simulator.bench import DUMMY, LOADS, METER_GAIN, METER_SCATTER, RATINGS
from bridgeio.simulator.coupler import Ports
from bridgeio.simulator.detector import Detector
from bridgeio.simulator.station import source_lift
from calibration.bench import BenchStep
from calibration.candidates import Candidate, Limits
from calibration.meter import Meter

__all__ = ["COUPLERS", "FULL_SCALE", "LIMITS", "RATINGS", "Coupler", "measure", "minimal", "swr_interval"]

SUMMED, SAMPLES = 4, 200
FULL_SCALE = SUMMED * detector.TOP_CODE
LIMITS = Limits(dummy_w=100.0, resistor_w=5.0, power_min_w=0.1, power_max_w=100.0, max_w=150.0)
LINE_SHORT_DEG, LINE_LOSS_DB = 0.4, 0.03

_ZERO_BIAS = (Detector(3e-6, 1.06, 100e3, 10e-9, 0.4, 5.0), Detector(2.5e-6, 1.06, 99e3, 10e-9, 0.4, 8.0))
_PLAIN = (Detector(2.2e-8, 1.08, 100e3, 10e-9, 0.35, 9.0), Detector(1.6e-8, 1.07, 101e3, 10e-9, 0.352, 6.0))
_HIGH_OHM = (Detector(4e-8, 1.1, 1e6, 10e-9, 0.4, 12.0), Detector(5e-8, 1.1, 1.02e6, 10e-9, 0.395, 3.0))
_OWN = (detector.FORWARD, detector.REFLECTED)


@dataclass(frozen=True)
class Coupler:
    """Couplings, leaks (magnitude, degrees at 14 MHz), matches and loss of a four-port, and its two detectors."""

    name: str
    coupling: tuple[float, float]
    forward_leak: tuple[float, float]
    reflected_leak: tuple[float, float]
    match: tuple[complex, complex]
    loss_db: float
    detectors: tuple[Detector, Detector]

    def ports(self, hz: float, *, turned: bool = False) -> Ports:
        """What the detector ports see per unit wave incident on the load; `turned`: end for end."""
        leaks = [
            size * np.exp(1j * np.radians(degrees * (0.7 + 0.3 * hz / 14e6)))
            for size, degrees in (self.forward_leak, self.reflected_leak)
        ]
        through = 10.0 ** (-self.loss_db / 20.0)
        wave, echo = 1.0 / through, -self.match[0 if turned else 1] / through
        forward, reflected = self.coupling
        if turned:
            return Ports(
                forward * leaks[0] * wave,
                forward * (1.0 + leaks[0] * echo),
                reflected * wave,
                reflected * (echo + leaks[1]),
            )
        return Ports(
            forward * wave,
            forward * (echo + leaks[0]),
            reflected * leaks[1] * wave,
            reflected * (1.0 + leaks[1] * echo),
        )


COUPLERS = (
    Coupler("31 dB", (0.0491, 0.0503), (0.024, -120), (0.028, 100), (0.006 + 0.004j, -0.005 + 0.008j), 0.05, _OWN),
    Coupler("28 dB, leaks opposed", (0.0470, 0.0500), (0.040, 150), (0.040, 30), (0.004, 0.003j), 0.06, _PLAIN),
    Coupler("24 dB", (0.0500, 0.0460), (0.050, -40), (0.063, 170), (0.02j, 0.015 - 0.01j), 0.08, _ZERO_BIAS),
    Coupler("38 dB", (0.0510, 0.0505), (0.011, 70), (0.0125, -60), (0.004j, 0.006), 0.04, _HIGH_OHM),
    Coupler("30 dB, at right angles", (0.0480, 0.0520), (0.020, -90), (0.032, 90), (0.01, -0.01j), 0.05, _OWN),
)


def measure(coupler: Coupler, step: Candidate, chance: np.random.Generator) -> BenchStep:
    """The step as the builder takes it: real parts, a wattmeter with its own error, noisy counts."""
    peaks_v = (0.0, 0.0)
    if step.kind != "dark":
        gamma = _gamma(step)
        wave_v = np.sqrt(2.0 * feed.Z0_OHM * step.power_w) * (source_lift(gamma) if step.kind == "load" else 1.0)
        ports = coupler.ports(step.frequency_hz, turned=step.kind == "reversed")
        peaks_v = tuple(wave_v * float(port) for port in ports.amplitudes(gamma))
    tallies = [_tallies(of, peak_v, SAMPLES, chance) for of, peak_v in zip(coupler.detectors, peaks_v, strict=True)]
    (forward, forward_sd), (reflected, reflected_sd) = ((float(t.mean()), float(t.std(ddof=1))) for t in tallies)
    said_w = None
    if step.kind in ("power", "reversed"):
        said_w = step.power_w * METER_GAIN * (1.0 + METER_SCATTER * chance.standard_normal())
    return BenchStep(
        step.kind,
        forward,
        reflected,
        frequency_hz=step.frequency_hz,
        power_w=said_w,
        load=step.load,
        line_deg=step.line_deg,
        forward_sd=forward_sd,
        reflected_sd=reflected_sd,
        samples=SAMPLES,
    )


def minimal(coupler: Coupler, bands_hz: tuple[float, ...], chance: np.random.Generator) -> list[BenchStep]:
    """The least a fit asks for: dark, and three powers into the dummy on every band."""
    steps = [Candidate("dark")] + [Candidate("power", hz, watts) for hz in bands_hz for watts in (0.3, 5.0, 80.0)]
    return [measure(coupler, step, chance) for step in steps]


def swr_interval(coupler: Coupler, bridge, hz: float, angles: int = 24) -> tuple[np.ndarray, np.ndarray]:
    """Ends of the SWR interval that `bridge` reads at SWR 1.5 and 10 W at load angles all around; inf: no upper end."""
    gamma = 0.2 * np.exp(2j * np.pi * np.arange(angles) / angles)
    wave_v = np.sqrt(2.0 * feed.Z0_OHM * 10.0)
    chance = np.random.default_rng(5)
    counts = [
        np.array([_tallies(of, wave_v * peak, 1, chance)[0] for peak in port])
        for of, port in zip(coupler.detectors, coupler.ports(hz).amplitudes(gamma), strict=True)
    ]
    readings = Meter(bridge).read(*counts, frequency_hz=hz)
    return readings.swr_low, np.where(np.isnan(readings.swr_high), np.inf, readings.swr_high)


def _gamma(step: Candidate) -> complex:
    if step.kind != "load":
        return DUMMY.gamma(step.frequency_hz)
    gamma = LOADS[step.load].gamma(step.frequency_hz)
    if step.line_deg:
        gamma *= 10.0 ** (-LINE_LOSS_DB / 10.0) * np.exp(-2j * np.radians(step.line_deg - LINE_SHORT_DEG))
    return gamma


def _tallies(of: Detector, peak_v: float, count: int, chance: np.random.Generator) -> np.ndarray:
    dc_v = np.full((count, SUMMED), _table(of).dc_v(np.asarray(peak_v)))
    return detector.convert(of, dc_v, chance.standard_normal(dc_v.shape)).sum(axis=1)


@cache
def _table(of: Detector) -> detector.Table:
    return detector.Table(of, 25.0)
