"""The bridge's clock against ours: device milliseconds to UTC.

One rule: the earliest arrivals are the honest ones, since everything that delays a frame delays it the same way.
"""

from __future__ import annotations

from collections import deque

import numpy as np
import numpy.typing as npt

__all__ = ["DeviceClock"]

Array = npt.NDArray[np.float64]
Counts = npt.NDArray[np.int64]

_WRAP_MS = 2**32
#: The smallest delay is looked for over this many seconds, the current one besides.
_WINDOW_S = 60


class DeviceClock:
    """Unwraps u32 device ms and places them in UTC by the smallest delay of the last minute."""

    def __init__(self) -> None:
        """Begin without any frame seen."""
        self.restart()

    def restart(self) -> None:
        """Forget everything: the bridge has reset, its ms start anew."""
        self._last_ms: int | None = None
        self._turns = 0
        # (second of arrival, smallest delay in it): one a second, so that a thousand frames a second cost nothing.
        self._minima: deque[tuple[int, float]] = deque(maxlen=_WINDOW_S + 1)

    def utc(self, ms: npt.NDArray[np.uint32], arrival_s: float) -> Array:
        """UTC [s since 1970] of frames with device times `ms` [n, in order, n at least 1] that arrived together."""
        values = ms.astype(np.int64)
        before = values[:1] if self._last_ms is None else [self._last_ms]
        steps = np.diff(values, prepend=before)
        # Back by more than half a turn is a wrap (every 49.7 days); by less it is a reset: a new time begins there,
        # while what came before it is still told by the old one.
        parts = np.split(values, np.flatnonzero((steps < 0) & (steps >= -_WRAP_MS // 2)))
        told = [self._stretch(parts[0], arrival_s)] if len(parts[0]) else []
        for part in parts[1:]:
            self.restart()
            told.append(self._stretch(part, arrival_s))
        return np.concatenate(told)

    def _stretch(self, values: Counts, arrival_s: float) -> Array:
        """UTC of frames without a reset between them."""
        steps = np.diff(values, prepend=values[0] if self._last_ms is None else self._last_ms)
        turns = self._turns + np.cumsum(steps < 0)
        self._turns, self._last_ms = int(turns[-1]), int(values[-1])
        device_s = (values + turns * _WRAP_MS) / 1000.0
        return np.asarray(device_s + self._delay_s(float(device_s[-1]), arrival_s))

    def _delay_s(self, device_s: float, arrival_s: float) -> float:
        """The smallest delay [s] of the window, this frame's included."""
        second, delay_s = int(arrival_s), arrival_s - device_s
        if self._minima and self._minima[-1][0] == second:
            delay_s = min(delay_s, self._minima.pop()[1])
        self._minima.append((second, delay_s))
        while self._minima[0][0] < second - _WINDOW_S:
            self._minima.popleft()
        return min(smallest for _, smallest in self._minima)
