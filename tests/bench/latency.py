"""From a byte to the screen: how long after a tally is sent its number stands on the terminal."""

from __future__ import annotations

import math
import random

from .cost import Figure, Sizes, median
from .programs import bridgewright, reading_options, script
from .watched import TICKS_HZ, Watched

__all__ = ["measure"]

_JITTER_S = 0.004


def measure(sizes: Sizes) -> list[Figure]:
    """Median and 95th percentile against the same screen painted by a plain timer of 20 Hz, fed in turn."""
    with (
        Watched(lambda path: bridgewright("watch", *reading_options(path))) as ours,
        Watched(lambda path: script("variants", "timer", *reading_options(path))) as timer,
    ):
        jitter = random.Random(1)
        for _ in range(sizes.rounds):
            moments = _moments(sizes.latency_ticks, jitter)
            for screen in (ours, timer):
                screen.prepare(len(moments))
                screen.begin(moments)
                screen.end()
        delays = [screen.delays_s() for screen in (ours, timer)]
    more = {"missed, ours": _missed(delays[0]), "missed, timer": _missed(delays[1])}
    return [
        _figure("latency", "median", delays, 0.5, 0.5, more),
        _figure("latency, 95 %", "95th percentile", delays, 0.95, 2.0 / 3.0, {}),
    ]


def _figure(
    name: str, words: str, delays: list[list[float]], part: float, goal: float, more: dict[str, float]
) -> Figure:
    ours, default = (1000.0 * _part(found, part) for found in delays)
    what, other = f"byte written to number on the terminal, {words}", "the same screen painted by a 20 Hz timer"
    return Figure(name, what, other, "ms", ours, default, ours / default, goal, more=more)


def _moments(ticks: int, jitter: random.Random) -> list[float]:
    """Ticks a little slower than a timer of the same rate, so that each round runs through all its phases."""
    period_s = (1.0 + 1.0 / ticks) / TICKS_HZ
    return [place * period_s + jitter.uniform(0.0, _JITTER_S) for place in range(ticks)]


def _part(delays: list[float], part: float) -> float:
    """The delay [s] that `part` of the ticks do not pass; skipped ticks are not among them."""
    found = sorted(delay for delay in delays if math.isfinite(delay))
    return found[min(int(part * len(found)), len(found) - 1)] if found else median([])


def _missed(delays: list[float]) -> float:
    return float(sum(math.isinf(delay) for delay in delays))
