"""The recorder: a link and a journal joined, unattended.

One rule: bytes become a record before anything else is made of them; what happens to link and frequency becomes a mark.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from pathlib import Path

from bridgeio.frames import Conditions, Item
from bridgeio.journal import JournalState, Stretch, Writer
from bridgeio.link import Link, LinkState
from bridgeio.ports import Source
from bridgeio.receiver import Receiver

__all__ = ["Recorder"]

#: A change of frequency smaller than this part of it is the same channel and no mark.
_SAME_FREQUENCY = 1e-6


class Recorder:
    """Records one source into one journal, from `start` to `stop`."""

    def __init__(
        self,
        source: Source,
        receiver: Receiver,
        journal: str | Path,
        *,
        bridge_file: str = "",
        frequency_hz: float | None = None,
        say: Callable[[str], None] = lambda words: None,
    ) -> None:
        """Open the journal. JournalHeld or FileError where it may not be written.

        bridge_file: whole text of the bridge file in force. frequency_hz: noted as a mark, for a bridge that does not
        tell its own. say: hears in words what changes; called from both threads, must not wait.
        """
        self._receiver, self._say = receiver, say
        stretch = Stretch(source.name, int(time.time() * 1e6), source.simulated, None, bridge_file)
        self.writer = Writer(journal, stretch, on_state=self._on_journal)
        self._link = Link(source, receiver, self._on_items, self._on_link)
        self._phase = "opening"
        self._frequency_hz = frequency_hz
        if frequency_hz is not None:
            self.writer.mark("frequency", "as told at the start", frequency_hz)

    @property
    def link(self) -> LinkState:
        """How the link is."""
        return self._link.state

    def start(self) -> None:
        """Begin."""
        self._link.start()

    def stop(self) -> bool:
        """Close the source, write what waits. False where the disk has not taken it in time."""
        try:
            self._link.stop()
        finally:
            kept = self.writer.stop()
        return kept

    def _on_items(self, items: Sequence[Item], arrival_s: float) -> None:
        self.writer.put(items, arrival_s, self._receiver.counters.copy())
        for item in items:
            if isinstance(item, Conditions) and item.frequency_hz:
                self._note_frequency(float(item.frequency_hz), arrival_s)

    def _note_frequency(self, hz: float, arrival_s: float) -> None:
        before = self._frequency_hz
        if before is None or abs(hz - before) > _SAME_FREQUENCY * before:
            self._frequency_hz = hz
            self.writer.mark("frequency", "told by the bridge", hz, arrival_s)

    def _on_link(self, state: LinkState) -> None:
        if state.phase == self._phase:
            return
        found = state.phase == "open" and self._phase in ("looking", "silent")
        self._phase = state.phase
        self.writer.mark("link found" if found else f"link {state.phase}", state.words)
        self._say(state.words)

    def _on_journal(self, state: JournalState) -> None:
        self._say(state.words)
