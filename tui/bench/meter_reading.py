"""What the builder reads at the dummy load: watts, or volts where there is no wattmeter.

One rule: a step keeps what was read, in the unit it was read in.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Literal

from calibration.bench import BenchStep
from calibration.units import power_from_volts_w

__all__ = ["UNITS", "MeterReading", "Unit", "reading_of"]

Unit = Literal["W", "V rms", "V peak"]

#: In the order in which a key goes through them.
UNITS: tuple[Unit, ...] = ("W", "V rms", "V peak")


@dataclass(frozen=True, slots=True)
class MeterReading:
    """What was read: watts, or volts across the dummy load."""

    value: float
    unit: Unit = "W"

    def power_w(self, z0_ohm: float) -> float:
        """The power [W] it says."""
        if self.unit == "W":
            return self.value
        return power_from_volts_w(self.value, self.unit.removeprefix("V "), z0_ohm)

    def into(self, step: BenchStep) -> BenchStep:
        """The step with it, as it was read."""
        if self.unit == "W":
            return replace(step, power_w=self.value)
        return replace(step, power_w=None, volts=self.value, volts_kind=self.unit.removeprefix("V "))


def reading_of(text: str, unit: Unit) -> MeterReading:
    """A reading as typed: "5.03", "5,03 W", "15.8 rms", "22 V peak"; `unit` where none is typed. ValueError else."""
    words = text.strip().lower().replace(",", ".").split()
    told = "".join(words[1:]).lstrip("v")
    units: dict[str, Unit] = {"": unit, "w": "W", "watts": "W", "rms": "V rms", "peak": "V peak"}
    try:
        value = float(words[0])
    except (IndexError, ValueError):
        value = math.nan
    if not (math.isfinite(value) and value > 0.0) or told not in units:
        raise ValueError(f"{text.strip()[:20]!r} is no reading; wanted like 5.03, 15.8 rms or 22.3 peak")
    return MeterReading(value, units[told])
