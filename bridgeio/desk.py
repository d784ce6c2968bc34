"""The desk between the wire and the readings: which calibration may be used, at which frequency, at what time.

One rule: no calibration is used for a board it was not made for. A board with another full scale or device id is read
as counts only, and a sentence says why.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from calibration.meter import Meter, uncalibrated
from calibration.readings import Readings

from .bridge_file import BridgeFile
from .clock import DeviceClock
from .frames import Conditions, Item, Nameplate, Tallies

__all__ = ["Desk", "TimedReadings"]

Array = npt.NDArray[np.float64]

#: A frequency told by the bridge is believed for this long [s].
_FRESH_S = 10.0


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
        """Read by `files` (matched to boards by device id). FileError where one has no fit.

        frequency_hz: used where the bridge does not tell it [Hz]. samples: readings that each pair of counts is a mean
        of. live: arrivals are times; else the source has none.
        """
        self._meters = [(file, Meter(file.calibrated())) for file in files]
        self.frequency_option_hz = frequency_hz
        self._samples, self._simulated, self._live = samples, simulated, live
        self._told_hz: tuple[float, float] | None = None
        self._clock, self._device_clock = clock, DeviceClock()
        self.nameplate: Nameplate | None = None

    @property
    def frequency_hz(self) -> float | None:
        """The frequency [Hz] that readings are taken at now: the bridge's own word while fresh, else the option."""
        if self._told_hz is not None and (not self._live or self._clock() - self._told_hz[1] <= _FRESH_S):
            return self._told_hz[0]
        return self.frequency_option_hz

    @property
    def bridge_name(self) -> str | None:
        """Name of the calibration in force, else of the board, else None."""
        meter, _ = self._choice(checked=True)
        if meter is not None:
            return meter.bridge.name
        return self.nameplate.name if self.nameplate else None

    @property
    def note(self) -> str | None:
        """Why readings are counts only, in a sentence; None where they are not."""
        return self._choice(checked=True)[1]

    def take(self, items: Sequence[Item], arrival_s: float) -> list[TimedReadings]:
        """Readings of the tallies among `items`, in order; the other items change what follows them."""
        taken = []
        for item in items:
            if isinstance(item, Tallies):
                taken.append(TimedReadings(self._read(item), self._times(item, arrival_s)))
            elif isinstance(item, Nameplate):
                self._meet(item)
            elif isinstance(item, Conditions) and item.frequency_hz:
                self._told_hz = (float(item.frequency_hz), self._clock())
        return taken

    def _meet(self, nameplate: Nameplate) -> None:
        before = self.nameplate
        if before is not None and (before.boot, before.device_id) != (nameplate.boot, nameplate.device_id):
            self._device_clock.restart()
            self._told_hz = None
        self.nameplate = nameplate

    def _read(self, tallies: Tallies) -> Readings:
        meter, _ = self._choice(checked=tallies.checked)
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

    def _choice(self, *, checked: bool) -> tuple[Meter | None, str | None]:
        """The meter for the board as known now; else None and why."""
        if not self._meters:
            return None, "no bridge file: counts only (give one with --bridge, made by `bridgewright fit`)"
        plate = self.nameplate
        if plate is None:
            return self._before_nameplate(checked)
        fitting = [(file, meter) for file, meter in self._meters if file.device_id in (None, plate.device_id)]
        if not fitting:
            return None, f"board {plate.device_id:08X} has no bridge file among those given: counts only"
        # A file made for this very board goes before one that names none.
        file, meter = max(fitting, key=lambda pair: pair[0].device_id is not None)
        if file.full_scale != plate.full_scale:
            return None, (
                f"the bridge counts to {plate.full_scale}, bridge file {file.source} was made for {file.full_scale}: "
                "counts only"
            )
        return meter, None

    def _before_nameplate(self, checked: bool) -> tuple[Meter | None, str | None]:
        """Plain lines never bring a nameplate; frames do within two seconds, so a file for one board waits for it."""
        free = [meter for file, meter in self._meters if file.device_id is None or not checked]
        if len(free) == 1 and len(self._meters) == 1:
            return free[0], None
        return None, "waiting for the bridge's nameplate to know which bridge file is its own: counts only until then"
