"""How fast readings come, and from which age the newest one is old.

One rule: the bridge's own period goes before what is seen; what is seen is a median, so that one pause changes nothing.
"""

from __future__ import annotations

import statistics
from collections import deque

__all__ = ["Pace", "stale_after_s"]

_LEAST_S, _PERIODS = 0.25, 3.0
_UNKNOWN_S = 1.0  # while nobody knows how often readings come
_FRAMES = 20


class Pace:
    """The spacing of the last twenty readings, for bridges that do not tell theirs."""

    def __init__(self) -> None:
        """Nothing has come yet."""
        self._spacings_s: deque[float] = deque(maxlen=_FRAMES)
        self._last_s: float | None = None

    def feed(self, at_s: float, readings: int) -> None:
        """So many readings came together at `at_s` [s, steady]: the time since the last is theirs in equal parts."""
        if self._last_s is not None and readings > 0:
            self._spacings_s.extend([(at_s - self._last_s) / readings] * min(readings, _FRAMES))
        self._last_s = at_s

    @property
    def spacing_s(self) -> float | None:
        """Median spacing [s]; None before there is any."""
        return statistics.median(self._spacings_s) if self._spacings_s else None


def stale_after_s(period_ms: float, spacing_s: float | None = None) -> float:
    """Age [s] from which a reading is stale: three periods [ms] or 250 ms, whichever is longer.

    Where the period is not known (0), three times the spacing seen [s]; 1 s before there is any.
    """
    if period_ms > 0.0:
        return max(_LEAST_S, _PERIODS * period_ms / 1000.0)
    return _UNKNOWN_S if spacing_s is None else max(_LEAST_S, _PERIODS * spacing_s)
