"""The bridge's clock against ours: device milliseconds to UTC.

One rule: the earliest arrivals are the honest ones, since everything that delays a frame delays it the same way.
"""

from __future__ import annotations

from collections import deque

import numpy as np
import numpy.typing as npt

__all__ = ["DeviceClock"]

Array = npt.NDArray[np.float64]

_WRAP_MS = 2**32
#: A step back of less than this is late or damaged, not a wrap or a reset [ms].
_WINDOW_S = 60.0


class DeviceClock:
    """Unwraps u32 device ms and places them in UTC by the smallest delay of the last minute."""

    def __init__(self) -> None:
        """Begin without any frame seen."""
        self._last_ms: int | None = None
        self._turns = 0
        self._delays: deque[tuple[float, float]] = deque()

    def restart(self) -> None:
        """Forget everything: the bridge has reset, its ms start anew."""
        self.__init__()  # type: ignore[misc]

    def utc(self, ms: npt.NDArray[np.uint32], arrival_s: float) -> Array:
        """UTC [s since 1970] of frames with device times `ms` [n, in order] that arrived together."""
        device_s = self._unwrapped(ms)
        self._delays.append((arrival_s, arrival_s - float(device_s[-1])))
        while self._delays[0][0] < arrival_s - _WINDOW_S:
            self._delays.popleft()
        return device_s + min(delay for _, delay in self._delays)

    def _unwrapped(self, ms: npt.NDArray[np.uint32]) -> Array:
        values = ms.astype(np.int64)
        before = values[0] if self._last_ms is None else self._last_ms
        steps = np.diff(values, prepend=before)
        # Half a turn back is a wrap (49.7 days); anything less is a reset, for which the device starts a new time.
        wraps = np.cumsum(steps < -_WRAP_MS // 2)
        if np.any((steps < 0) & (steps >= -_WRAP_MS // 2)):
            self.restart()
            wraps = np.zeros(len(values), dtype=np.int64)
        total = values + (wraps + self._turns) * _WRAP_MS
        self._turns += int(wraps[-1])
        self._last_ms = int(values[-1])
        return np.asarray(total / 1000.0)
