"""Bench steps: what was connected, what the wattmeter said, what the detectors counted.

One rule: a step is what was measured and is never altered by a fit.
"""

from __future__ import annotations

from dataclasses import dataclass

from .units import power_from_volts_w

__all__ = ["STEP_KINDS", "BenchRatings", "BenchStep", "step_power_w"]

#: dark: transmitter off. power: dummy load, known power. reversed: bridge turned end for end, dummy load,
#: known power. load: a known mismatch, power not known.
STEP_KINDS = ("dark", "power", "reversed", "load")


@dataclass(frozen=True, slots=True)
class BenchStep:
    """One bench measurement. Counts are means over `samples` readings, sd the scatter of single readings."""

    kind: str
    forward: float
    reflected: float
    frequency_hz: float | None = None
    power_w: float | None = None
    power_pct: float | None = None
    volts: float | None = None
    volts_kind: str | None = None
    dummy_ohm: float | None = None
    load: str | None = None
    load_pct: float | None = None
    load_nh: float | None = None
    load_pf: float | None = None
    line_deg: float = 0.0
    line_loss_db: float | None = None
    forward_sd: float = 1.0
    reflected_sd: float = 1.0
    samples: int = 1
    temperature_c: float = 25.0


@dataclass(frozen=True, slots=True)
class BenchRatings:
    """How far the builder's own references can be believed, all 95 %."""

    reference_pct: float = 5.0
    reference_full_scale_w: float | None = None
    dummy_return_loss_db: float = 30.0
    resistor_pct: float = 1.0


def step_power_w(step: BenchStep, z0_ohm: float = 50.0) -> float | None:
    """The forward power [W] that a step was told, by watts or by volts (rms unless told) across the dummy, or None."""
    if step.power_w is not None or step.volts is None:
        return step.power_w
    return power_from_volts_w(step.volts, step.volts_kind or "rms", step.dummy_ohm or z0_ohm)
