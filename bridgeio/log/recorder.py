"""The recorder: a link and a journal joined, unattended.

One rule: it says in words what changes and decides nothing; what is written, and how, is the scribe's.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

from bridgeio.journal import JournalState
from bridgeio.link import Link, LinkState
from bridgeio.ports import Source
from bridgeio.receiver import Receiver

from .scribe import Scribe

__all__ = ["Recorder"]


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
        on_commit: Callable[[int], None] | None = None,
    ) -> None:
        """Open the journal. JournalHeld or FileError where it may not be written.

        bridge_file: whole text of the bridge file in force. frequency_hz: noted as a mark, for a bridge that does not
        tell its own. say: hears in words what changes; called from both threads, must not raise nor wait. on_commit:
        as the writer's.
        """
        self._say = say
        self._scribe = Scribe(
            source,
            receiver,
            journal,
            bridge_file=bridge_file,
            frequency_hz=frequency_hz,
            on_state=self._on_journal,
            on_commit=on_commit,
        )
        self.writer = self._scribe.writer
        self._link = Link(source, receiver, self._scribe.take, self._on_link, on_reopened=self._scribe.reopened)

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
            kept = self._scribe.stop()
        return kept

    def _on_link(self, state: LinkState) -> None:
        if self._scribe.hear(state):
            self._say(state.words)

    def _on_journal(self, state: JournalState) -> None:
        self._say(state.words)
