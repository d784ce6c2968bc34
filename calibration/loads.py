"""Bench loads: what a builder connects, as a complex reflection at the load side of the bridge.

One rule: no part is ideal. A resistor has a tolerance, an inductance and a capacitance, a line a length and a loss;
they are arguments here, so that a fit can treat them as unknowns with priors.
Sources: D. M. Pozar, Microwave Engineering, ch. 2 (from memory) for reflection behind a line.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .bench import BenchRatings, BenchStep
from .errors import UnitError

__all__ = ["DEFAULT_NH", "DEFAULT_PF", "LoadPart", "load_impedance_ohm", "load_reflection", "part_of"]

#: What a lead and a connector may add unless told [nH, pF] (common practice: a centimetre of lead is 8-10 nH).
DEFAULT_NH = 2.0
DEFAULT_PF = 1.0

Complex = npt.NDArray[np.complex128]

_NUMBER = r"\d+(?:\.\d*)?|\.\d+"
_COMPLEX = re.compile(rf"(?P<r>{_NUMBER})(?:(?P<sign>[+-])(?P<x>{_NUMBER})j)?")


@dataclass(frozen=True, slots=True)
class LoadPart:
    """A load as a part in the drawer, shared by all steps that use it: text, tolerance [%], limits [nH, pF]."""

    text: str
    pct: float
    nh: float
    pf: float


def part_of(step: BenchStep, ratings: BenchRatings) -> LoadPart:
    """The part that load step `step` uses. UnitError where its load cannot be read."""
    text = step.load or ""
    load_impedance_ohm(text)
    pct = ratings.resistor_pct if step.load_pct is None else step.load_pct
    nh = DEFAULT_NH if step.load_nh is None else step.load_nh
    return LoadPart(text, pct, nh, DEFAULT_PF if step.load_pf is None else step.load_pf)


def load_impedance_ohm(text: str) -> complex:
    """Impedance [ohm] of "100", "24.87", "25+3.5j", "open" (infinite) or "short". UnitError for anything else."""
    plain = text.replace(" ", "").lower()
    if plain in ("open", "short"):
        return complex(np.inf if plain == "open" else 0.0)
    match = _COMPLEX.fullmatch(plain)
    if not match:
        raise UnitError(f"load {text!r} is none; wanted ohms like 100 or 24.87, R+Xj like 25+3.5j, open or short")
    reactance = float(f"{match['sign']}{match['x']}") if match["x"] else 0.0
    return complex(float(match["r"]), reactance)


def load_reflection(
    impedance_ohm: npt.ArrayLike,
    frequency_hz: npt.ArrayLike,
    *,
    error: npt.ArrayLike = 0.0,
    nh: npt.ArrayLike = 0.0,
    pf: npt.ArrayLike = 0.0,
    line_deg: npt.ArrayLike = 0.0,
    line_loss_db: npt.ArrayLike = 0.0,
    z0_ohm: float = 50.0,
) -> Complex:
    """Complex reflection of parts at frequencies [Hz], seen through lines; all arguments broadcast.

    error: relative error of the impedance; nh in series, then pf across; line_deg, line_loss_db: one-way length
    [degrees at this frequency] and matched loss [dB] of a z0 line between bridge and load.
    """
    z = np.asarray(impedance_ohm, dtype=complex)
    omega = 2.0 * np.pi * np.asarray(frequency_hz, dtype=float)
    across = 1j * omega * np.asarray(pf, dtype=float) * 1e-12
    isopen = np.isinf(z)
    series = np.where(isopen, 1.0, z) * (1.0 + np.asarray(error)) + 1j * omega * np.asarray(nh) * 1e-9
    # Written with z0/z cleared of its fraction, so that a short needs no division by zero.
    admittance_part = z0_ohm * across
    closed = (series * (1.0 - admittance_part) - z0_ohm) / (series * (1.0 + admittance_part) + z0_ohm)
    gamma = np.where(isopen, (1.0 - admittance_part) / (1.0 + admittance_part), closed)
    loss = 10.0 ** (-np.asarray(line_loss_db, dtype=float) / 10.0)
    return np.asarray(gamma * loss * np.exp(-2j * np.radians(line_deg)))
