"""The simulated bench: the builder's own calibration of the simulated bridge, with a builder's own errors.

One rule: what `sim:` is read with is fitted from these steps, not from the truth; parts and wattmeter are as
good as a careful builder's, and no better.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from calibration.bench import BenchRatings, BenchStep

from . import coupler, detector, feed
from .station import source_lift

__all__ = ["FREQUENCIES_HZ", "RATINGS", "Setup", "bench_setups", "bench_steps", "set_up"]

Array = npt.NDArray[np.float64]

#: One frequency a band, 160 to 10 m.
FREQUENCIES_HZ = (1.85e6, 3.65e6, 5.36e6, 7.1e6, 10.12e6, 14.1e6, 18.1e6, 21.2e6, 24.9e6, 28.4e6)
MAIN_HZ = 14.1e6
LOADED_HZ = (3.65e6, MAIN_HZ, 28.4e6)
SAMPLES = 200

#: Kind of step -> powers [W] on the main band, and on each other.
POWERS_W: dict[str, tuple[tuple[float, ...], tuple[float, ...]]] = {
    "power": ((0.1, 0.3, 1.0, 3.0, 10.0, 30.0, 60.0, 100.0), (0.5, 5.0, 50.0)),
    "reversed": ((0.2, 2.0, 20.0, 80.0), (10.0,)),
}

#: What the builder can say of the references; the parts keep within it.
RATINGS = BenchRatings(reference_pct=5.0, dummy_return_loss_db=36.0, resistor_pct=1.0)

METER_GAIN, METER_SCATTER = 1.018, 0.006  # the wattmeter reads high, and not always the same
LINE_DEG, LINE_LOSS_DB = 44.6, 0.03  # what is sold and written down as 45 degrees
MADE_OF = 1.004  # a resistor that is not in the drawer is so many times what is written on it


@dataclass(frozen=True, slots=True)
class _Part:
    """A resistor as it really is: resistance [ohm], series inductance [H], shunt capacitance [F]."""

    ohm: float
    henry: float = 1.3e-9
    farad: float = 0.45e-12

    def gamma(self, frequency_hz: float) -> complex:
        """Reflection in 50 ohm."""
        omega = 2.0 * np.pi * frequency_hz
        admittance = 1.0 / (self.ohm + 1j * omega * self.henry) + 1j * omega * self.farad
        return complex(feed.reflection(1.0 / admittance))


#: Near 42 dB on the low bands, 37 dB at the top.
DUMMY = _Part(49.2, 14e-9, 3e-12)

#: As written in the sheet -> the part.
LOADS: dict[str, _Part] = {
    "25": _Part(25.13),
    "100": _Part(99.36),
    "16.67": _Part(16.71),
    "150": _Part(150.9),
    "open": _Part(1e9, 0.0, 0.3e-12),
    "short": _Part(1e-3, 0.6e-9, 0.0),
}


@dataclass(frozen=True, slots=True)
class Setup:
    """A step as it is set up, before anything counts: RF peak volts [V] at the forward and the reflected detector,
    and what the sheet will say of it."""

    kind: str
    ports_v: tuple[float, float]
    frequency_hz: float | None = None
    power_w: float | None = None
    load: str | None = None
    line_deg: float = 0.0

    def step(self, forward: Array, reflected: Array) -> BenchStep:
        """Return the step with mean and scatter of the tallies [counts, n] of either channel, as a sheet shows them."""
        (nf, sd_f), (nr, sd_r) = (
            (round(float(tallies.mean()), 2), round(float(tallies.std(ddof=1)), 2)) for tallies in (forward, reflected)
        )
        return BenchStep(
            self.kind,
            nf,
            nr,
            frequency_hz=self.frequency_hz,
            power_w=self.power_w,
            load=self.load,
            line_deg=self.line_deg,
            forward_sd=sd_f,
            reflected_sd=sd_r,
            samples=len(forward),
        )


def bench_steps(seed: int = 1) -> list[BenchStep]:
    """Return the steps of the simulated bench, in the order they were taken; noise and scatter follow `seed`.

    Dark; eight powers on 20 m and three on each other band; the bridge turned, four powers and one; known
    loads, two of them also behind line, on three bands, open and short at 1 W only.
    """
    chance = np.random.default_rng([seed, 2])
    converter = _Converter(chance)
    # One setup at a time: wattmeter and converter draw from one chance, in the order of the bench.
    return [setup.step(*converter.tallies(setup)) for setup in _setups(chance)]


def bench_setups(seed: int = 1) -> list[Setup]:
    """Return what the same bench sets up, step by step, for a converter other than the simulator's own."""
    return list(_setups(np.random.default_rng([seed, 2])))


def set_up(
    kind: str,
    frequency_hz: float | None,
    power_w: float | None,
    load: str | None,
    line_deg: float,
    chance: np.random.Generator,
) -> Setup:
    """Connect what a bench step asks for, with this bench's own parts and wattmeter; dark has no power on.

    power_w [W]: as the transmitter gives a matched load. ValueError where a load is none that can be made.
    """
    if kind == "dark" or frequency_hz is None or power_w is None:
        return Setup("dark", (0.0, 0.0))
    bench = _Bench(chance)
    if kind == "load":
        return bench.load(frequency_hz, load or "", power_w, line_deg)
    return bench.power(kind, frequency_hz, power_w)


def _setups(chance: np.random.Generator) -> Iterator[Setup]:
    bench = _Bench(chance)
    yield Setup("dark", (0.0, 0.0))
    for kind, (main_w, other_w) in POWERS_W.items():
        for frequency_hz in FREQUENCIES_HZ:
            watts = main_w if frequency_hz == MAIN_HZ else other_w
            yield from (bench.power(kind, frequency_hz, power_w) for power_w in watts)
    for frequency_hz in LOADED_HZ:
        yield from (bench.load(frequency_hz, name, 5.0) for name in ("25", "100", "16.67", "150"))
        yield from (bench.load(frequency_hz, name, 5.0, line_deg=45.0) for name in ("25", "100"))
        yield from (bench.load(frequency_hz, name, 1.0) for name in ("open", "short"))


class _Bench:
    """Bridge, transmitter, wattmeter and parts."""

    def __init__(self, chance: np.random.Generator) -> None:
        self._chance = chance

    def power(self, kind: str, frequency_hz: float, power_w: float) -> Setup:
        """Dummy load; the wattmeter between bridge and dummy says the power. "reversed" turns the bridge."""
        looking = coupler.looking_back if kind == "reversed" else coupler.looking_forward
        ports_v = _ports_v(looking(frequency_hz), DUMMY.gamma(frequency_hz), power_w)
        said_w = power_w * METER_GAIN * (1.0 + METER_SCATTER * self._chance.standard_normal())
        return Setup(kind, ports_v, frequency_hz=frequency_hz, power_w=float(f"{said_w:.4g}"))

    def load(self, frequency_hz: float, name: str, power_w: float, line_deg: float = 0.0) -> Setup:
        """A known load, directly or behind line; power [W] as the transmitter gives a matched one."""
        gamma = _gamma(name, frequency_hz)
        if line_deg:
            gamma *= 10.0 ** (-LINE_LOSS_DB / 10.0) * np.exp(-2j * np.radians(line_deg * (LINE_DEG / 45.0)))
        ports_v = _ports_v(coupler.looking_forward(frequency_hz), gamma, power_w)
        return Setup("load", ports_v, frequency_hz=frequency_hz, load=name, line_deg=line_deg)


def _gamma(name: str, frequency_hz: float) -> complex:
    """Reflection of a load by its name; one that is not in the drawer is made of parts a little off."""
    if name in LOADS:
        return LOADS[name].gamma(frequency_hz)
    wanted = complex(name.replace(" ", "").replace("i", "j"))
    return _Part(MADE_OF * wanted.real).gamma(frequency_hz) if not wanted.imag else complex(feed.reflection(wanted))


class _Converter:
    """Detectors and converter of the simulated board, at 25 C."""

    def __init__(self, chance: np.random.Generator) -> None:
        self._chance = chance
        self._detectors = [(part, detector.Table(part, 25.0)) for part in (detector.FORWARD, detector.REFLECTED)]

    def tallies(self, setup: Setup) -> list[Array]:
        """SAMPLES tallies [counts] of the forward and of the reflected channel, each a sum of conversions."""
        return [self._count(side, peak_v) for side, peak_v in enumerate(setup.ports_v)]

    def _count(self, side: int, peak_v: float) -> Array:
        part, table = self._detectors[side]
        noise = self._chance.standard_normal((SAMPLES, detector.SUMMED))
        dc_v = np.full(noise.shape, table.dc_v(np.asarray(peak_v)))
        return np.asarray(detector.convert(part, dc_v, noise).sum(axis=1))


def _ports_v(ports: coupler.Ports, gamma: complex, power_w: float) -> tuple[float, float]:
    """RF peak volts [V] at the forward and reflected detector."""
    wave_v = float(np.sqrt(2.0 * feed.Z0_OHM * power_w) * source_lift(gamma))
    forward, reflected = ports.amplitudes(gamma)
    return wave_v * float(forward), wave_v * float(reflected)
