"""What is known of the line, the bridge and the counts at one moment, for whoever shows it.

One rule: the watch sees whole batches in the reader thread and hands out frozen facts, a few a second at most; it
reads nothing by itself and judges nothing.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass

from .account import Counters
from .desk import Desk
from .frames import Conditions, Item, Nameplate, Remark
from .ports import Source
from .receiver import Receiver
from .recent import CountFacts, RecentCounts

__all__ = ["CalibrationFacts", "LineFacts", "LineWatch"]

#: Remarks kept.
_REMARKS = 4
#: Facts are made anew at most so often [s].
_EVERY_S = 0.25
#: Frames a second are told over this long [s]: a slow bridge's nameplates come every 2 s.
_RATE_S = 4.0


@dataclass(frozen=True, slots=True)
class CalibrationFacts:
    """The calibration in force. name, source: as the file has them, raw. Pairs are forward and reflected.

    zero: dark counts of the calibration. dark: the running ones, the same as zero until they are known. noise_sd:
    scatter of single readings [counts] on the bench.
    """

    name: str
    source: str
    fit_id: int | None
    zero: tuple[float, float]
    dark: tuple[float, float]
    noise_sd: tuple[float, float]


@dataclass(frozen=True, slots=True)
class LineFacts:
    """One moment. Texts are raw; times are of the steady clock [s].

    port: the source as named. baud: its rate [baud], None where it has none. simulated, live: as the source's.
    heard_s: when the last frame came. frames_hz: frames of all kinds and lines a second. clock_ppm: how much faster
    than ours the bridge's clock is. remarks: newest first, with when they came. counts: forward and reflected.
    """

    port: str
    baud: int | None
    simulated: bool
    live: bool
    heard_s: float | None
    frames_hz: float
    counters: Counters
    clock_ppm: float | None
    nameplate: Nameplate | None
    conditions: Conditions | None
    remarks: tuple[tuple[float, Remark], ...]
    counts: tuple[CountFacts, CountFacts] | None
    calibration: CalibrationFacts | None


class LineWatch:
    """Follows one source. `take`, `reopened` and `facts` are for the reader thread."""

    def __init__(self, source: Source, receiver: Receiver, desk: Desk) -> None:
        """Watch what `receiver` and `desk` make of `source`."""
        self._source, self._receiver, self._desk = source, receiver, desk
        self._counts = RecentCounts()
        self._remarks: deque[tuple[float, Remark]] = deque(maxlen=_REMARKS)
        self._conditions: Conditions | None = None
        self._heard_s: float | None = None
        self._seen: deque[tuple[float, int]] = deque()
        self._due_s = float("-inf")

    def take(self, items: Sequence[Item], at_s: float) -> None:
        """Items that came together at `at_s` [s, steady], after the desk has taken them."""
        self._heard_s = at_s
        self._counts.take(items, at_s)
        for item in items:
            if isinstance(item, Remark):
                self._remarks.appendleft((at_s, item))
            elif isinstance(item, Conditions):
                self._conditions = item

    def reopened(self) -> None:
        """The source is back after a loss, perhaps with another board."""
        self._counts.forget()
        self._conditions = None
        self._seen.clear()

    def due(self, now_s: float) -> bool:
        """Whether the last facts are older than a quarter of a second at `now_s` [s, steady]."""
        return now_s >= self._due_s

    def facts(self, now_s: float) -> LineFacts:
        """The facts at `now_s` [s, steady]. Ask when they are due, or when something has happened."""
        self._due_s = now_s + _EVERY_S
        counters = self._receiver.counters.copy()
        baud = getattr(self._source, "baud", None)
        return LineFacts(
            port=self._source.name,
            baud=baud if isinstance(baud, int) else None,
            simulated=self._source.simulated,
            live=self._source.live,
            heard_s=self._heard_s,
            frames_hz=self._rate_hz(counters, now_s),
            counters=counters,
            clock_ppm=self._desk.clock_ppm if self._source.live else None,
            nameplate=self._desk.nameplate,
            conditions=self._conditions,
            remarks=tuple(self._remarks),
            counts=self._counts.facts(),
            calibration=self._calibration(),
        )

    def _rate_hz(self, counters: Counters, now_s: float) -> float:
        seen = self._seen
        seen.append((now_s, sum(counters.frames.values()) + counters.unknown + counters.lines))
        while len(seen) > 2 and seen[0][0] < now_s - _RATE_S:
            seen.popleft()
        (begun_s, first), (ended_s, last) = seen[0], seen[-1]
        return (last - first) / (ended_s - begun_s) if ended_s > begun_s else 0.0

    def _calibration(self) -> CalibrationFacts | None:
        chosen = self._desk.calibration
        if chosen is None:
            return None
        bridge, dark = chosen.meter.bridge, chosen.dark.mean
        return CalibrationFacts(
            name=bridge.name,
            source=chosen.file.source,
            fit_id=chosen.file.fit_id,
            zero=(float(bridge.forward_law.offset), float(bridge.reflected_law.offset)),
            dark=(float(dark[0]), float(dark[1])),
            noise_sd=(float(bridge.forward_sd), float(bridge.reflected_sd)),
        )
