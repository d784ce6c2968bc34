"""The live screen: what it costs, whether it shows every tick, and what a fast bridge adds.

One rule: all screens run side by side, fed the same tune-up at the same time, and are read off in the same rounds.
"""

from __future__ import annotations

import importlib.util
import math
import time
from contextlib import ExitStack
from dataclasses import dataclass, field

from .cost import Figure, Sizes, median
from .programs import bridgewright, reading_options, script
from .watched import TICKS_HZ, Watched

__all__ = ["measure"]

_FAST_HZ = 1000.0
_CORE = "% of a core"


def measure(sizes: Sizes) -> list[Figure]:
    """Ours at 20/s against the one with a ready plot widget, and against ours at 1000/s."""
    screens = {
        "ours": Watched(lambda path: bridgewright("watch", *reading_options(path))),
        "fast": Watched(lambda path: bridgewright("watch", *reading_options(path)), _FAST_HZ),
    }
    if importlib.util.find_spec("textual_plot") is not None:
        screens["plot"] = Watched(lambda path: script("variants", "plot", *reading_options(path)))
    with ExitStack() as held:
        for screen in screens.values():
            held.enter_context(screen)
        spent = _rounds(sizes, screens)
        shown = {name: _shown(screen) for name, screen in screens.items() if name != "fast"}
    return _figures(spent, shown)


@dataclass
class _Spent:
    """Shares of a core [%] and output [kB/s], round by round."""

    shares: list[float] = field(default_factory=list)
    rates: list[float] = field(default_factory=list)


def _rounds(sizes: Sizes, screens: dict[str, Watched]) -> dict[str, _Spent]:
    span_s = sizes.screen_lead_s + sizes.rounds * sizes.screen_round_s
    for name, screen in screens.items():
        screen.prepare(int(span_s * (_FAST_HZ if name == "fast" else TICKS_HZ)))
    for screen in screens.values():
        screen.begin()
    time.sleep(sizes.screen_lead_s)
    spent = {name: _Spent() for name in screens}
    for _ in range(sizes.rounds):
        begun_s = time.monotonic()
        before = {name: (screen.screen.cpu_s, screen.screen.written) for name, screen in screens.items()}
        time.sleep(sizes.screen_round_s)
        took_s = time.monotonic() - begun_s
        for name, screen in screens.items():
            spent[name].shares.append(100.0 * (screen.screen.cpu_s - before[name][0]) / took_s)
            spent[name].rates.append((screen.screen.written - before[name][1]) / took_s / 1000.0)
    for screen in screens.values():
        screen.end()
    return spent


def _shown(screen: Watched) -> float:
    """Part of the ticks [%] whose own text has stood on the screen."""
    delays = screen.delays_s()
    return 100.0 * sum(math.isfinite(delay) for delay in delays) / len(delays)


def _figures(spent: dict[str, _Spent], shown: dict[str, float]) -> list[Figure]:
    ours, fast = median(spent["ours"].shares), median(spent["fast"].shares)
    rate = median(spent["ours"].rates)
    plot, more, name = math.nan, {}, "textual-plot is not installed: not compared"
    if "plot" in spent:
        plot, name = median(spent["plot"].shares), "the same with textual-plot's PlotWidget for the trail"
        more = {"plot, % shown": shown["plot"], "plot, kB/s": median(spent["plot"].rates)}
    watch = "bridgewright watch, 120x40"
    return [
        Figure("screen", f"{watch}, 20/s", name, _CORE, ours, plot, ours / plot, 1.0 / 3.0, more=more),
        Figure(
            "screen, ticks",
            "ticks whose number stood on the terminal",
            "none",
            "%",
            shown["ours"],
            math.nan,
            shown["ours"],
            98.0,
            "%",
            at_least=True,
        ),
        Figure("screen, output", "bytes to the terminal", "none", "kB/s", rate, math.nan, rate, 200.0, "kB/s"),
        Figure("screen, fast", f"{watch}, 1000/s", "the same at 20/s", _CORE, fast, ours, fast / ours, 1.5),
    ]
