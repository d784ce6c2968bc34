"""The mailbox between the reader thread and the screen: newest snapshot, all readings since the last paint.

One rule: the screen is woken once for any number of snapshots, and paints at once unless it painted less than its
shortest interval ago; then it paints at that deadline. A timer that looks every so often would show each
reading half a tick late and miss some. However fast readings come, paints keep to their mean interval in the long run.
"""

from __future__ import annotations

import threading
import time
from collections import deque
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

from .messages import Snapshot

if TYPE_CHECKING:
    from calibration.meter import Readings

__all__ = ["Delivery", "Mailbox"]

#: Batches of readings kept between two paints: more can only pile up while the screen hangs.
_MOST_WAITING = 4096


@dataclass(frozen=True, slots=True)
class Delivery:
    """What came since the last one: the newest snapshot, batches of readings with their arrival [s, steady clock]."""

    snapshot: Snapshot
    readings: tuple[tuple[float, Readings], ...]


class Mailbox:
    """One writer side (`put`, any thread), one reader side (`wait_s`, `take`, the screen's thread)."""

    def __init__(
        self,
        wake: Callable[[], None],
        least_interval_s: float,
        clock: Callable[[], float] = time.monotonic,
        mean_interval_s: float = 0.0,
    ) -> None:
        """`wake` is called from the writer's thread; least and mean time between paints [s], whichever is longer."""
        self._wake = wake
        self._least_interval_s, self._mean_interval_s = least_interval_s, max(mean_interval_s, least_interval_s)
        self._clock = clock
        self._lock = threading.Lock()
        self._newest: Snapshot | None = None
        self._last_reading: Readings | None = None
        self._waiting: deque[tuple[float, Readings]] = deque(maxlen=_MOST_WAITING)
        self._pending = False
        self._due_s = self._even_s = float("-inf")

    def put(self, snapshot: Snapshot) -> None:
        """Leave a snapshot; wakes the screen if it does not know yet that something waits."""
        arrival_s = self._clock()
        with self._lock:
            self._newest = snapshot
            if snapshot.reading is not None and snapshot.reading is not self._last_reading:
                self._last_reading = snapshot.reading
                self._waiting.append((arrival_s, snapshot.reading if snapshot.batch is None else snapshot.batch))
            asleep, self._pending = not self._pending, True
        if asleep:
            self._wake()

    def wait_s(self) -> float:
        """Seconds until the screen may paint again; 0 means at once."""
        return max(0.0, self._due_s - self._clock())

    def take(self) -> Delivery | None:
        """All that waits, or None where nothing does; the next `put` wakes again."""
        with self._lock:
            if not self._pending or self._newest is None:
                return None
            delivery = Delivery(self._newest, tuple(self._waiting))
            self._waiting.clear()
            self._pending = False
        self._space_out()
        return delivery

    def _space_out(self) -> None:
        """Set when the next paint may be. A paint before its even place in time leaves less room for the next one."""
        place_s = max(self._even_s, self._clock())
        self._due_s, self._even_s = place_s + self._least_interval_s, place_s + self._mean_interval_s
