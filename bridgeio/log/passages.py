"""A journal as passages: tallies one after the other that are read alike, by which calibration and at what temperature.

One rule: what a live reading would have known is known here, and no more: a bridge's own word holds while it is fresh,
and no calibration is used for a board it was not made for.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from bridgeio.bridge_file import BridgeFile, load_bridge_file, parse_bridge_file
from bridgeio.desk import NAMELESS_MS, SAME_WARMTH_S
from bridgeio.errors import FileError
from bridgeio.journal import Counts, Journal, Mark, Stretch
from bridgeio.shelf import Calibration, Shelf
from bridgeio.simulator import BRIDGE_FILE

from .told import Told, alike, latest

__all__ = ["Passage", "Passages"]

Array = npt.NDArray[np.float64]
Places = npt.NDArray[np.intp]
Micros = npt.NDArray[np.int64]

_US = 1_000_000
#: What is told of a minute ago still counts: so much before the time asked for is looked at too [us].
_RUN_UP_US = int(SAME_WARMTH_S * _US)
#: Marks after which another board may be there.
_LOSSES = ("link looking", "link lost")
#: A mark of this text repeats what a conditions frame said, which has a freshness of its own.
_REPEATED = "told by the bridge"
#: A frequency told so soon after the start holds from the start on [us].
_AT_START_US = 1 * _US
#: Before all times [us], and far enough from the end that a difference still fits.
_NEVER = -(1 << 60)
#: What is known of the board: its nameplate, that it sends none, or nothing yet.
_NAMED, _NAMELESS, _WAITING = 0, 1, 2


@dataclass(frozen=True, slots=True)
class Passage:
    """n tallies of one stretch that are read alike.

    calibration: None where they stay counts, then `note` says why in a sentence. frequency_hz [Hz, n]: NaN where not
    known. named: whether the board had said who it is. wanted: False for what only leads up to the time asked for.
    """

    stretch: Stretch
    calibration: Calibration | None
    note: str | None
    named: bool
    temperature_c: float | None
    frequency_hz: Array
    counts: Counts
    wanted: bool = True

    @property
    def bridge_name(self) -> str | None:
        """Name of the calibration, else of the board, else None."""
        if self.calibration is not None:
            return self.calibration.meter.bridge.name
        return self.stretch.nameplate.name if self.named and self.stretch.nameplate else None


class Passages:
    """The passages of a journal in order, once: an iterator over columns, minutes at a time."""

    def __init__(
        self,
        journal: Journal,
        files: Sequence[BridgeFile] = (),
        *,
        from_us: int | None = None,
        to_us: int | None = None,
    ) -> None:
        """Read by `files`, else by the bridge files stored in the journal. FileError as by `Shelf`.

        from_us, to_us: only tallies from the one and before the other are wanted [us since 1970].
        """
        self._journal = journal
        self._from_us, self._to_us = from_us, to_us
        self._shelves = _Shelves(journal, files)
        self._stretches = journal.stretches
        self._placed = journal.placed_marks
        self._losses = np.sort(
            np.array([mark.utc_us for _, mark in self._placed if mark.kind in _LOSSES], dtype=np.int64)
        )
        self._told = Told()
        self._told_us: dict[int, list[Mark]] = {}
        self._since: tuple[int, int] | None = None
        #: Frames by number of kind, -1 for tallies, as far as it was read.
        self.frames: dict[int, int] = {}

    def __iter__(self) -> Iterator[Passage]:
        run_up_us = None if self._from_us is None else self._from_us - _RUN_UP_US
        for gathered in self._journal.gathered(run_up_us, self._to_us):
            for kind, number in gathered.frames.items():
                self.frames[kind] = self.frames.get(kind, 0) + number
            self._told.hear(gathered)
            for counts in gathered.counts:
                yield from self._passages(gathered.stretch, counts)

    def _passages(self, number: int, counts: Counts) -> Iterator[Passage]:
        stretch = self._stretch(number)
        utc_us = counts.utc_us
        hz = self._frequencies(number, counts)
        known, wanted = self._known(number, stretch, counts), self._wanted(utc_us)
        for rows in alike(known, wanted):
            state = int(known[rows.start])
            calibration, note = self._choice(stretch, counts.checked, state)
            bridge = None if calibration is None else calibration.meter.bridge
            for part, temperature_c in self._told.temperatures(counts.part(rows), bridge):
                at = slice(rows.start + part.start, rows.start + part.stop)
                yield Passage(
                    stretch or _UNKNOWN,
                    calibration,
                    note,
                    state == _NAMED,
                    temperature_c,
                    hz[at],
                    counts.part(at),
                    bool(wanted[rows.start]),
                )

    def _stretch(self, number: int) -> Stretch | None:
        """The stretch, one begun since we looked included; None where its row is damaged."""
        if number not in self._stretches:
            self._stretches = self._journal.stretches
            self._placed = self._journal.placed_marks
        return self._stretches.get(number)

    def _choice(self, stretch: Stretch | None, checked: bool, state: int) -> tuple[Calibration | None, str | None]:
        if stretch is None:
            return None, "counts only: what the journal says of their bridge is damaged"
        shelf, fault = self._shelves.of(stretch)
        if fault:
            return None, fault
        return shelf.choose(stretch.nameplate if state == _NAMED else None, checked, state == _NAMELESS)

    def _wanted(self, utc_us: Micros) -> npt.NDArray[np.bool_]:
        low = -math.inf if self._from_us is None else self._from_us
        high = math.inf if self._to_us is None else self._to_us
        return np.asarray((utc_us >= low) & (utc_us < high))

    def _known(self, number: int, stretch: Stretch | None, counts: Counts) -> Places:
        """What is known of the board at each tally: one of _NAMED, _NAMELESS, _WAITING [n]."""
        utc_us = counts.utc_us
        if stretch is None or stretch.nameplate is None:
            if self._since is None or self._since[0] != number or utc_us[0] < self._since[1]:
                self._since = number, int(utc_us[0])
            long = counts.has_ms & (utc_us - self._since[1] > NAMELESS_MS * 1000)
            return np.where(long, _NAMELESS, _WAITING)
        if not len(self._losses):
            return np.zeros(len(utc_us), dtype=np.intp)
        lost = latest(self._losses, utc_us)
        named = (lost < 0) | (self._told.named_us(counts) >= self._losses[lost])
        return np.where(named, _NAMED, _WAITING)

    def _frequencies(self, number: int, counts: Counts) -> Array:
        """Frequency [Hz, n]: the bridge's own word while fresh, else what was told us in this session; else NaN."""
        utc_us, hz = counts.utc_us, self._told.frequencies(counts)
        if not np.isnan(hz).any():
            return hz
        if number not in self._told_us:
            self._told_us[number] = self._options(number)
        marks = self._told_us[number]
        if not marks:
            return hz
        place = latest(np.array([mark.utc_us for mark in marks], dtype=np.int64), utc_us)
        told = np.where(place >= 0, np.array([mark.value for mark in marks])[place], np.nan)
        return np.where(np.isnan(hz), told, hz)

    def _options(self, number: int) -> list[Mark]:
        """Frequencies that somebody told, in the session of a stretch; one told at its start holds from before it."""
        starts = self._session_starts()
        first = max((start for start in starts if start <= number), default=1)
        after = min((start for start in starts if start > number), default=math.inf)
        marks = [
            mark
            for stretch, mark in self._placed
            if mark.kind == "frequency" and mark.text != _REPEATED and first <= stretch < after
        ]
        began = self._stretches.get(first)
        if marks and began and marks[0].utc_us - began.started_us <= _AT_START_US:
            marks[0] = Mark(marks[0].kind, _NEVER, marks[0].text, marks[0].value)
        return marks

    def _session_starts(self) -> list[int]:
        """Stretches that somebody began by starting to record: without a nameplate, and not for a change of file."""
        opened = {number for number, mark in self._placed if mark.kind == "link open"}
        starts: list[int] = []
        before: Stretch | None = None
        for number, stretch in self._stretches.items():
            same = before is not None and before.source == stretch.source
            swap = same and before is not None and before.bridge_file != stretch.bridge_file
            if stretch.nameplate is None and (number in opened or not swap):
                starts.append(number)
            before = stretch
        return starts


class _Shelves:
    """Which bridge files are for which stretch: those given, else the one stored with it."""

    def __init__(self, journal: Journal, files: Sequence[BridgeFile]) -> None:
        self._given = Shelf(files) if files else None
        self._name = journal.path.name
        self._stored: dict[tuple[str, bool], tuple[Shelf, str | None]] = {}

    def of(self, stretch: Stretch) -> tuple[Shelf, str | None]:
        """The shelf, and what is wrong with the stored file in a sentence, if anything."""
        if self._given is not None:
            return self._given, None
        # The simulated bridge brings its own file, as it does live.
        key = stretch.bridge_file, stretch.simulated
        if key not in self._stored:
            self._stored[key] = self._load(*key)
        return self._stored[key]

    def _load(self, text: str, simulated: bool) -> tuple[Shelf, str | None]:
        if not text:
            return Shelf([load_bridge_file(BRIDGE_FILE)] if simulated else []), None
        try:
            return Shelf([parse_bridge_file(text, f"stored in {self._name}")]), None
        except FileError as error:
            return Shelf([]), f"counts only: the bridge file stored with them cannot be used: {error}"


_UNKNOWN = Stretch("", 0)
