"""What a bench sheet must hold to be fitted at all.

One rule: a sheet is refused in words that name the step and what was wanted, before any search begins.
"""

from __future__ import annotations

import numpy as np

from .bench import BenchStep
from .errors import SheetError
from .fit_model import BenchModel
from .slip_names import Slip

__all__ = ["demand_power_in_bands", "demand_usable", "demand_whole", "enough_without"]

#: A detector law has a scale, a load term and a gain.
_LEAST_POWERS = 3


def demand_whole(steps: list[BenchStep]) -> None:
    """Raise SheetError where kinds of steps, or numbers in them, are missing."""
    kinds = [step.kind for step in steps]
    if "dark" not in kinds:
        raise SheetError(
            "the sheet has no dark step; wanted one with the transmitter off, since every law starts at the dark count"
        )
    if kinds.count("power") < _LEAST_POWERS:
        raise SheetError(
            f"the sheet has {kinds.count('power')} power steps; wanted at least 3 at different powers into the dummy "
            "load, as a detector law has a scale, a load term and a gain"
        )
    for number, step in enumerate(steps, 1):
        if step.kind in ("power", "reversed") and not (step.power_w and step.power_w > 0.0):
            raise SheetError(f"step {number} ({step.kind}) has no power_w or volts; wanted the wattmeter's reading")
        if step.kind != "dark" and step.frequency_hz is None:
            raise SheetError(f"step {number} ({step.kind}) has no frequency_hz; wanted the frequency it was taken at")


def demand_usable(steps: list[BenchStep], slips: list[Slip]) -> None:
    """Raise SheetError where the steps without `slips` carry no law, or show no carrier."""
    aside = {step for slip in slips for step in slip.steps}
    left = sum(step.kind == "power" for n, step in enumerate(steps) if n not in aside)
    if left < _LEAST_POWERS:
        said = "; ".join(slip.words for slip in slips)
        raise SheetError(f"{said}; that leaves {left} power steps; wanted at least 3 at different powers")
    dark = float(np.mean([step.forward for step in steps if step.kind == "dark"]))
    for number, step in enumerate(steps):
        if step.kind in ("power", "load") and step.forward <= dark and number not in aside:
            raise SheetError(
                f"step {number + 1} ({step.kind}) has forward {step.forward:g} counts, not above the dark count; was "
                "the transmitter on, and is forward the detector that sees the transmitter?"
            )


def demand_power_in_bands(model: BenchModel) -> None:
    """Raise SheetError where a band has no known power: its gain would hang in the air."""
    power = model.of_kind["power"]
    with_power = set(model.band[power[model.weights[power] > 0.0]].tolist())
    for band, hz in enumerate(model.bands):
        if band not in with_power:
            raise SheetError(
                f"there are steps at {hz / 1e6:.3f} MHz but no power step; wanted at least one with a known power into "
                "the dummy load there, as it gives the band its gain"
            )


def enough_without(model: BenchModel, aside: frozenset[int]) -> bool:
    """Whether the other steps still carry a fit: a dark step, three power steps, and one in every band."""
    power = [at for at in model.of_kind["power"] if at not in aside]
    dark = [at for at in model.of_kind["dark"] if at not in aside]
    return bool(dark) and len(power) >= _LEAST_POWERS and len(set(model.band[power])) == len(model.bands)
