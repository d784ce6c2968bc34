"""What travels to the screens: snapshots from the feed, and the view that a screen paints from.

One rule: everything here is immutable and free of the screen library, so that any thread may make it and plain
text commands may use it.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Protocol

if TYPE_CHECKING:
    from bridgeio.journal import JournalState
    from bridgeio.line_watch import LineFacts
    from bridgeio.link import LinkState
    from calibration.meter import Readings

    from .alarm import AlarmState, KeyState, Limits
    from .trail import Trail

__all__ = ["Feed", "Snapshot", "View"]


@dataclass(frozen=True, slots=True)
class Snapshot:
    """All that is known at one moment, left in the mailbox by the reader thread.

    reading: the newest, of length one; a new object is a new reading, the same object is news of the link alone.
    batch: all readings that came together with it, itself the last; None where it came alone. arrival_s: when they
    came [s since 1970]. rate_hz: frames a second as they come. lost, damaged: frames since the port opened, lost "at
    least". period_ms: nominal spacing [ms], 0 where irregular. note: a sentence for people, such as both full scales
    where they disagree. caution: what the board says against the calibration, in a sentence. facts: of the line, at
    most a quarter of a second old. journal: how recording stands, None where nothing is recorded. Texts are raw: the
    screen makes them visible.
    """

    reading: Readings | None = None
    batch: Readings | None = None
    arrival_s: float = 0.0
    rate_hz: float = 0.0
    lost: int = 0
    damaged: int = 0
    link: LinkState | None = None
    nameplate: str | None = None
    bridge: str | None = None
    frequency_hz: float | None = None
    period_ms: float = 0.0
    note: str | None = None
    caution: str | None = None
    facts: LineFacts | None = None
    journal: JournalState | None = None


class Feed(Protocol):
    """Where snapshots come from. `start` returns at once; the work is done in the feed's own daemon thread."""

    def start(self, post: Callable[[Snapshot], None]) -> None:
        """Begin; `post` may be called from any thread, at any rate."""

    def stop(self) -> None:
        """End and wait until it is over."""

    def set_frequency(self, hz: float) -> None:
        """Read at this frequency [Hz] from now on."""

    def use_live_dark(self, live: bool) -> None:
        """Read with the running dark count as zero from now on, or with the calibration's."""


@dataclass(frozen=True, slots=True)
class View:
    """One moment as a screen paints it.

    now_s: a steady clock [s]. silent_s: age of the newest reading [s]. silent: too long without one. stale: silent, or
    the newest reading is flagged stale. lasting_s: age from which a reading counts as old [s].
    """

    snapshot: Snapshot
    now_s: float
    silent_s: float
    silent: bool
    stale: bool
    alarm: AlarmState
    limits: Limits
    key: KeyState
    trail: Trail
    lasting_s: float = 0.25
