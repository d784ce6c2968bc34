"""What a bench stands on: the sheet's own numbers, and whether the board before it is the sheet's.

One rule: nothing here is guessed; what the sheet does not say is None.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

from calibration.bench import BenchStep
from calibration.candidates import Candidate, Limits
from calibration.steady import Pair

if TYPE_CHECKING:
    from bridgeio.bridge_file import BridgeFile
    from bridgeio.frames import Nameplate

__all__ = ["Ground", "another_board", "draft"]


@dataclass(frozen=True, slots=True)
class Ground:
    """What a run stands on: the sheet's full scale, Z0 [ohm], ratings, and the dark counts it has (None: not yet)."""

    full_scale: float
    z0_ohm: float = 50.0
    limits: Limits = field(default_factory=Limits)
    dark: Pair | None = None
    dark_sd: Pair | None = None

    def with_dark_of(self, steps: tuple[BenchStep, ...]) -> Ground:
        """The same with the newest dark step among `steps`."""
        newest = next((step for step in reversed(steps) if step.kind == "dark"), None)
        if newest is None:
            return replace(self, dark=None, dark_sd=None)
        sds = (newest.forward_sd, newest.reflected_sd)
        return replace(self, dark=(newest.forward, newest.reflected), dark_sd=sds)


def draft(plan: Candidate) -> BenchStep:
    """The step that a plan would become, without counts."""
    own = {"frequency_hz": plan.frequency_hz, "load": plan.load, "line_deg": plan.line_deg}
    return BenchStep(plan.kind, 0.0, 0.0, power_w=plan.power_w, **own)  # type: ignore[arg-type]


def another_board(file: BridgeFile, plate: Nameplate) -> str:
    """Why no step of this board may go into this sheet, in a sentence; "" where they belong together."""
    if file.device_id is not None and plate.device_id and plate.device_id != file.device_id:
        return f"this is board {plate.device_id:08X}, the sheet is of {file.device_id:08X}: no step is taken"
    if plate.full_scale != file.full_scale:
        return f"full scale is {plate.full_scale} on the board and {file.full_scale} in the sheet: no step is taken"
    return ""
