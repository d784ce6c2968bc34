"""The simulated bridge as a source: opens, reads and closes like a port, in real time or faster.

One rule: bytes depend on the options alone, and at the bench on hands; the clock only decides when they are handed out.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from typing import TYPE_CHECKING

from bridgeio.errors import EndOfSource, LinkError

from .options import parse_options

if TYPE_CHECKING:
    from .hands import Hands
    from .station import Station

__all__ = ["SimulatedSource"]

WAIT_S = 0.25  # the longest a read waits, as with every source
GATHER_S = 0.01  # frames closer together than this come in one read, as they do over USB
ROUNDING_S = 1e-6  # what is due in less than this is due now: sums of waits come out a little short
AT_ONCE = 256  # frames a read hands out with pace=fast


class SimulatedSource:
    """The source behind `sim:`; `text` holds the options. LinkError where an option is unknown or wrong."""

    simulated = True

    def __init__(
        self,
        text: str,
        clock: Callable[[], float] = time.monotonic,
        sleep: Callable[[float], None] = time.sleep,
    ) -> None:
        self.name = f"sim:{text}"
        self.scenario = parse_options(text)
        self.live = self.scenario.pace == "real"
        self._clock, self._sleep = clock, sleep
        #: Who keys and connects by hand, where `at_the_bench` was called.
        self.hands: Hands | None = None
        self._boot = 0
        self._frames: Iterator[tuple[float, bytes]] = iter(())
        self._next: tuple[float, bytes] | None = None
        self._started_s = self._read_s = 0.0

    @property
    def station(self) -> Station:
        """What was true at any device time: `station.at(t_s)`."""
        from .station import Station

        return Station(self.scenario)

    def at_the_bench(self) -> Hands:
        """From the next opening on transmitter, loads and key are worked by hand. What mode, antenna and line of the
        scenario say no longer holds."""
        from .hands import Hands

        self.hands = self.hands or Hands(self.scenario.frequency_hz, self.scenario.seed)
        return self.hands

    def open(self) -> None:
        """Switch the bridge on; every opening is a new start, with device time from 0."""
        from .board import transmissions  # numpy is loaded here, after the first paint of a screen

        self._boot += 1
        self._frames = transmissions(self.scenario, self._boot, self.hands)
        self._next = next(self._frames, None)
        self._started_s = self._clock()
        self._read_s = 0.0

    def read(self) -> bytes:
        """Bytes that have come, b"" after 0.25 s. EndOfSource after `duration`, LinkError after `unplug`."""
        due_s = self._next[0] if self._next else self._end_s()
        now_s = self._now_s(due_s)
        self._check_plugged(now_s)
        if self._next is None and now_s >= due_s:
            self._finish()
        if due_s > now_s:
            return b""
        return self._take(now_s)

    def close(self) -> None:
        """Switch the bridge off. Harmless where it is off."""
        self._frames, self._next = iter(()), None

    def _now_s(self, due_s: float) -> float:
        """Device time after waiting for what is due, or for a quarter of a second."""
        if not self.live:
            return due_s if due_s < float("inf") else self._idle()
        wait_s = max(due_s, self._read_s + GATHER_S) - (self._clock() - self._started_s)
        if wait_s > 0.0:
            self._sleep(min(wait_s, WAIT_S))
        return self._clock() - self._started_s + ROUNDING_S

    def _idle(self) -> float:
        """A silent bridge read without a clock: let the reader wait all the same."""
        self._sleep(WAIT_S)
        return self.scenario.unplug_s or 0.0

    def _take(self, now_s: float) -> bytes:
        self._read_s = now_s
        until_s = now_s if self.live else float("inf")
        if self.scenario.unplug_s is not None:
            until_s = min(until_s, self.scenario.unplug_s)
        taken: list[bytes] = []
        while self._next and self._next[0] <= until_s and len(taken) < AT_ONCE:
            taken.append(self._next[1])
            self._next = next(self._frames, None)
        return b"".join(taken)

    def _end_s(self) -> float:
        """When a source with nothing more to send ends: at its duration; a bridge gone silent never does."""
        return self.scenario.duration_s if self.scenario.duration_s is not None else float("inf")

    def _check_plugged(self, now_s: float) -> None:
        unplug_s = self.scenario.unplug_s
        if unplug_s is not None and now_s >= unplug_s:
            raise LinkError(f"{self.name} is gone: unplugged after {unplug_s:g} s, as asked for")

    def _finish(self) -> None:
        raise EndOfSource(f"{self.name} has ended after {self.scenario.duration_s:g} s")
