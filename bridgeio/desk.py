"""The desk between the wire and the readings: which calibration may be used, at which frequency, at what time.

One rule: no calibration is used for a board it was not made for. A board with another full scale or device id is read
as counts only, and a sentence says why.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from calibration.meter import Meter, uncalibrated
from calibration.readings import Readings

from .bridge_file import BridgeFile
from .clock import DeviceClock
from .errors import FileError
from .frames import Conditions, Item, Nameplate, Tallies

__all__ = ["Desk", "TimedReadings"]

Array = npt.NDArray[np.float64]

#: A frequency told by the bridge is believed for this long [s].
_FRESH_S = 10.0
#: Nameplates come every 2 s: a bridge that has talked this long without one sends none [ms].
_NAMELESS_MS = 4500


@dataclass(frozen=True, slots=True)
class TimedReadings:
    """Readings of length n and when they were taken, `time_s` [s since 1970, n]; NaN where the source has no time."""

    readings: Readings
    time_s: Array


class Desk:
    """Turns items of the wire into timed readings. Not for several threads at once."""

    def __init__(
        self,
        files: Sequence[BridgeFile] = (),
        *,
        frequency_hz: float | None = None,
        samples: int = 1,
        simulated: bool = False,
        live: bool = True,
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        """Read by `files` (matched to boards by device id). FileError where one has no fit, or two are for one board.

        frequency_hz: used where the bridge does not tell it [Hz]. samples: readings that each pair of counts is a mean
        of. live: arrivals are times; else the source has none.
        """
        _demand_one_a_board(files)
        self._meters = [(file, Meter(file.calibrated())) for file in files]
        self.frequency_option_hz = frequency_hz
        self._samples, self._simulated, self._live = samples, simulated, live
        self._told_hz: tuple[float, float] | None = None
        self._clock, self._device_clock, self._device_s = clock, DeviceClock(), 0.0
        self.nameplate: Nameplate | None = None
        self._checked, self._nameless = False, False
        self._since_ms: int | None = None

    @property
    def frequency_hz(self) -> float | None:
        """The frequency [Hz] that readings are taken at now: the bridge's own word while fresh, else the option."""
        if self._told_hz is not None and abs(self._now_s() - self._told_hz[1]) <= _FRESH_S:
            return self._told_hz[0]
        return self.frequency_option_hz

    @property
    def bridge_name(self) -> str | None:
        """Name of the calibration in force, else of the board, else None."""
        meter, _ = self._choice(self._checked)
        if meter is not None:
            return meter.bridge.name
        return self.nameplate.name if self.nameplate else None

    @property
    def note(self) -> str | None:
        """Why readings are counts only, in a sentence; None where they are not."""
        return self._choice(self._checked)[1]

    @property
    def caution(self) -> str | None:
        """What the board says against the calibration in force, in a sentence; None where it says nothing."""
        plate = self.nameplate
        meter, _ = self._choice(self._checked)
        file = next((file for file, own in self._meters if own is meter), None)
        if plate is None or file is None:
            return None
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

    def take(self, items: Sequence[Item], arrival_s: float) -> Iterator[TimedReadings]:
        """Readings of the tallies among `items`, in order; the other items change what follows them.

        One batch at a time: between two, the desk's properties hold for the batch just given.
        """
        for item in items:
            if isinstance(item, Tallies):
                self._listen(item)
                yield TimedReadings(self._read(item), self._times(item, arrival_s))
            elif isinstance(item, Nameplate):
                self._meet(item)
            elif isinstance(item, Conditions):
                self._device_s = item.ms / 1000.0
                if item.frequency_hz:
                    self._told_hz = (float(item.frequency_hz), self._now_s())

    def _now_s(self) -> float:
        """Our clock; where arrivals are no times, the bridge's."""
        return self._clock() if self._live else self._device_s

    def _meet(self, nameplate: Nameplate) -> None:
        before = self.nameplate
        if before is not None and (before.boot, before.device_id) != (nameplate.boot, nameplate.device_id):
            self._device_clock.restart()
            self._told_hz = None
        self.nameplate = nameplate

    def _listen(self, tallies: Tallies) -> None:
        """Note whether what comes is checked, and whether a nameplate should long have come with it."""
        self._checked = tallies.checked
        if tallies.has_ms:
            self._device_s = float(tallies.ms[-1]) / 1000.0
        if self.nameplate is None and tallies.checked and tallies.has_ms:
            last_ms = int(tallies.ms[-1])
            if self._since_ms is None or last_ms < self._since_ms:
                self._since_ms = int(tallies.ms[0])
            self._nameless = self._nameless or last_ms - self._since_ms > _NAMELESS_MS

    def _read(self, tallies: Tallies) -> Readings:
        meter, _ = self._choice(tallies.checked)
        if meter is None:
            return uncalibrated(tallies.forward, tallies.reflected, checked=tallies.checked, simulated=self._simulated)
        return meter.read(
            tallies.forward,
            tallies.reflected,
            frequency_hz=self.frequency_hz,
            samples=self._samples,
            wire_flags=tallies.flags,
            checked=tallies.checked,
            simulated=self._simulated,
        )

    def _times(self, tallies: Tallies, arrival_s: float) -> Array:
        if not self._live:
            return np.full(len(tallies), np.nan)
        if not tallies.has_ms:
            return np.full(len(tallies), arrival_s)
        return self._device_clock.utc(tallies.ms, arrival_s)

    def _choice(self, checked: bool) -> tuple[Meter | None, str | None]:
        """The meter for the board as known now; else None and why."""
        if not self._meters:
            return None, "no bridge file: counts only (give one with --bridge, made by `bridgewright fit`)"
        plate = self.nameplate
        if plate is None:
            return self._before_nameplate(checked)
        fitting = [(file, meter) for file, meter in self._meters if file.device_id in (None, plate.device_id)]
        if not fitting:
            return None, self._strange_board(plate)
        # A file made for this very board goes before one that names none.
        file, meter = max(fitting, key=lambda pair: pair[0].device_id is not None)
        if file.full_scale != plate.full_scale:
            return None, (
                f"counts only: full scale is {plate.full_scale} on the bridge and {file.full_scale} in bridge file "
                f"{file.source}"
            )
        return meter, None

    def _before_nameplate(self, checked: bool) -> tuple[Meter | None, str | None]:
        """Plain lines never bring a nameplate, frames do within two seconds: until then no file is known to fit."""
        free = [meter for file, meter in self._meters if file.device_id is None or not checked]
        if (self._nameless or not checked) and len(free) == 1 and len(self._meters) == 1:
            return free[0], None
        if not checked:
            return None, "plain lines do not say which of the bridge files is theirs: counts only (give one --bridge)"
        return None, "waiting for the bridge's nameplate to know which bridge file is its own: counts only until then"

    def _strange_board(self, plate: Nameplate) -> str:
        board = f"board {plate.device_id:08X}" if plate.device_id else "a board that tells no device id"
        made_for = ", ".join(f"{file.source} is for {file.device_id or 0:08X}" for file, _ in self._meters)
        return f"counts only: {board} has no bridge file among those given ({made_for})"


def _demand_one_a_board(files: Sequence[BridgeFile]) -> None:
    """FileError where two files claim one board, or two name none."""
    seen: dict[int | None, str] = {}
    for file in files:
        board = "name no device_id" if file.device_id is None else f"are for board {file.device_id:08X}"
        if file.device_id in seen:
            raise FileError(f"{seen[file.device_id]} and {file.source} both {board}; wanted one bridge file a board")
        seen[file.device_id] = file.source
