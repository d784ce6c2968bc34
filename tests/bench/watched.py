"""A live screen on a line of its own: started, introduced to its bridge, fed, and read off.

One rule: forward power is another text in every tick, so that what stands on the terminal tells which tick it is of.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

from . import counts
from .line import Line
from .programs import Screen, until

__all__ = ["TICKS_HZ", "Watched"]

TICKS_HZ = 20.0
#: A text that has not come after this time [s] has been skipped: before long another tick has the same.
_GONE_S = 0.3


class Watched:
    """Use with `with`: the screen of a command, given the path of its line."""

    def __init__(self, command: Callable[[str], list[str]], rate_hz: float = TICKS_HZ) -> None:
        self._line = Line()
        self._rate_hz, self._sent = rate_hz, 0
        self._texts: list[str] = []
        self._pieces: list[bytes] = []
        self._written_s: list[float] = []
        self.screen = Screen(command(self._line.path))

    def __enter__(self) -> Watched:
        self.screen.await_words("q quit")
        until(self._introduced, "the first reading on the screen")
        return self

    def __exit__(self, *error: Any) -> None:
        self.screen.__exit__(*error)
        self._line.__exit__(*error)

    def prepare(self, n: int) -> None:
        """Make the next n tallies."""
        made = counts.tuning(n, self._rate_hz, self._sent / self._rate_hz)
        self._pieces = counts.frames(made, self._sent, self._rate_hz)
        self._texts += counts.watts_texts(made)
        self._sent += n

    def begin(self, at_s: Sequence[float] | None = None) -> None:
        """Send what is prepared at these moments [s from now], evenly unless told; returns at once."""
        if at_s is None:
            self._line.feed_evenly(self._pieces, self._rate_hz)
        else:
            self._line.feed(self._pieces, at_s)

    def end(self) -> None:
        """Wait until all is sent."""
        self._written_s += self._line.fed()

    def delays_s(self) -> list[float]:
        """How long after each tick's first tally its text stood on the screen [s]; infinite where it never did."""
        fields, place, delays = self.screen.field(" forward ", " W"), 0, []
        for text, sent_s in self._ticks():
            while place < len(fields) and fields[place][0] < sent_s:
                place += 1
            near = (at_s - sent_s for at_s, seen in fields[place : place + 8] if seen == text)
            delay_s = next(near, float("inf"))
            delays.append(delay_s if delay_s < _GONE_S else float("inf"))
        return delays

    def _ticks(self) -> list[tuple[str, float]]:
        """Each tick's text, and when its first tally was sent."""
        sent = list(zip(self._texts, self._written_s, strict=True))
        return [tick for before, tick in zip([("", 0.0), *sent], sent, strict=False) if tick[0] != before[0]]

    def _introduced(self) -> bool:
        """Talk for a quarter of a second; whether its readings show: the port opens some time after the first paint."""
        made = counts.tuning(5, TICKS_HZ)
        self._line.feed_evenly(counts.frames(made, 0, TICKS_HZ), TICKS_HZ)
        self._line.fed()
        return any(text.isdigit() for _, text in self.screen.field(" forward ", " W"))
