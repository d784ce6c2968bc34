"""A bench at 25 degrees, readings in a box of 45: with detectors from a circuit simulation, in tests/data/warm."""

import csv
from functools import cache
from pathlib import Path

import numpy as np
import pytest
from scipy.interpolate import PchipInterpolator

from calibration.bench import BenchRatings, BenchStep
from calibration.fit import fit
from calibration.meter import Meter
from calibration.warmth import DIODES

TABLE = Path(__file__).parents[1] / "data" / "warm" / "diodes_warm.csv"
HZ = 14.2e6
#: Port volts a root watt of forward and reflected side; leaks of both ports; converter: counts a volt, offset, noise.
VOLTS, D, C = (0.40, 0.41), 0.02 + 0.025j, -0.015 + 0.02j
PER_VOLT, OFFSET, NOISE, SAMPLES = 13000.0, 40.0, 3.0, 200
LOADS = {"25": -1 / 3, "100": 1 / 3, "16.6667": -0.5, "150": 0.5}


@cache
def detector(part, celsius):
    """Detected volts over RF volts, through the simulated points in logarithms."""
    with open(TABLE, newline="", encoding="utf-8") as file:
        rows = [row for row in csv.DictReader(file) if row["part"] == part and float(row["celsius"]) == celsius]
    peak, detected = (np.log([float(row[name]) for row in rows]) for name in ("peak_v", "detected_v"))
    return PchipInterpolator(peak, detected, extrapolate=False)


def counts(rng, watts, gamma, celsius, turned=False):
    """Mean counts of both sides into a load of complex reflection; below the table nothing is detected."""
    waves = np.sqrt(watts)
    seen = (1 + C * gamma) * waves, (gamma + D) * waves
    if turned:
        seen = (gamma + C) * waves, (1 + D * gamma) * waves
    told = []
    for part, volts, wave in zip(("forward", "reflected"), VOLTS, seen, strict=True):
        peak = np.abs(wave) * volts
        square_law = np.exp(detector(part, celsius)(np.log(0.004))) * (peak / 0.004) ** 2
        detected = np.where(peak < 0.004, square_law, np.exp(detector(part, celsius)(np.log(np.maximum(peak, 0.004)))))
        told.append(OFFSET + PER_VOLT * detected + NOISE / np.sqrt(SAMPLES) * rng.standard_normal(np.shape(watts)))
    return told


def step(rng, kind, watts, gamma, turned=False, celsius=25.0, **more):
    """A bench step; the wattmeter is right to 0.2 %."""
    forward, reflected = counts(rng, watts, gamma, celsius, turned)
    said = {} if kind in ("load", "dark") else {"power_w": float(watts * (1 + 0.002 * rng.standard_normal()))}
    hz = None if kind == "dark" else HZ
    return BenchStep(
        kind,
        float(forward),
        float(reflected),
        hz,
        forward_sd=NOISE,
        reflected_sd=NOISE,
        samples=SAMPLES,
        temperature_c=celsius,
        **said,
        **more,
    )


def bridge(diode, second=None):
    """The bridge of that fit."""
    return fitted(diode, second).bridge


@cache
def fitted(diode, second=None):
    """The fit of a bench at 25 degrees, and by a short second bench at `second` degrees Celsius."""
    rng = np.random.default_rng(7)
    steps = [step(rng, "dark", 1e-12, 0.0)]
    steps += [step(rng, "power", watts, 0.004) for watts in (0.1, 0.3, 1.0, 3.0, 10.0, 30.0, 100.0)]
    steps += [step(rng, "reversed", watts, 0.004, turned=True) for watts in (0.2, 2.0, 20.0, 80.0)]
    steps += [step(rng, "load", 5.0, gamma, load=load) for load, gamma in LOADS.items()]
    if second is not None:
        steps += [step(rng, "dark", 1e-12, 0.0, celsius=second)]
        steps += [step(rng, "power", watts, 0.004, celsius=second) for watts in (0.1, 1.0, 10.0)]
        steps += [step(rng, "reversed", watts, 0.004, turned=True, celsius=second) for watts in (0.2, 2.0)]
    ratings = BenchRatings(reference_pct=1.0, dummy_return_loss_db=40.0, resistor_pct=1.0)
    return fit(steps, name="warm box", full_scale=65520, ratings=ratings, diode=DIODES.get(diode))


@cache
def warm(diode, second=None):
    """Readings at 45 degrees of 300 loads, and their truth: forward power with what the load's angle does, rho."""
    rng = np.random.default_rng(8)
    watts = np.exp(rng.uniform(np.log(0.1), np.log(100.0), 300))
    rho = rng.uniform(0.05, 0.6, 300)
    gamma = rho * np.exp(2j * np.pi * rng.random(300))
    forward, reflected = counts(rng, watts, gamma, 45.0)
    read = Meter(bridge(diode, second)).read(forward, reflected, frequency_hz=HZ, samples=SAMPLES, temperature_c=45.0)
    return read, watts, np.abs(1 + C * gamma) ** 2, rho


def test_named_diode_reads_within_two_percent_in_a_warm_box():
    """Bench at 25, reading at 45 degrees, diode named: forward within 2 % from 0.1 to 100 W, the truth inside."""
    read, watts, angle_part, rho = warm("germanium")
    off = read.forward_w / (watts * angle_part) - 1.0
    print(f"forward at 45 degrees: worst {100 * np.abs(off).max():.2f} %, median {100 * np.median(off):+.2f} %")
    assert np.abs(off).max() < 0.02
    assert np.mean((read.rho_low <= rho) & (rho <= read.rho_high)) >= 0.95


def test_law_of_25_degrees_would_be_far_off():
    """What the name is worth: the same counts read as at 25 degrees are off by tens of percent at the low end."""
    rng = np.random.default_rng(9)
    forward, reflected = counts(rng, np.array([0.1]), np.array([0.0]), 45.0)
    cold = Meter(bridge("germanium")).read(forward, reflected, frequency_hz=HZ, samples=SAMPLES, temperature_c=25.0)
    assert abs(cold.forward_w[0] / 0.1 - 1.0) > 0.2


def test_nameless_diode_keeps_the_truth_inside():
    """Without a name the intervals of forward power and rho hold the truth, and are wider than with one."""
    read, watts, _, rho = warm(None)
    named, *_ = warm("germanium")
    assert np.mean((read.forward_low_w <= watts) & (watts <= read.forward_high_w)) >= 0.95
    assert np.mean((read.rho_low <= rho) & (rho <= read.rho_high)) >= 0.95
    assert np.median(read.forward_high_w / read.forward_low_w) > np.median(named.forward_high_w / named.forward_low_w)


@pytest.mark.parametrize("part", ["forward", "reflected"])
def test_simulated_detectors_move_with_temperature_as_the_junction_does(part):
    """At 10 mV, the square-law foot, the detected volts go with RL over RL plus the junction's resistance."""
    celsius = (5.0, 25.0, 45.0)
    ampere, n = {"forward": (200e-9, 1.30), "reflected": (255e-9, 1.31)}[part]
    expected = []
    for at in celsius:
        thermal = 8.617333262e-5 * (at + 273.15)
        warmth = (at + 273.15) / 298.15
        current = ampere * warmth ** (3.0 / n) * np.exp((warmth - 1.0) * 0.67 / (n * thermal))
        junction = n * thermal / current
        expected.append(0.01**2 / (4 * n * thermal) * 350e3 / (350e3 + junction))
    found = [float(np.exp(detector(part, at)(np.log(0.01)))) for at in celsius]
    assert found == pytest.approx(expected, rel=0.01)


def test_second_bench_tells_how_an_unnamed_diode_takes_warmth():
    """No diode named; three powers and two reversed at 45 degrees: forward within 2 % there, the truth inside."""
    read, watts, angle_part, rho = warm(None, 45.0)
    kind = bridge(None, 45.0).diode
    off = read.forward_w / (watts * angle_part) - 1.0
    print(
        f"barrier over ideality {kind.eg_ev / kind.n:.3f} eV (0.67/1.3 = 0.515); worst {100 * np.abs(off).max():.2f} %"
    )
    assert kind.eg_ev / kind.n + kind.xti / kind.n * 0.0264 == pytest.approx(0.67 / 1.3 + 3.0 / 1.3 * 0.0264, abs=0.015)
    assert np.abs(off).max() < 0.02
    assert np.mean((read.rho_low <= rho) & (rho <= read.rho_high)) >= 0.95


def test_second_bench_corrects_a_diode_of_the_wrong_name():
    """Named schottky, but it is germanium: powers at 45 degrees are off, and with a second bench they are not."""
    watts, angle_part = warm("schottky")[1:3]
    wrong = warm("schottky")[0].forward_w / (watts * angle_part) - 1.0
    right = warm("schottky", 45.0)[0].forward_w / (watts * angle_part) - 1.0
    wrong, right = (float(np.abs(off).max()) for off in (wrong, right))
    print(f"worst {100 * wrong:.1f} % by the wrong name, {100 * right:.2f} % with a second bench")
    assert wrong > 0.02
    assert right < 0.01


def test_second_bench_says_in_words_what_it_taught():
    """The fit's notes tell the temperatures and the barrier; the bench's temperature stays the first one's."""
    found = fitted(None, 45.0)
    assert found.bridge.temperature_c == pytest.approx(25.0)
    assert found.bridge.temperature_span_c == pytest.approx(20.0)
    assert "steps from 25 to 45 degrees Celsius: the diodes' barrier over ideality is 0.5" in found.notes[-1]
