"""The desk between the wire and the readings: by which calibration, at which frequency, temperature and time.

One rule: the bridge's own word on itself goes before what the user said, and both only while they are fresh.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from calibration.meter import uncalibrated
from calibration.readings import Readings
from calibration.smoothing import Averager, Samples

from .bridge_file import BridgeFile
from .clock import DeviceClock
from .frames import FLAG_DROPPED, Conditions, Item, Nameplate, Tallies
from .shelf import Calibration, Shelf

__all__ = ["FRESH_S", "NAMELESS_MS", "SAME_WARMTH_S", "Desk", "Reading", "TimedReadings"]

Array = npt.NDArray[np.float64]

#: A frequency told by the bridge is believed for this long [s].
FRESH_S = 10.0
#: Nameplates come every 2 s: a bridge that has talked this long without one sends none [ms].
NAMELESS_MS = 4500
#: A temperature told by the bridge is believed for this long [s]: a box has a slow one.
SAME_WARMTH_S = 60.0
_NO_TEMPERATURE = -32768
#: Between two tallies so many frames of other kinds may stand; more missing numbers than that are a gap.
_OTHER_FRAMES = 3


@dataclass(frozen=True, slots=True)
class TimedReadings:
    """Readings of length n and when they were taken, `time_s` [s since 1970, n]; NaN where the source has no time.

    averaged: how many tallies each is made of, int[n].
    """

    readings: Readings
    time_s: Array
    averaged: npt.NDArray[np.intp]


@dataclass(frozen=True, slots=True)
class Reading:
    """How counts are read: what the user chose.

    frequency_hz: used where the bridge does not tell it [Hz]. samples: readings that each pair of counts is a mean
    of. average: tallies to one reading. hard: bounds in place of 95 % intervals. live_dark: the running dark count is
    the zero; else an interval allows for it where it has moved.
    """

    frequency_hz: float | None = None
    samples: int = 1
    average: int = 1
    hard: bool = False
    live_dark: bool = False


class Desk:
    """Turns items of the wire into timed readings. Not for several threads at once."""

    def __init__(
        self,
        files: Sequence[BridgeFile] = (),
        how: Reading | None = None,
        *,
        simulated: bool = False,
        live: bool = True,
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        """Read by `files` (matched to boards by device id). FileError where one has no fit, or two are for one board.

        live: arrivals are times; else the source has none.
        """
        self._shelf = Shelf(files)
        self._how = how or Reading()
        self.frequency_option_hz = self._how.frequency_hz
        self._simulated, self._live = simulated, live
        self._told_hz: tuple[float, float] | None = None
        self._told_c: tuple[float, float] | None = None
        self._clock, self._device_clock, self._device_s = clock, DeviceClock(), 0.0
        self.nameplate: Nameplate | None = None
        self._checked, self._nameless = False, False
        self._since_ms: int | None = None
        self._before: Readings | None = None
        self._averager = Averager(self._how.average) if self._how.average > 1 else None
        self._next_seq: int | None = None
        # A bridge that has sent nameplates owes one after a loss.
        self._owes_plate = False

    @property
    def frequency_hz(self) -> float | None:
        """The frequency [Hz] that readings are taken at now: the bridge's own word while fresh, else the option."""
        if self._told_hz is not None and abs(self._now_s() - self._told_hz[1]) <= FRESH_S:
            return self._told_hz[0]
        return self.frequency_option_hz

    @property
    def temperature_c(self) -> float | None:
        """The box's temperature [degrees Celsius] as the bridge told it within the last minute."""
        if self._told_c is not None and abs(self._now_s() - self._told_c[1]) <= SAME_WARMTH_S:
            return self._told_c[0]
        return None

    @property
    def dark(self) -> tuple[float, float] | None:
        """The running dark counts where they have left the calibration's zero, else None."""
        chosen, _ = self._choice(self._checked)
        return None if chosen is None else chosen.dark.moved

    def use_live_dark(self, live: bool) -> None:
        """Read with the running dark count as zero from now on, or with the calibration's."""
        self._how = replace(self._how, live_dark=live)

    @property
    def waiting(self) -> int:
        """Tallies that wait for more to make an average with."""
        return 0 if self._averager is None else self._averager.waiting

    @property
    def bridge_name(self) -> str | None:
        """Name of the calibration in force, else of the board, else None."""
        chosen, _ = self._choice(self._checked)
        if chosen is not None:
            return chosen.meter.bridge.name
        return self.nameplate.name if self.nameplate else None

    @property
    def calibration(self) -> Calibration | None:
        """The calibration in force: bridge file, meter and running dark count; None while readings are counts only."""
        return self._choice(self._checked)[0]

    @property
    def clock_ppm(self) -> float | None:
        """How much faster than ours the bridge's clock is [millionths]; None where that is not known yet."""
        return self._device_clock.ppm

    @property
    def note(self) -> str | None:
        """Why readings are counts only, in a sentence; None where they are not."""
        return self._choice(self._checked)[1]

    @property
    def caution(self) -> str | None:
        """What the board says against the calibration in force, in a sentence; None where it says nothing."""
        chosen, _ = self._choice(self._checked)
        return None if chosen is None else chosen.caution(self.nameplate)

    def take(self, items: Sequence[Item], arrival_s: float) -> Iterator[TimedReadings]:
        """Readings of the tallies among `items`, in order; the other items change what follows them.

        One batch at a time: between two, the desk's properties hold for the batch just given.
        """
        for item in items:
            if isinstance(item, Tallies):
                self._listen(item)
                batch = self._read(item, self._times(item, arrival_s))
                if self._averager is None:
                    yield batch
                else:
                    yield from self._averages(self._averager, item, batch)
            elif isinstance(item, Nameplate):
                self._meet(item)
            elif isinstance(item, Conditions):
                self._hear(item)

    def reopened(self) -> None:
        """The source was lost and is back, perhaps with another board: counts only until a nameplate has come.

        A bridge that never sent one goes on at once.
        """
        self._owes_plate = self._owes_plate or self.nameplate is not None
        self._nameless = self._nameless and not self._owes_plate
        self.nameplate = self._since_ms = None
        self._told_hz = self._told_c = self._before = self._next_seq = None
        # What waits is of the old board and may not be read by the new one's calibration.
        self._averager = None if self._averager is None else Averager(self._how.average)
        self._device_clock.restart()

    def _hear(self, conditions: Conditions) -> None:
        self._device_s = conditions.ms / 1000.0
        if conditions.frequency_hz:
            self._told_hz = (float(conditions.frequency_hz), self._now_s())
        if conditions.temperature_c100 != _NO_TEMPERATURE:
            self._told_c = (conditions.temperature_c100 / 100.0, self._now_s())

    def _now_s(self) -> float:
        """Our clock; where arrivals are no times, the bridge's."""
        return self._clock() if self._live else self._device_s

    def _meet(self, nameplate: Nameplate) -> None:
        before = self.nameplate
        if before is not None and (before.boot, before.device_id) != (nameplate.boot, nameplate.device_id):
            self._device_clock.restart()
            self._told_hz = self._told_c = self._before = self._next_seq = None
        self.nameplate, self._owes_plate = nameplate, False

    def _listen(self, tallies: Tallies) -> None:
        """Note whether what comes is checked, and whether a nameplate should long have come with it."""
        self._checked = tallies.checked
        if tallies.has_ms:
            self._device_s = float(tallies.ms[-1]) / 1000.0
        if self.nameplate is None and not self._owes_plate and tallies.checked and tallies.has_ms:
            last_ms = int(tallies.ms[-1])
            if self._since_ms is None or last_ms < self._since_ms:
                self._since_ms = int(tallies.ms[0])
            self._nameless = self._nameless or last_ms - self._since_ms > NAMELESS_MS

    def _read(self, tallies: Tallies, time_s: Array) -> TimedReadings:
        counts = tallies.forward, tallies.reflected
        readings = self._of_counts(*counts, tallies.checked, self._how.samples, tallies.flags, self._before)
        self._before = readings
        chosen, _ = self._choice(tallies.checked)
        if chosen is not None:
            chosen.dark.push(*counts, self._now_s())
        return TimedReadings(readings, time_s, np.ones(len(tallies), dtype=np.intp))

    def _of_counts(
        self,
        forward: Array,
        reflected: Array,
        checked: bool,
        samples: npt.ArrayLike,
        wire_flags: npt.ArrayLike,
        after: Readings | None = None,
    ) -> Readings:
        chosen, _ = self._choice(checked)
        if chosen is None:
            return uncalibrated(forward, reflected, checked=checked, simulated=self._simulated)
        live = self._how.live_dark
        return chosen.meter.read(
            forward,
            reflected,
            frequency_hz=self.frequency_hz,
            samples=samples,
            wire_flags=wire_flags,
            temperature_c=self.temperature_c,
            zero=chosen.dark.moved if live else None,
            moved_zero=None if live else chosen.dark.moved,
            after=after,
            hard=self._how.hard,
            checked=checked,
            simulated=self._simulated,
        )

    def _averages(self, averager: Averager, tallies: Tallies, batch: TimedReadings) -> Iterator[TimedReadings]:
        """Readings of the groups that these tallies close."""
        readings = batch.readings
        run = Samples(
            forward=tallies.forward,
            reflected=tallies.reflected,
            wire_flags=tallies.flags,
            time_s=batch.time_s,
            carrier=~readings.has("no-carrier"),
            clipped=readings.has("clipped"),
            gap_before=self._gaps(tallies),
            kind=readings.frequency_hz,
        )
        groups = averager.push(run)
        if groups:
            yield self._grouped(groups, tallies.checked)

    def _grouped(self, groups: list[Samples], checked: bool) -> TimedReadings:
        """One reading a group: its counts are means, its powers the means of its powers."""
        sizes = np.array([len(group) for group in groups], dtype=np.intp)
        means = np.array([(group.forward.mean(), group.reflected.mean()) for group in groups]).T
        chosen, _ = self._choice(checked)
        counts = means
        if chosen is not None:
            zero = chosen.dark.moved if self._how.live_dark else None
            told = [
                chosen.meter.mean_counts(g.forward, g.reflected, temperature_c=self.temperature_c, zero=zero)
                for g in groups
            ]
            counts = np.array(told).T
        flags = np.array([np.bitwise_or.reduce(group.wire_flags) for group in groups])
        readings = self._of_counts(counts[0], counts[1], checked, sizes * self._how.samples, flags)
        readings.forward_counts, readings.reflected_counts = means
        return TimedReadings(readings, np.array([group.time_s[-1] for group in groups]), sizes)

    def _gaps(self, tallies: Tallies) -> npt.NDArray[np.bool_]:
        """Where frames are missing before a tally, by its sequence number; other kinds of frame take numbers too."""
        if not tallies.has_ms:
            return np.zeros(len(tallies), dtype=bool)
        seq = tallies.seq.astype(np.int64)
        before = np.concatenate([[seq[0] - 1 if self._next_seq is None else self._next_seq - 1], seq[:-1]])
        self._next_seq = int(seq[-1]) + 1
        skipped = (seq - before - 1) & 0xFF
        return np.asarray((skipped > _OTHER_FRAMES) | (tallies.flags & FLAG_DROPPED != 0))

    def _times(self, tallies: Tallies, arrival_s: float) -> Array:
        if not self._live:
            return np.full(len(tallies), np.nan)
        if not tallies.has_ms:
            return np.full(len(tallies), arrival_s)
        return self._device_clock.utc(tallies.ms, arrival_s)

    def _choice(self, checked: bool) -> tuple[Calibration | None, str | None]:
        return self._shelf.choose(self.nameplate, checked, self._nameless)
