"""Random couplers with detectors and converters, in complex waves, and the benches a builder would take with them.

One rule: nothing here knows how readings are made: a diode is solved by its current's balance, a logarithmic detector
is its data sheet's line with ripple, and what a port sees is the sum of two waves.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np
import numpy.typing as npt

from bridgeio.simulator.detector import solve_dc_v
from calibration.bench import BenchRatings, BenchStep

Array = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]

HZ = 14.1e6
Z0_OHM = 50.0
#: Converters: largest count, rms noise of a tally [counts].
CONVERTERS = {"10 bit": (1023, 0.4), "12 bit": (4095, 0.8), "sum of 16": (65520, 3.3)}
DETECTORS = ("diode", "log", "table")
SAMPLES = 200
TOP_W = 100.0
#: What the builder writes down of the references; the parts keep within it.
RATINGS = BenchRatings(reference_pct=5.0, dummy_return_loss_db=36.0, resistor_pct=1.0)


@cache
def _diode(load_ohm: float, spread: int) -> tuple[Array, Array]:
    """Peak and detected volts of one of ten spread Schottky parts (2.2e-8 A, 26 %: Hewlett-Packard's lot data)."""
    rng = np.random.default_rng([spread, 77])
    peak = 14.0 * np.linspace(0.0, 1.0, 500) ** 2
    saturation = 2.2e-8 * float(np.exp(0.25 * rng.standard_normal()))
    return peak, solve_dc_v(peak, saturation_a=saturation, ideality=1.08, load_ohm=load_ohm, temperature_k=298.15)


@dataclass(frozen=True)
class Side:
    """One detector: from RF peak volts at its port to mean counts, before noise."""

    detector: str
    full_scale: int
    top_v: float
    offset: float
    load_ohm: float
    spread: int
    ripple: float

    def counts(self, peak_v: Array) -> Array:
        """Mean counts, any shape."""
        if self.detector == "log":
            # 25 mV/dB and -84 dBm into 50 ohm (AD8307 data sheet), a tap of 43 dB, a floor at -75 dBm, ripple; 2.7 V.
            watts = np.square(peak_v) / (2 * Z0_OHM) * 10**-4.3
            dbm = 10 * np.log10(1e3 * watts + 10**-7.5)
            millivolts = 25 * (dbm + 84) + 25 * 0.1 * np.sin(2 * np.pi * dbm / 16.0 + self.ripple)
            return np.asarray(millivolts / 2700.0 * self.full_scale)
        volts = np.interp(peak_v, *_diode(self.load_ohm, self.spread))
        return np.asarray(self.offset + volts / (1.05 * self.top_v) * (self.full_scale - self.offset))


@dataclass(frozen=True)
class RandomCoupler:
    """A coupler with its two detectors: port waves a (1 + c G) and b (G + d), per root watt of incident power.

    match: the bridge's own, the part of c that a turned bridge does not show.
    """

    converter: str
    d: complex
    c: complex
    match: complex
    volts: tuple[float, float]
    sides: tuple[Side, Side]
    dummy: complex
    seed: int

    @property
    def directivity_db(self) -> float:
        """Directivity of the reflected port [dB]."""
        return float(-20 * np.log10(abs(self.d)))

    def _waves(self, gamma: Complex, turned: bool) -> tuple[Array, Array]:
        """Magnitudes at the forward and reflected port per unit incident wave; turned: the bridge end for end."""
        if turned:
            return np.abs(gamma + self.c - self.match), np.abs(1 + (self.d + self.match) * gamma) * 10 ** (0.05 / 20)
        return np.abs(1 + self.c * gamma), np.abs(gamma + self.d)

    def counts(
        self, rng: np.random.Generator, watts: Array, gamma: Complex, samples: int = SAMPLES, turned: bool = False
    ) -> tuple[Array, Array]:
        """Mean counts [n] of `samples` tallies at watts [W, n] into loads of reflection gamma [n]."""
        _, noise = CONVERTERS[self.converter]
        told = []
        for side, volts, wave in zip(self.sides, self.volts, self._waves(gamma, turned), strict=True):
            level = side.counts(volts * wave * np.sqrt(watts))
            tallies = level[..., None] + noise * rng.standard_normal((*np.shape(level), samples))
            told.append(np.clip(np.rint(tallies), 0, side.full_scale).mean(axis=-1))
        return told[0], told[1]

    def bench(self, *, loaded: bool = True, turned: bool = True) -> list[BenchStep]:
        """What a careful builder takes on one band, by a wattmeter that reads wrong by a fixed part and scatters.

        loaded, turned: whether there are resistors, and whether the bridge was turned end for end.
        """
        rng = np.random.default_rng([self.seed, 9])
        high = 1 + 0.02 * rng.standard_normal()
        detector = self.sides[0].detector

        def step(kind: str, watts: float, gamma: complex, **told: object) -> BenchStep:
            counts = self.counts(rng, np.array([watts]), np.array([gamma]), turned=kind == "reversed")
            if kind in ("power", "reversed"):
                told["power_w"] = float(watts * high * (1 + 0.007 * rng.standard_normal()))
            _, noise = CONVERTERS[self.converter]
            hz = None if kind == "dark" else HZ
            means = (float(count[0]) for count in counts)
            return BenchStep(kind, *means, hz, forward_sd=noise, reflected_sd=noise, samples=SAMPLES, **told)

        powers = TOP_W * np.geomspace(1e-3, 1.0, 8 if detector == "diode" else 10)
        back = powers if detector == "table" else powers[[1, 3, 5, 7]]
        steps = [step("dark", 0.0, 0j)]
        steps += [step("power", watts, self.dummy) for watts in powers]
        steps += [step("reversed", watts, self.dummy) for watts in (back if turned else ())]
        for name in ("25", "100", "16.67", "150") if loaded else ():
            gamma = part_reflection(float(name) * (1 + 0.005 * rng.uniform(-2, 2)))
            steps.append(step("load", 5.0, gamma, load=name))
            if name in ("25", "100"):
                behind = gamma * 10 ** (-0.03 / 10) * np.exp(-2j * np.radians(44.6))
                steps.append(step("load", 5.0, behind, load=name, line_deg=45.0))
        return steps


def part_reflection(ohm: float, henry: float = 1.4e-9, farad: float = 0.4e-12) -> complex:
    """Reflection of a resistor with its leads' inductance and stray capacitance."""
    omega = 2 * np.pi * HZ
    impedance = 1 / (1 / (ohm + 1j * omega * henry) + 1j * omega * farad)
    return complex((impedance - Z0_OHM) / (impedance + Z0_OHM))


def random_coupler(seed: int, detector: str, converter: str) -> RandomCoupler:
    """A coupler of 18 to 40 dB directivity with any angles; the seed decides all."""
    rng = np.random.default_rng([seed, 1])
    full_scale, _ = CONVERTERS[converter]
    d, match, own_c = (
        10 ** (-rng.uniform(low, 40.0) / 20) * np.exp(2j * np.pi * rng.random()) for low in (18.0, 26.0, 20.0)
    )
    forward_v = rng.uniform(0.3, 0.6)  # a root watt: 3 to 6 V at 100 W
    volts = forward_v, forward_v * (1 + 0.05 * rng.standard_normal())
    first, second = (
        Side(
            detector,
            full_scale,
            top_v=volt * np.sqrt(TOP_W),
            offset=rng.uniform(0.5, 8.0) * full_scale / 4095,
            load_ohm=float(rng.choice([100e3, 330e3, 1e6])),
            spread=int(rng.integers(10)),
            ripple=rng.uniform(0, 6),
        )
        for volt in volts
    )
    dummy = 10 ** (-36 / 20) * np.sqrt(rng.random()) * np.exp(2j * np.pi * rng.random())
    return RandomCoupler(
        converter, complex(d), complex(own_c + match), complex(match), volts, (first, second), dummy, seed
    )
