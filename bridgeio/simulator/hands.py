"""Hands at the simulated bench: what they connect, the transmitter they set and the key they press.

One rule: a change counts from the next tally that is computed on, with the edge of a keyed carrier; until then the
board goes on with what was.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from . import bench
from .envelope import EDGE_S

__all__ = ["Hands"]

Array = npt.NDArray[np.float64]


class Hands:
    """Stands where the simulated station stands. `set_up` and `key` may be called from any thread."""

    def __init__(self, frequency_hz: float, seed: int) -> None:
        """Nothing keyed; the transmitter stands on `frequency_hz` [Hz]; the wattmeter's scatter follows `seed`."""
        self._chance = np.random.default_rng([seed, 3])
        self._frequency_hz = frequency_hz
        self._setup = bench.Setup("dark", (0.0, 0.0))
        self._down = False
        # (was down, is down, setup) of the block being computed: one tuple, taken whole.
        self._block = (False, False, self._setup)

    @property
    def down(self) -> bool:
        """Whether the key is pressed."""
        return self._down

    @property
    def wattmeter_w(self) -> float | None:
        """What the wattmeter between bridge and dummy shows [W]; None where it shows nothing."""
        return self._setup.power_w if self._down else None

    def key(self, down: bool) -> None:
        """Press the key or let it go."""
        self._down = down

    def set_up(
        self,
        kind: str,
        frequency_hz: float | None = None,
        power_w: float | None = None,
        load: str | None = None,
        line_deg: float = 0.0,
    ) -> None:
        """Connect what a step of this kind needs, and set the transmitter. ValueError for a load that is none."""
        self._setup = bench.set_up(kind, frequency_hz, power_w, load, line_deg, self._chance)
        self._frequency_hz = self._setup.frequency_hz or self._frequency_hz

    def envelope(self, t_s: Array) -> Array:
        """The carrier at device times [s] of a block of tallies, 0..1; takes in what the hands have done meanwhile."""
        before, down = self._block[1], self._down
        self._block = (before, down, self._setup)
        if before == down:
            return np.full(np.shape(t_s), float(down))
        ramp = np.sin(0.5 * math.pi * np.clip((t_s - np.min(t_s)) / EDGE_S, 0.0, 1.0)) ** 2
        return np.asarray(ramp if down else 1.0 - ramp)

    def port_peaks_v(self, t_s: Array) -> tuple[Array, Array]:
        """RF peak volts [V] at the forward and the reflected detector with the key down, an array like `t_s` each."""
        forward_v, reflected_v = self._block[2].ports_v
        return np.full(np.shape(t_s), forward_v), np.full(np.shape(t_s), reflected_v)

    def frequency_hz(self, t_s: Array) -> Array:
        """What the transmitter is set to [Hz], an array like `t_s`."""
        return np.full(np.shape(t_s), self._frequency_hz)
