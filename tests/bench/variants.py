"""The live screen as it would be with ready parts: with a plot widget for the trail, or painted by a plain timer.

One rule: all else is the program itself; a variant replaces one part and runs `watch` with the words given.
"""

from __future__ import annotations

import sys

from textual.app import ComposeResult
from textual.message import Message

import tui.app
import tui.screens
from tui.__main__ import main as bridgewright
from tui.messages import View
from tui.screens.tune_up import TuneUp
from tui.trail import Relation

__all__ = ["VARIANTS"]

_TICKS_HZ = 20.0


def with_plot() -> None:
    """The trail as a line plot of the ready widget, of the same data, with the dots of braille like ours."""
    from textual_hires_canvas import HiResMode
    from textual_plot import PlotWidget

    class WithPlot(TuneUp):
        DEFAULT_CSS = "WithPlot PlotWidget { height: 1fr; }"

        def compose(self) -> ComposeResult:
            for widget in super().compose():
                yield PlotWidget(id="trail") if widget.id == "trail" else widget

        def on_mount(self) -> None:
            plot = self.query_one(PlotWidget)
            plot.set_xlimits(0.0, 1.0)
            plot.set_ylimits(-60.0, 0.0)

        def _draw_trail(self, view: View, relation: Relation) -> None:
            bins = list(view.trail.bins())
            plot = self.query_one(PlotWidget)
            plot.clear()
            ages_s = [each.to_s - view.now_s for each in bins]
            plot.plot([each.last for each in bins], ages_s, "green", HiResMode.BRAILLE)
            if relation.best is not None:
                plot.add_v_line(relation.best, "blue")

        @property
        def _width(self) -> int:
            return self.query_one(PlotWidget).size.width

    tui.screens.SCREENS["tune-up"] = WithPlot


def on_timer() -> None:
    """The screen looks into the mailbox twenty times a second, whenever readings come."""

    class OnTimer(tui.app.BridgewrightApp):
        CSS_PATH = tui.app.BridgewrightApp.CSS_PATH

        def on_ready(self) -> None:  # besides the program's own, which the library calls too
            self.set_interval(1.0 / _TICKS_HZ, self._collect)

        def on_bridgewright_app_woken(self, message: Message) -> None:  # type: ignore[override]
            message.prevent_default()

    tui.app.BridgewrightApp = OnTimer  # type: ignore[misc]


VARIANTS = {"plot": with_plot, "timer": on_timer}

if __name__ == "__main__":
    VARIANTS[sys.argv[1]]()
    sys.exit(bridgewright(["watch", *sys.argv[2:]]))
