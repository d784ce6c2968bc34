"""The shelf of bridge files: which of them may be used for the board that talks now.

One rule: no calibration is used for a board it was not made for. Where none fits there is a sentence that says why.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from calibration.dark import DarkKeeper
from calibration.meter import Meter

from .bridge_file import BridgeFile
from .errors import FileError
from .frames import Nameplate

__all__ = ["Calibration", "Shelf"]


@dataclass(frozen=True, slots=True)
class Calibration:
    """A bridge file with the meter that reads by it and the dark count it is read with.

    outdated: what the file says of itself, worked out once, as `caution` is asked for with every reading.
    """

    file: BridgeFile
    meter: Meter
    dark: DarkKeeper
    outdated: str | None = None

    def caution(self, plate: Nameplate | None) -> str | None:
        """What the file itself or the board says against this calibration, in a sentence; None where nothing does."""
        file = self.file
        if self.outdated or plate is None:
            return self.outdated
        if plate.bridge_file_id not in (0, file.fit_id):
            return (
                f"the board was given fit {plate.bridge_file_id:04X}, bridge file {file.source} holds fit "
                f"{file.fit_id or 0:04X}: readings are by the file"
            )
        if file.reference_mv and plate.reference_mv not in (0, file.reference_mv):
            return (
                f"the bridge converts against {plate.reference_mv} mV, bridge file {file.source} was made with "
                f"{file.reference_mv} mV: powers are off unless that is a slip in the file"
            )
        return None


class Shelf:
    """The bridge files given."""

    def __init__(self, files: Sequence[BridgeFile]) -> None:
        """FileError where a file has no fit, or two are for one board."""
        _demand_one_a_board(files)
        self._all = [
            Calibration(file, Meter(file.calibrated()), DarkKeeper(file.calibrated()), file.outdated) for file in files
        ]

    def choose(self, plate: Nameplate | None, checked: bool, nameless: bool) -> tuple[Calibration | None, str | None]:
        """The calibration for a board as known now; else None and why.

        checked: whether its frames carry a check; nameless: whether a nameplate should long have come with them.
        """
        if not self._all:
            return None, "no bridge file: counts only (give one with --bridge, made by `bridgewright fit`)"
        if plate is None:
            return self._before_nameplate(checked, nameless)
        fitting = [one for one in self._all if one.file.device_id in (None, plate.device_id)]
        if not fitting:
            return None, self._strange_board(plate)
        # A file made for this very board goes before one that names none.
        best = max(fitting, key=lambda one: one.file.device_id is not None)
        if best.file.full_scale != plate.full_scale:
            return None, (
                f"counts only: full scale is {plate.full_scale} on the bridge and {best.file.full_scale} in bridge "
                f"file {best.file.source}"
            )
        return best, None

    def _before_nameplate(self, checked: bool, nameless: bool) -> tuple[Calibration | None, str | None]:
        """Plain lines never bring a nameplate, frames do within two seconds: until then no file is known to fit."""
        free = [one for one in self._all if one.file.device_id is None or not checked]
        if (nameless or not checked) and len(free) == 1 and len(self._all) == 1:
            return free[0], None
        if not checked:
            return None, "plain lines do not say which of the bridge files is theirs: counts only (give one --bridge)"
        return None, "waiting for the bridge's nameplate to know which bridge file is its own: counts only until then"

    def _strange_board(self, plate: Nameplate) -> str:
        board = f"board {plate.device_id:08X}" if plate.device_id else "a board that tells no device id"
        made_for = ", ".join(f"{one.file.source} is for {one.file.device_id or 0:08X}" for one in self._all)
        return f"counts only: {board} has no bridge file among those given ({made_for})"


def _demand_one_a_board(files: Sequence[BridgeFile]) -> None:
    """FileError where two files claim one board, or two name none."""
    seen: dict[int | None, str] = {}
    for file in files:
        board = "name no device_id" if file.device_id is None else f"are for board {file.device_id:08X}"
        if file.device_id in seen:
            raise FileError(f"{seen[file.device_id]} and {file.source} both {board}; wanted one bridge file a board")
        seen[file.device_id] = file.source
