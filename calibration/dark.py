"""The running dark count: what both channels show with no carrier, and whether it has left the calibration's zero.

One rule: only what lies near the dark count known so far is taken for dark, so that no weak carrier becomes a zero.
"""

from __future__ import annotations

from collections import deque

import numpy as np
import numpy.typing as npt

from .bridge import Bridge
from .look import counting_sd

__all__ = ["DarkKeeper"]

Array = npt.NDArray[np.float64]

#: The dark count is a mean over this long [s], and wants this many readings before it is believed.
_WINDOW_S = 60.0
_ENOUGH = 50
#: A reading this many sd around the running dark count is dark; a mean this many of its own sd away has moved.
_NEAR_SD, _MOVED_SD = 6.0, 4.0


class DarkKeeper:
    """Keeps the dark count of one bridge from its readings, in order of time."""

    def __init__(self, bridge: Bridge) -> None:
        """Begin at the zero of `bridge`."""
        self._zero = np.array([bridge.forward_law.offset, bridge.reflected_law.offset])
        self._sd = np.array([bridge.forward_sd, bridge.reflected_sd])
        variance = bridge.bands[0].covariance[2, 2], bridge.bands[0].covariance[self._reflected(bridge)]
        self._zero_variance = np.array(variance)
        # A second's sums each: (second, readings, sum forward, sum reflected).
        self._seconds: deque[tuple[int, int, float, float]] = deque()

    def push(self, forward: Array, reflected: Array, at_s: float) -> None:
        """Counts [n] that came at `at_s` [s, steady]; what is not dark among them is passed over."""
        here = self.mean
        dark = np.abs(forward - here[0]) < _NEAR_SD * max(self._sd[0], 0.3)
        if dark.any():
            sums = int(dark.sum()), float(forward[dark].sum()), float(reflected[dark].sum())
            second = int(at_s)
            if self._seconds and self._seconds[-1][0] == second:
                _, count, first, other = self._seconds.pop()
                sums = sums[0] + count, sums[1] + first, sums[2] + other
            self._seconds.append((second, *sums))
        while self._seconds and self._seconds[0][0] < at_s - _WINDOW_S:
            self._seconds.popleft()

    @property
    def mean(self) -> Array:
        """Dark counts of both channels: the running mean once it is believed, before that the calibration's."""
        count = self._count
        if count < _ENOUGH:
            return self._zero
        return np.array([sum(s[2] for s in self._seconds), sum(s[3] for s in self._seconds)]) / count

    @property
    def moved(self) -> tuple[float, float] | None:
        """The running dark counts where either has left the calibration's zero, else None."""
        count = self._count
        if count < _ENOUGH:
            return None
        noise = [float(counting_sd(float(sd), count)) for sd in self._sd]
        away = np.abs(self.mean - self._zero) > _MOVED_SD * np.hypot(noise, np.sqrt(self._zero_variance))
        return (float(self.mean[0]), float(self.mean[1])) if away.any() else None

    @property
    def _count(self) -> int:
        return sum(second[1] for second in self._seconds)

    @staticmethod
    def _reflected(bridge: Bridge) -> tuple[int, int]:
        place = 2 + len(bridge.forward_law.parameters)
        return place, place
