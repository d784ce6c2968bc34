"""The scribe: what a link tells, written into a journal, for whoever else listens to that link.

One rule: bytes become a record before anything else is made of them; what happens to link and frequency becomes a mark.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from pathlib import Path

from bridgeio.errors import FileError
from bridgeio.frames import Conditions, Item
from bridgeio.journal import JournalState, Stretch, Writer
from bridgeio.link import LinkState
from bridgeio.ports import Source
from bridgeio.receiver import Receiver

__all__ = ["Scribe"]

#: A change of frequency smaller than this part of it is the same channel and no mark.
_SAME_FREQUENCY = 1e-6


class Scribe:
    """Keeps what one source sends in one journal. `take` and `hear` are for the link's thread, the rest for any."""

    def __init__(
        self,
        source: Source,
        receiver: Receiver,
        journal: str | Path,
        *,
        bridge_file: str = "",
        frequency_hz: float | None = None,
        on_state: Callable[[JournalState], None] | None = None,
        on_commit: Callable[[int], None] | None = None,
    ) -> None:
        """Open the journal. JournalHeld or FileError where it may not be written.

        bridge_file: whole text of the bridge file in force. frequency_hz: noted as a mark, for a bridge that does not
        tell its own. on_state, on_commit: as the writer's.
        """
        self._source, self._receiver = source, receiver
        self._bridge_file = bridge_file
        self.writer = Writer(journal, self._stretch(), on_state=on_state, on_commit=on_commit)
        self._phase = "opening"
        self._frequency_hz: float | None = None
        self._option_hz: float | None = None
        if frequency_hz is not None:
            self.set_frequency(frequency_hz, "as told at the start")

    def take(self, items: Sequence[Item], arrival_s: float) -> None:
        """Items that came together at `arrival_s` [s since 1970]; the first to hear of them, and never waits."""
        self.writer.put(items, arrival_s, self._receiver.counters.copy())
        for item in items:
            if isinstance(item, Conditions) and item.frequency_hz:
                self._note_frequency(float(item.frequency_hz), "told by the bridge", arrival_s)

    def hear(self, state: LinkState) -> bool:
        """A state of the link; True where it is in another phase than before, which is marked."""
        if state.phase == self._phase:
            return False
        found = state.phase == "open" and self._phase in ("looking", "silent")
        self._phase = state.phase
        self.writer.mark("link found" if found else f"link {state.phase}", state.words)
        return True

    def reopened(self) -> None:
        """The source was lost and is back, perhaps with another board: what comes now is not the old one's."""
        self._frequency_hz = None
        self.writer.reopened()
        if self._option_hz is not None:
            self._note_frequency(self._option_hz, "as told before")

    def set_frequency(self, hz: float, by: str) -> None:
        """Mark a frequency [Hz] that somebody told us, and when or by whom; it outlives a lost link."""
        self._option_hz = hz
        self._note_frequency(hz, by)

    def _note_frequency(self, hz: float, by: str, arrival_s: float | None = None) -> None:
        before = self._frequency_hz
        if before is None or abs(hz - before) > _SAME_FREQUENCY * before:
            self._frequency_hz = hz
            self.writer.mark("frequency", by, hz, arrival_s)

    def use_bridge_file(self, text: str) -> None:
        """What is taken from here on is read by the bridge file of this text; nothing happens where it was already."""
        if text != self._bridge_file:
            self._bridge_file = text
            self.writer.begin(self._stretch())

    def stop(self) -> bool:
        """Write what waits and close the journal. False where the disk has not taken it in time."""
        return self.writer.stop()

    def close(self) -> None:
        """`stop`, but FileError where the disk has not taken all of it."""
        if not self.stop():
            raise FileError(f"the disk has not taken all of the journal: {self.writer.state.words}")

    def _stretch(self) -> Stretch:
        source = self._source
        return Stretch(source.name, int(time.time() * 1e6), source.simulated, None, self._bridge_file)
