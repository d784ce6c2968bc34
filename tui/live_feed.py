"""The feed of the live screens: source, receiver and desk, joined in the link's own thread.

One rule: what came is written down before anything is made of it, and the screen hears of it by one narrow call,
`post`. Neither keeps the reader thread waiting.
"""

from __future__ import annotations

import time
from collections import deque
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from .messages import Snapshot

if TYPE_CHECKING:
    from bridgeio.desk import Desk
    from bridgeio.frames import Item
    from bridgeio.journal import JournalState
    from bridgeio.line_watch import LineFacts, LineWatch
    from bridgeio.link import Link, LinkState
    from bridgeio.log.scribe import Scribe
    from bridgeio.ports import Source
    from bridgeio.receiver import Receiver
    from calibration.readings import Readings

    from .bench.tap import BenchTap

__all__ = ["Keeping", "LiveFeed"]

#: The rate shown is that of the last readings' arrivals within this time [s].
_RATE_WINDOW_S = 2.0


@dataclass(frozen=True, slots=True)
class Keeping:
    """What a journal is kept by. bridge_files: whole text of each bridge file by its path."""

    journal: str
    bridge_files: Mapping[str, str] = field(default_factory=dict)


class LiveFeed:
    """Feeds snapshots from a source; `prepare` makes source, receiver and desk, in `start`: after the first paint."""

    def __init__(
        self,
        prepare: Callable[[], tuple[Source, Receiver, Desk]],
        keeping: Callable[[Source], Keeping] | None = None,
        tap: BenchTap | None = None,
    ) -> None:
        """`prepare` may raise what the command line turns into words; `start` lets it through.

        keeping: asked after `prepare`; what comes goes into that journal too. tap: what comes is left there too.
        """
        self._prepare, self._keeping, self._tap = prepare, keeping, tap
        self._link: Link | None = None
        self._desk: Desk | None = None
        self._receiver: Receiver | None = None
        self._watch: LineWatch | None = None
        self._facts: LineFacts | None = None
        self._scribe: Scribe | None = None
        self._bridge_files: Mapping[str, str] = {}
        self._post: Callable[[Snapshot], None] = lambda snapshot: None
        self._reading: Readings | None = None
        self._batch: Readings | None = None
        self._arrival_s = 0.0
        self._arrivals: deque[tuple[float, int]] = deque()
        self._arrived = 0  # readings in `_arrivals`

    def start(self, post: Callable[[Snapshot], None]) -> None:
        """Open the journal, then the source, and begin; `post` is called from the reader's and the journal's thread.

        JournalHeld or FileError where the journal may not be written: then the source is not opened.
        """
        from bridgeio.line_watch import LineWatch
        from bridgeio.link import Link

        source, self._receiver, self._desk = self._prepare()
        if self._tap is not None:
            self._tap.hands = getattr(source, "hands", None)
        self._watch = LineWatch(source, self._receiver, self._desk)
        self._post = post
        if self._keeping is not None:
            self._scribe = self._open_journal(source, self._keeping(source))
        self._link = Link(source, self._receiver, self._on_items, self._on_state, on_reopened=self._on_reopened)
        self._link.start()

    def stop(self) -> None:
        """Close the source, end the reader thread and close the journal. FileError where that is not whole."""
        try:
            if self._link is not None:
                self._link.stop()
        finally:
            if self._scribe is not None:
                self._scribe.close()

    def set_frequency(self, hz: float) -> None:
        """Read at this frequency [Hz] where the bridge does not tell its own."""
        if self._desk is not None:
            self._desk.frequency_option_hz = hz
            if self._scribe is not None:
                self._scribe.set_frequency(hz, "typed by the operator")
            self._send()

    def use_live_dark(self, live: bool) -> None:
        """Read with the running dark count as zero from now on, or with the calibration's."""
        if self._desk is not None:
            self._desk.use_live_dark(live)

    def _open_journal(self, source: Source, keeping: Keeping) -> Scribe:
        """Which of several bridge files is in force shows only when the board has named itself."""
        from bridgeio.log.scribe import Scribe

        assert self._receiver is not None
        assert self._desk is not None
        self._bridge_files = keeping.bridge_files
        texts = list(keeping.bridge_files.values())
        return Scribe(
            source,
            self._receiver,
            keeping.journal,
            bridge_file=texts[0] if len(texts) == 1 else "",
            frequency_hz=self._desk.frequency_option_hz,
            on_state=self._on_journal,
        )

    def _on_items(self, items: list[Item], arrival_s: float) -> None:
        assert self._desk is not None
        assert self._watch is not None
        if self._scribe is not None:
            self._scribe.take(items, arrival_s)
        now_s = time.monotonic()
        self._watch.take(items, now_s)
        due = self._watch.due(now_s)
        for batch in self._desk.take(items, arrival_s):
            self._count(now_s, len(batch.readings))
            readings = batch.readings
            self._batch, self._reading = readings, readings if len(readings) == 1 else readings[-1]
            self._arrival_s = arrival_s
            self._facts = self._watch.facts(now_s) if due else self._facts
            self._send()
        if self._tap is not None:
            self._tap.put(items, self._desk.temperature_c)
        self._after(items, now_s if due else None)

    def _after(self, items: list[Item], due_s: float | None) -> None:
        """What the items after the last counts have changed: the desk has heard of all of them only now."""
        from bridgeio.frames import Tallies

        assert self._watch is not None
        if self._scribe is not None and len(self._bridge_files) > 1:
            self._note_bridge_file(self._scribe)
        if not isinstance(items[-1], Tallies):
            self._facts = self._facts if due_s is None else self._watch.facts(due_s)
            self._send()

    def _note_bridge_file(self, scribe: Scribe) -> None:
        assert self._desk is not None
        chosen = self._desk.calibration
        if chosen is not None:
            scribe.use_bridge_file(self._bridge_files.get(chosen.file.source, ""))

    def _on_state(self, state: LinkState) -> None:
        if self._scribe is not None:
            self._scribe.hear(state)
        assert self._watch is not None
        self._facts = self._watch.facts(time.monotonic())
        self._send(state)

    def _on_reopened(self) -> None:
        assert self._desk is not None
        assert self._watch is not None
        if self._scribe is not None:
            self._scribe.reopened()
        self._desk.reopened()
        self._watch.reopened()

    def _on_journal(self, state: JournalState) -> None:
        """From the journal's thread."""
        if self._link is not None:
            self._send()

    def _count(self, now_s: float, readings: int) -> None:
        self._arrivals.append((now_s, readings))
        self._arrived += readings
        while self._arrivals[0][0] < now_s - _RATE_WINDOW_S:
            self._arrived -= self._arrivals.popleft()[1]

    @property
    def _rate_hz(self) -> float:
        """The first batch only begins the time in which the others came."""
        if len(self._arrivals) < 2:
            return 0.0
        begun_s, first = self._arrivals[0]
        span_s = self._arrivals[-1][0] - begun_s
        return (self._arrived - first) / span_s if span_s > 0.0 else 0.0

    def _send(self, state: LinkState | None = None) -> None:
        """From any of the threads; facts are made by the reader's alone."""
        assert self._desk is not None
        assert self._receiver is not None
        assert self._link is not None
        plate = self._desk.nameplate
        counters = self._receiver.counters
        self._post(
            Snapshot(
                reading=self._reading,
                batch=self._batch,
                arrival_s=self._arrival_s,
                rate_hz=self._rate_hz,
                lost=counters.lost,
                damaged=counters.damaged,
                link=state or self._link.state,
                nameplate=plate.name if plate else None,
                bridge=self._desk.bridge_name,
                frequency_hz=self._desk.frequency_hz,
                period_ms=float(plate.period_ms) if plate else 0.0,
                note=self._desk.note,
                caution=self._desk.caution,
                facts=self._facts,
                journal=self._scribe.writer.state if self._scribe else None,
            )
        )
