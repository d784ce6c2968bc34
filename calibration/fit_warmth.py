"""A bench at two temperatures: what the second says of the diodes, and its counts as they would be at the first.

One rule: only the junction's current over temperature is learnt from it; law and gains are those of all steps, brought
to one temperature.
Source: the SPICE diode model, in which only Eg/n and XTI/n enter (see `calibration.warmth`).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from .bench import BenchStep
from .bridge import Bridge, band_at
from .directivity import NORMAL_DEVIATE
from .warmth import DIODES, DiodeKind, warmed

__all__ = ["Warmth", "main_steps", "warmth_of"]

Array = npt.NDArray[np.float64]

#: Steps within this much of each other [K] are of one temperature; a bench that spans more than twice of it is of two.
_ONE_TEMPERATURE_K = 5.0
#: A named diode's barrier is taken as known to this [eV, sd]; without a name, to nothing.
_NAMED_SD_EV = 0.05
_NAMELESS = "schottky"
#: Barriers of all that detects are within these [eV, per unit of the ideality of the kind it is told as].
_BARRIERS_EV = (0.2, 1.6)
#: What the rest of a step's comparison with the wattmeter may be off by, beside the wattmeter's scatter.
_LAW_PART = 0.01


@dataclass(frozen=True, slots=True)
class Warmth:
    """What a bench over temperatures gave: steps as at `temperature_c`, the diodes' kind, and a sentence."""

    steps: list[BenchStep]
    temperature_c: float
    diode: DiodeKind
    words: str


def main_steps(steps: Sequence[BenchStep]) -> list[int] | None:
    """Which steps are of the temperature that most are of; None where all are near enough to one."""
    celsius = np.array([step.temperature_c for step in steps])
    if not steps or np.ptp(celsius) <= 2.0 * _ONE_TEMPERATURE_K:
        return None
    beside = np.abs(celsius[:, None] - celsius) <= _ONE_TEMPERATURE_K
    return [int(at) for at in np.flatnonzero(beside[int(np.argmax(beside.sum(axis=1)))])]


def warmth_of(steps: Sequence[BenchStep], main: Sequence[int], bridge: Bridge, scatter: float) -> Warmth:
    """All steps at the temperature of `main`, by what the others say of the diodes.

    bridge: fitted from the main steps alone; scatter: its wattmeter's, relative sd. Power and reversed steps elsewhere
    decide the barrier; where there are none it is the named kind's, or a Schottky diode's.
    """
    start = bridge.diode or DIODES[_NAMELESS]
    darks = _Darks(steps, bridge)
    told = [step for at, step in enumerate(steps) if at not in set(main) and step.kind in ("power", "reversed")]
    told = [step for step in told if step.frequency_hz and band_at(step.frequency_hz, bridge.bands)]

    def off(eg_ev: float) -> Array:
        kind = replace(start, eg_ev=eg_ev)
        sigmas = [_off(darks.step_at_bench(step, kind), bridge) / np.hypot(scatter, _LAW_PART) for step in told]
        prior = [(eg_ev - start.eg_ev) / _NAMED_SD_EV] if bridge.diode else []
        return np.array(sigmas + prior)

    eg_ev, sd_ev = _least(off) if told else (start.eg_ev, _NAMED_SD_EV)
    kind = replace(start, eg_ev=eg_ev)
    celsius = [step.temperature_c for step in steps]
    words = (
        f"steps from {min(celsius):.0f} to {max(celsius):.0f} degrees Celsius: the diodes' barrier over ideality is "
        f"{eg_ev / kind.n:.3f} +- {NORMAL_DEVIATE * sd_ev / kind.n:.3f} eV, by {len(told)} powers"
    )
    brought = [darks.step_at_bench(step, kind) for step in steps]
    return Warmth(brought, bridge.temperature_c, kind, words)


class _Darks:
    """Dark counts by temperature, and steps brought to the bench's."""

    def __init__(self, steps: Sequence[BenchStep], bridge: Bridge) -> None:
        self._bridge = bridge
        self._dark = [step for step in steps if step.kind == "dark"]

    def step_at_bench(self, step: BenchStep, kind: DiodeKind) -> BenchStep:
        """The step with the counts that its waves would have given at the bench's temperature."""
        bridge = self._bridge
        if abs(step.temperature_c - bridge.temperature_c) <= _ONE_TEMPERATURE_K:
            return step
        told = []
        for side, law in (("forward", bridge.forward_law), ("reflected", bridge.reflected_law)):
            warm, factor = warmed(law, kind, bridge.temperature_c, step.temperature_c)
            counts = getattr(step, side) + law.offset - self._at(step.temperature_c, side, law.offset)
            told.append(float(law.counts(warm.square(counts) / factor**2)))
        return replace(step, forward=told[0], reflected=told[1], temperature_c=bridge.temperature_c)

    def _at(self, celsius: float, side: str, known: float) -> float:
        """Dark count at a temperature: of the dark steps taken there, else the bench's."""
        here = [getattr(s, side) for s in self._dark if abs(s.temperature_c - celsius) <= _ONE_TEMPERATURE_K]
        return float(np.mean(here)) if here else known


def _off(step: BenchStep, bridge: Bridge) -> float:
    """ln of power seen over power told, of a step at the bench's temperature."""
    band = band_at(step.frequency_hz or 0.0, bridge.bands)
    assert band is not None
    ahead = step.kind == "power"
    law, gain = (bridge.forward_law, band.gain_forward) if ahead else (bridge.reflected_law, band.gain_reflected)
    seen = float(law.square(step.forward if ahead else step.reflected)) / gain**2
    return float(np.log(max(seen, 1e-12) / (step.power_w or np.nan)))


def _least(off: Callable[[float], Array]) -> tuple[float, float]:
    """The barrier [eV] that leaves least, and its sd by the slopes there."""
    from scipy.optimize import minimize_scalar

    found = minimize_scalar(lambda eg: float(np.sum(off(eg) ** 2)), bounds=_BARRIERS_EV, method="bounded")
    eg, step = float(found.x), 1e-4
    slopes = (off(eg + step) - off(eg - step)) / (2.0 * step)
    return eg, float(1.0 / np.sqrt(np.sum(slopes**2)))
