"""The feed of the live screens: source, receiver and desk, joined in the link's own thread.

One rule: the screen hears of each batch of readings by one narrow call, `post`, from the reader thread, which never
waits.
"""

from __future__ import annotations

import time
from collections import deque
from collections.abc import Callable
from typing import TYPE_CHECKING

from .messages import Snapshot

if TYPE_CHECKING:
    from bridgeio.desk import Desk
    from bridgeio.frames import Item
    from bridgeio.link import Link, LinkState
    from bridgeio.ports import Source
    from bridgeio.receiver import Receiver
    from calibration.readings import Readings

__all__ = ["LiveFeed"]

#: The rate shown is that of the last readings' arrivals within this time [s].
_RATE_WINDOW_S = 2.0


class LiveFeed:
    """Feeds snapshots from a source; `prepare` makes source, receiver and desk, in `start`: after the first paint."""

    def __init__(self, prepare: Callable[[], tuple[Source, Receiver, Desk]]) -> None:
        """`prepare` may raise what the command line turns into words; `start` lets it through."""
        self._prepare = prepare
        self._link: Link | None = None
        self._desk: Desk | None = None
        self._receiver: Receiver | None = None
        self._post: Callable[[Snapshot], None] = lambda snapshot: None
        self._reading: Readings | None = None
        self._batch: Readings | None = None
        self._arrival_s = 0.0
        self._arrivals: deque[tuple[float, int]] = deque()
        self._arrived = 0  # readings in `_arrivals`

    def start(self, post: Callable[[Snapshot], None]) -> None:
        """Open the source and begin; `post` is called from the reader thread."""
        from bridgeio.link import Link

        source, self._receiver, self._desk = self._prepare()
        self._post = post
        desk = self._desk
        self._link = Link(source, self._receiver, self._on_items, self._on_state, on_reopened=desk.reopened)
        self._link.start()

    def stop(self) -> None:
        """Close the source and end the reader thread."""
        if self._link is not None:
            self._link.stop()

    def set_frequency(self, hz: float) -> None:
        """Read at this frequency [Hz] where the bridge does not tell its own."""
        if self._desk is not None:
            self._desk.frequency_option_hz = hz
            self._send()

    def use_live_dark(self, live: bool) -> None:
        """Read with the running dark count as zero from now on, or with the calibration's."""
        if self._desk is not None:
            self._desk.use_live_dark(live)

    def _on_items(self, items: list[Item], arrival_s: float) -> None:
        assert self._desk is not None
        now_s = time.monotonic()
        for batch in self._desk.take(items, arrival_s):
            self._count(now_s, len(batch.readings))
            readings = batch.readings
            self._batch, self._reading = readings, readings if len(readings) == 1 else readings[-1]
            self._arrival_s = arrival_s
            self._send()

    def _on_state(self, state: LinkState) -> None:
        self._send(state)

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
            )
        )
