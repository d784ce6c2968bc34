"""Benches of random bridges whose truth is known, by plain wave arithmetic of their own: exact powers of a Bessel law.

Nothing of the fit is used: I0 by scipy, couplers as complex waves, parts as impedances.
"""

from dataclasses import dataclass, replace

import numpy as np
from scipy.optimize import brentq
from scipy.special import ive

from calibration.bench import BenchRatings, BenchStep

FULL_SCALE, SAMPLES, NOISE = 65520, 200, 3.0
RATINGS = BenchRatings(5.0, None, 36.0, 1.0)
OHMS = {"25": 25.0, "100": 100.0, "16.67": 16.67, "150": 150.0, "open": 1e9, "short": 1e-6}
DIRECT = tuple((load, 0.0) for load in OHMS)
#: Loads on either side and at right angles, directly and behind line: what identifies both leaks.
WITH_LINE = (*DIRECT, *((load, 45.0) for load in ("25", "100", "open", "short")))


@dataclass(frozen=True)
class Truth:
    """One random bridge: laws (dark, scale, load term) of both sides, gains, complex d, c and leak a band."""

    laws: tuple[tuple[float, float, float], tuple[float, float, float]]
    gains: tuple[float, float]
    d: np.ndarray
    c: np.ndarray
    leak: np.ndarray


def wave(size, angle):
    """A complex number."""
    return size * np.exp(1j * angle)


def random_truth(chance, bands):
    """Directivity 25-32 dB, own match of 24-34 dB, so that c is leak less match."""
    size = len(bands)
    d = wave(10 ** (-chance.uniform(25, 32, size) / 20), chance.uniform(0, 2 * np.pi, size))
    leak = wave(10 ** (-chance.uniform(25, 32, size) / 20), chance.uniform(0, 2 * np.pi, size))
    match = wave(10 ** (-chance.uniform(24, 34, size) / 20), chance.uniform(0, 2 * np.pi, size))
    laws = tuple(
        (chance.uniform(40, 90), 320 * np.exp(0.1 * chance.standard_normal()), 2.2 * np.exp(0.2 * side))
        for side in chance.standard_normal(2)
    )
    gain = 7.0 * np.exp(0.1 * chance.standard_normal())
    return Truth(laws, (gain, gain * np.exp(0.03 * chance.standard_normal())), d, leak - match, leak)


def counts_of(law, x):
    """Counts of a diode detector at a wave of x n Vt peak: ln I0(x) = u + ln(1 + u/b)."""
    dark, scale, load_term = law
    level = float(np.log(ive(0, x)) + x)
    if level <= 0.0:
        return dark
    return dark + scale * brentq(lambda u: u + np.log1p(u / load_term) - level, 0.0, level + 1e-12)


def steps_of(truth, chance, bands, loads=WITH_LINE, meter=1.02, scatter=0.007):
    """Dark, powers, reversed powers and loads in every band, with noise, and parts within their tolerance."""
    found = []
    ohms = {load: ohm * (1 + 0.008 * chance.uniform(-1, 1)) for load, ohm in OHMS.items()}
    nh, pf = chance.uniform(0.5, 1.5) * 1e-9, chance.uniform(0.2, 0.8) * 1e-12
    degrees = 45.0 + 0.4 * chance.standard_normal()
    loss = 10 ** (-chance.uniform(0.0, 0.05) / 10)

    def taken(kind, waves, **told):
        mean = [counts_of(law, x) + NOISE * chance.standard_normal() / np.sqrt(SAMPLES) for law, x in waves]
        found.append(BenchStep(kind, *mean, forward_sd=NOISE, reflected_sd=NOISE, samples=SAMPLES, **told))

    def look(band, gamma, watts):
        root = np.sqrt(watts)
        forward = truth.gains[0] * root * abs(1 + truth.c[band] * gamma)
        return (truth.laws[0], forward), (truth.laws[1], truth.gains[1] * root * abs(gamma + truth.d[band]))

    def said(watts):
        return float(f"{watts * meter * (1 + scatter * chance.standard_normal()):.4g}")

    taken("dark", ((truth.laws[0], 0.0), (truth.laws[1], 0.0)))
    for band, hz in enumerate(bands):
        dummy = wave(10 ** (-38 / 20), chance.uniform(0, 2 * np.pi))
        for watts in (0.1, 0.3, 1, 3, 10, 30, 60, 100) if band == 0 else (0.5, 5, 50):
            taken("power", look(band, dummy, watts), frequency_hz=hz, power_w=said(watts))
        for watts in (0.2, 2, 20, 80) if band == 0 else (10,):
            root, own_loss = np.sqrt(watts), 10 ** (0.05 / 20)
            forward = truth.gains[0] * root * abs(truth.leak[band] + dummy)
            waves = (truth.laws[0], forward), (truth.laws[1], truth.gains[1] * root * own_loss)
            taken("reversed", waves, frequency_hz=hz, power_w=said(watts))
        for load, line in loads:
            z = ohms[load] + 2j * np.pi * hz * nh
            y = 1 / z + 2j * np.pi * hz * pf
            gamma = (1 / y - 50) / (1 / y + 50)
            gamma *= loss * wave(1.0, -2 * np.radians(degrees)) if line else 1.0
            watts = 1.0 if load in ("open", "short") else 5.0
            taken("load", look(band, gamma, watts), frequency_hz=hz, load=load, line_deg=line)
    return found


def exchanged(step):
    """The step with forward and reflected exchanged."""
    return replace(
        step,
        forward=step.reflected,
        reflected=step.forward,
        forward_sd=step.reflected_sd,
        reflected_sd=step.forward_sd,
    )
