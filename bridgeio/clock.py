"""The bridge's clock against ours: device milliseconds to UTC.

One rule: the earliest arrivals are the honest ones, since everything that delays a frame delays it the same way.

Device time is laid on a clock of ours that nobody sets; UTC is added last. So a step of our UTC moves no duration:
order and durations are those of `device_s`, and `utc` is only what they are called.
"""

from __future__ import annotations

import sys
import time
from collections import deque
from collections.abc import Callable, Iterable
from itertools import pairwise

import numpy as np
import numpy.typing as npt

__all__ = ["DeviceClock", "utc_less_steady_s"]

Array = npt.NDArray[np.float64]
Counts = npt.NDArray[np.int64]

_WRAP_MS = 2**32
#: The line is laid through the smallest delay of each of these last seconds.
_WINDOW_S = 60
#: Over less than this the delays' own scatter would tilt the line more than any clock does [s].
_SPAN_S = 5.0
#: From this span on the rate is told [s].
_TOLD_SPAN_S = 30.0
#: No board's clock is off by more than this: ceramic resonators keep 0.5 %, RC oscillators a few times that.
_STEEPEST = 0.02
#: Arrivals this much earlier than the line says that it lay on delayed ones, or that time has jumped [s].
_USELESS_S = 0.25
#: Smaller differences of UTC and steady clock are not called a step: they may be a scheduler's pause [s].
_STEP_S = 0.02
#: Of the smaller ones this part is taken over at each call.
_SMOOTHING = 16.0


def utc_less_steady_s() -> float:
    """UTC less a clock that goes on evenly, in suspend too where the system has one [s]."""
    best_s, offset_s = np.inf, 0.0
    for _ in range(3):  # whoever interrupts us between the readings of the clocks makes the offset wrong
        before_s, utc_s, after_s = _steady_s(), time.time(), _steady_s()
        if after_s - before_s < best_s:
            best_s, offset_s = after_s - before_s, utc_s - (before_s + after_s) / 2.0
        if best_s < 1e-4:
            break
    return offset_s


class DeviceClock:
    """Unwraps u32 device ms and places them in UTC by the smallest delays of the last minute."""

    def __init__(self, offset_s: Callable[[], float] = utc_less_steady_s) -> None:
        """Begin without any frame seen. offset_s: UTC less the steady clock, now [s]."""
        self._read_offset_s = offset_s
        self._followed_s: float | None = None
        #: How far our UTC was stepped between the last two calls of `utc` [s]; 0 nearly always.
        self.step_s = 0.0
        #: Device seconds of the frames given last; they go on over a wrap and start anew with the bridge.
        self.device_s: Array = np.zeros(0)
        self.restart()

    def restart(self) -> None:
        """Forget everything about the bridge: it has reset, its ms start anew."""
        self._last_ms: int | None = None
        self._turns = 0
        self._line = _Line()

    @property
    def ppm(self) -> float | None:
        """How much faster than ours the bridge's clock is [millionths]; None until half a minute has been seen."""
        return None if self._line.span_s < _TOLD_SPAN_S else (1.0 / (1.0 + self._line.slope) - 1.0) * 1e6

    def utc(self, ms: npt.NDArray[np.uint32], arrival_s: float) -> Array:
        """UTC [s since 1970] of frames with device times `ms` [n, in order, n at least 1] that arrived together."""
        offset_s = self._notice(self._read_offset_s())
        values = ms.astype(np.int64)
        before = values[:1] if self._last_ms is None else [self._last_ms]
        steps = np.diff(values, prepend=before)
        # Back by more than half a turn is a wrap (every 49.7 days); by less it is a reset: a new time begins there,
        # while what came before it is still told by the old one.
        parts = np.split(values, np.flatnonzero((steps < 0) & (steps >= -_WRAP_MS // 2)))
        told = [self._stretch(parts[0], arrival_s - offset_s)] if len(parts[0]) else []
        for part in parts[1:]:
            self.restart()
            told.append(self._stretch(part, arrival_s - offset_s))
        self.device_s = np.concatenate([device_s for device_s, _ in told])
        return np.concatenate([steady_s for _, steady_s in told]) + offset_s

    def _notice(self, offset_s: float) -> float:
        """Offset [s] to count with: a step is followed at once, a clock read in coarse ticks is smoothed."""
        moved_s = 0.0 if self._followed_s is None else offset_s - self._followed_s
        self.step_s = moved_s if abs(moved_s) > _STEP_S else 0.0
        self._followed_s = (
            offset_s if self._followed_s is None or self.step_s else self._followed_s + moved_s / _SMOOTHING
        )
        return self._followed_s

    def _stretch(self, values: Counts, arrival_s: float) -> tuple[Array, Array]:
        """Device seconds, and seconds of the steady clock, of frames without a reset between them."""
        steps = np.diff(values, prepend=values[0] if self._last_ms is None else self._last_ms)
        turns = self._turns + np.cumsum(steps < 0)
        self._turns, self._last_ms = int(turns[-1]), int(values[-1])
        device_s = (values + turns * _WRAP_MS) / 1000.0
        at_s = float(device_s[-1])
        # Whether a frame that came about the time of a step came before or after it, nobody knows.
        doubtful = self.step_s and self._line.known
        delay_s = self._line.height_s(at_s) if doubtful else self._line.delay_s(at_s, arrival_s)
        return device_s, device_s + delay_s + self._line.slope * (device_s - device_s[-1])


class _Line:
    """Delay (arrival less device time) as a straight line that no arrival of the last minute lies below."""

    def __init__(self) -> None:
        #: Seconds of delay to a second of device time.
        self.slope = 0.0
        self._base_s = 0.0
        # (device time, delay), the smallest of its second of arrival: one a second, so that a thousand frames a
        # second cost nothing.
        self._points: deque[tuple[float, float]] = deque()

    @property
    def span_s(self) -> float:
        """Device time between the oldest and the newest point [s]."""
        return self._points[-1][0] - self._points[0][0] if self._points else 0.0

    @property
    def known(self) -> bool:
        """Whether any frame has come."""
        return bool(self._points)

    def delay_s(self, at_s: float, arrival_s: float) -> float:
        """Delay [s] by the line of a frame with device time `at_s`, which itself counts for the line."""
        point = at_s, arrival_s - at_s
        if self._points and point[1] < self.height_s(at_s) - _USELESS_S:
            self._points.clear()
        if self._renew(point, arrival_s):
            self._lay()
            self._base_s = min(delay_s - self.slope * then_s for then_s, delay_s in self._points)
        return min(self.height_s(at_s), point[1])

    def height_s(self, at_s: float) -> float:
        """Height [s] of the line at device time `at_s`."""
        return self._base_s + self.slope * at_s

    def _renew(self, point: tuple[float, float], arrival_s: float) -> bool:
        """Take a point in and let old ones go; whether the line has to be laid anew."""
        points = self._points
        while points and sum(points[0]) < arrival_s - _WINDOW_S:
            points.popleft()
        if points and int(sum(points[-1])) == int(arrival_s):
            if point[1] - self.slope * point[0] >= points[-1][1] - self.slope * points[-1][0]:
                return False
            points.pop()
        points.append(point)
        return True

    def _lay(self) -> None:
        """Lay the line below all points that leaves the least between it and them.

        It runs along the edge of their lower hull above their mean time: Moon, Skelly and Towsley, "Estimation and
        removal of clock skew from network delay measurements", 1999 (from memory). A mean line would be lifted by
        every delay.
        """
        if self.span_s < _SPAN_S:
            return
        middle_s = sum(at_s for at_s, _ in self._points) / len(self._points)
        hull = _lower_hull(self._points)
        for (left_s, low), (right_s, high) in pairwise(hull):
            if right_s >= middle_s:
                slope = (high - low) / (right_s - left_s)
                self.slope = min(_STEEPEST, max(-_STEEPEST, slope))
                return


def _lower_hull(points: Iterable[tuple[float, float]]) -> list[tuple[float, float]]:
    """Corners from left to right of the convex hull's lower side; of points above each other only the lowest."""
    hull: list[tuple[float, float]] = []
    for point in sorted(points, key=lambda point: (point[0], -point[1])):
        while hull and (hull[-1][0] == point[0] or (len(hull) > 1 and _is_above(hull[-2], hull[-1], point))):
            hull.pop()
        hull.append(point)
    return hull


def _is_above(left: tuple[float, float], middle: tuple[float, float], right: tuple[float, float]) -> bool:
    """Whether `middle` lies on or above the line from left to right."""
    return (middle[1] - left[1]) * (right[0] - left[0]) >= (right[1] - left[1]) * (middle[0] - left[0])


def _steady_s() -> float:
    """Seconds of a clock that nobody sets; one that counts a suspended machine's time where there is one."""
    if sys.platform == "win32":
        return time.perf_counter()  # monotonic() ticks every 16 ms there
    boot_time = getattr(time, "CLOCK_BOOTTIME", None)
    return time.monotonic() if boot_time is None else time.clock_gettime(boot_time)
