"""What the Bench screen needs of the wire: whole counts with their device times, and hands at a simulated bench.

One rule: the reader's thread leaves items here and never waits; what nobody takes is bounded.
"""

from __future__ import annotations

import time
from collections import deque
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import numpy as np
    import numpy.typing as npt

    from bridgeio.frames import Item, Tallies
    from bridgeio.simulator.hands import Hands

__all__ = ["BenchSetting", "BenchTap", "Drop", "device_times_s"]

#: Reads kept for a screen that hangs: some minutes of a fast bridge.
_MOST = 20_000


@dataclass(frozen=True, slots=True)
class Drop:
    """What one read gave: items, when they came [s, steady clock], the box's temperature [degrees Celsius] if told."""

    items: tuple[Item, ...]
    at_s: float
    temperature_c: float | None


class BenchTap:
    """One writer (`put`, the reader's thread), one reader (`take`, the screen's)."""

    def __init__(self, clock: Callable[[], float] = time.monotonic) -> None:
        """`clock` [s] must be steady."""
        self._clock = clock
        self._drops: deque[Drop] = deque(maxlen=_MOST)
        #: Set by the feed where the source is a simulated bench.
        self.hands: Hands | None = None

    def put(self, items: Sequence[Item], temperature_c: float | None) -> None:
        """Leave what came."""
        self._drops.append(Drop(tuple(items), self._clock(), temperature_c))

    def take(self) -> list[Drop]:
        """All that was left since the last time, oldest first."""
        return [self._drops.popleft() for _ in range(len(self._drops))]


@dataclass(frozen=True, slots=True)
class BenchSetting:
    """What `--bench FILE` opens: the file, the tap of the feed, and whether the source is simulated."""

    path: Path
    simulated: bool = False
    tap: BenchTap = field(default_factory=BenchTap)


def device_times_s(tallies: Tallies, at_s: float) -> npt.NDArray[np.float64]:
    """Device times [s, n] of tallies; a bridge that sends none is timed by arrival, those of one read evenly apart."""
    import numpy as np

    if tallies.has_ms:
        return np.asarray(tallies.ms, dtype=float) / 1000.0
    # A read waits a quarter of a second at most, and lines that came together were sent within it.
    return at_s - 1e-3 * np.arange(len(tallies) - 1, -1, -1, dtype=float)
