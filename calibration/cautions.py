"""What to mind before a bench step: sentences for the builder, most important first, with figures worked out.

One rule: every rating that is named is held to, and what would break one is refused, not only warned of.
Sources: highest voltage on a line sqrt(P S Z0) (D. M. Pozar, Microwave Engineering, ch. 2; from memory); the rest is
common practice of the trade. The program computes no exposure limits.
"""

from __future__ import annotations

import math

import numpy as np

from .bench import BenchStep, step_power_w
from .candidates import CAREFUL_OPEN_W, CAREFUL_RESISTOR_W, KEY_DOWN_S, Limits
from .heat import DUMMY_S, taken_w
from .loads import load_impedance_ohm, load_reflection
from .reflection import line_voltage_v, swr_from_rho

__all__ = ["cautions", "highest_v", "refusal"]

#: From this voltage on it is named on a matched line too [V rms] (common practice for touch).
_HIGH_V = 50.0
#: From this reflection magnitude on all power is taken as returned.
_ALL_RETURNED = 0.99
#: From this part of its short-time energy on a key-down into the dummy load is named with its seconds.
_MUCH_HEAT = 0.1

_UP_FIRST = "Key up, and seen to be up, before a line or a load is changed."
_BRIEFLY = "Open and short: at low power only, or behind a pad; key down briefly."
_LOWEST = "Use the lowest power that reads."
_CLOSED = "Close the box before you key: bare RF conductors burn, at first painlessly."
_EARTH = "Bond the earths of the station; no work on lines with lightning near."
_RULES = (
    "Local rules, your licence and licensed practice govern power and exposure.",
    "This program computes no exposure limits.",
)
_INTERLOCK = "A reading is no safety interlock: it may be stale or wrong."
_OFF = "Transmitter off, and seen to be off: this step needs no power."
_CHOKE = "If the reading moves when the cable is moved, choke the cable first."


def cautions(step: BenchStep, limits: Limits, *, z0_ohm: float = 50.0) -> list[str]:
    """Sentences for `step`, most important first; a refusal, where there is one, leads.

    The step's `power_w` (or volts across the dummy) is the forward power meant; without one the figures are left out.
    UnitError where its load cannot be read.
    """
    if step.kind == "dark":
        return [_OFF, _INTERLOCK]
    watts = step_power_w(step, z0_ohm)
    said = [refusal(step, limits, z0_ohm=z0_ohm)]
    said += [_BRIEFLY if _is_end(step, z0_ohm) else None]
    said += [_resistor(step, limits, z0_ohm), _dummy(step, watts, limits)]
    said += [_UP_FIRST, _voltage(step, watts, z0_ohm), _CLOSED, _LOWEST, _diodes(limits)]
    said += [_CHOKE if step.kind == "load" else None, _EARTH, *_RULES, _INTERLOCK]
    return [sentence for sentence in said if sentence]


def refusal(step: BenchStep, limits: Limits, *, z0_ohm: float = 50.0) -> str | None:
    """Why `step` must not be keyed at its power, in a sentence; None where no named rating forbids it."""
    watts = step_power_w(step, z0_ohm)
    if step.kind == "dark" or watts is None:
        return None
    if limits.max_w is not None and watts > limits.max_w:
        return f"Refused: {_g(watts)} W is above the bridge's max_w, {_g(limits.max_w)} W: its diodes may break down."
    if step.kind == "load":
        return _load_refusal(step, watts, limits, z0_ohm)
    if limits.dummy_w is not None or limits.dummy_j is not None:
        return _dummy_refusal(watts, limits)
    return None


def highest_v(forward_w: float, rho: float, z0_ohm: float = 50.0) -> float:
    """Highest rms voltage [V] on a line with a forward power [W] and a reflection magnitude: sqrt(P S Z0), P the net
    power; written (1 + rho) sqrt(P_forward Z0), it also holds for open and short, where P is 0 and S infinite."""
    if rho < 1.0:
        return float(line_voltage_v(forward_w * (1.0 - rho * rho), swr_from_rho(rho), z0_ohm))
    return (1.0 + rho) * math.sqrt(forward_w * z0_ohm)


def _is_end(step: BenchStep, z0_ohm: float) -> bool:
    """Open, short, or as good as: nothing takes the power."""
    return _rho(step, z0_ohm) >= _ALL_RETURNED


def _rho(step: BenchStep, z0_ohm: float) -> float:
    if step.kind != "load" or step.load is None:
        return 0.0
    return abs(complex(load_reflection(load_impedance_ohm(step.load), step.frequency_hz or 1e6, z0_ohm=z0_ohm)))


def _voltage(step: BenchStep, watts: float | None, z0_ohm: float) -> str | None:
    """High voltage where something comes back: with its figure where the power is told."""
    rho = _rho(step, z0_ohm)
    if rho == 0.0 and (watts is None or highest_v(watts, 0.0, z0_ohm) < _HIGH_V):
        return None
    if watts is None:
        return "High SWR means high voltage: V = sqrt(P S Z0)."
    volts = highest_v(watts, rho, z0_ohm)
    if rho >= _ALL_RETURNED:
        return f"High voltage: {_g(watts)} W forward, all of it returned, is {volts:.0f} V rms."
    swr, net = float(swr_from_rho(rho)), watts * (1.0 - rho * rho)
    return f"Voltage sqrt(P S Z0): {_g(net)} W net at SWR {swr:.3g} is {volts:.0f} V rms, {_peak(volts):.0f} V peak."


def _peak(rms_v: float) -> float:
    return float(np.sqrt(2.0)) * rms_v


def _resistor(step: BenchStep, limits: Limits, z0_ohm: float) -> str | None:
    if step.kind != "load" or _is_end(step, z0_ohm) or step.load is None:
        return None
    if limits.resistor_w is None:
        return f"The rating of the resistors is not told (resistor_w): keep below {CAREFUL_RESISTOR_W:g} W."
    most = limits.resistor_w / max(1e-12, taken_w(1.0, step.load, z0_ohm))
    return f"The {step.load} ohm load stands {_g(limits.resistor_w)} W, so at most {_g(most)} W forward."


def _load_refusal(step: BenchStep, watts: float, limits: Limits, z0_ohm: float) -> str | None:
    if _is_end(step, z0_ohm):
        most = max(CAREFUL_OPEN_W, limits.power_min_w or 0.0)
        return f"Refused: {step.load} at {_g(watts)} W; wanted at most {_g(most)} W." if watts > most else None
    into = taken_w(watts, step.load, z0_ohm)
    if limits.resistor_w is None or into <= limits.resistor_w * (1.0 + 1e-9):
        return None
    return f"Refused: {_g(into)} W into the {step.load} ohm load; it stands {_g(limits.resistor_w)} W (resistor_w)."


def _dummy_j(limits: Limits) -> float | None:
    if limits.dummy_j is not None:
        return limits.dummy_j
    return None if limits.dummy_w is None else DUMMY_S * limits.dummy_w


def _dummy_refusal(watts: float, limits: Limits) -> str | None:
    """More than even a brief key-down may put into a cold dummy load."""
    joules = _dummy_j(limits)
    if joules is None or watts <= (limits.dummy_w or 0.0) or watts * KEY_DOWN_S <= joules:
        return None
    return (
        f"Refused: {_g(watts)} W for {KEY_DOWN_S:g} s is {_g(watts * KEY_DOWN_S)} J; the dummy load stands "
        f"{_g(joules)} J."
    )


def _dummy(step: BenchStep, watts: float | None, limits: Limits) -> str | None:
    """What goes into the dummy load; a hot one drifts."""
    if step.kind == "load":
        return None
    joules = _dummy_j(limits)
    if watts is None:
        return "Mind the dummy load's rating; a hot one's resistance drifts."
    if joules is None:
        return f"Dummy load: {_g(watts * KEY_DOWN_S)} J in {KEY_DOWN_S:g} s; its rating is not told. Hot, it drifts."
    if watts * KEY_DOWN_S < _MUCH_HEAT * joules:
        return None
    if limits.dummy_w is not None and watts <= limits.dummy_w:
        return f"Dummy load: {_g(watts)} W of the {_g(limits.dummy_w)} W it stands. Hot, its resistance drifts."
    return f"Dummy load: {_g(watts)} W for {joules / watts:.0f} s is all it stands. Hot, its resistance drifts."


def _diodes(limits: Limits) -> str | None:
    if limits.max_w is None:
        return "The bridge's max_w is not told: the diodes see twice the peak RF voltage."
    return f"At most {_g(limits.max_w)} W through the bridge (max_w): its diodes stand no more."


def _g(value: float) -> str:
    """A figure for a sentence: three digits, no exponent where people would not write one."""
    return f"{value:.0f}" if 1000.0 <= abs(value) < 1e6 else f"{value:.3g}"
