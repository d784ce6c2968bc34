"""The Tune-up screen: the scale, and the trail that hangs from it.

One rule: the eye needs one place only. The scale and the trail are large; all else is quiet and keeps its place.
"""

from __future__ import annotations

import math
from typing import ClassVar

from textual.app import ComposeResult
from textual.binding import Binding, BindingType

from ..alarm import Limits
from ..drawing.edges import draw_alarm, draw_best, draw_remarks, draw_status
from ..drawing.head import draw_head
from ..drawing.ribbon import draw_ribbon, full_length_w
from ..drawing.scale import draw_scale
from ..drawing.thread import draw_trail
from ..messages import View
from ..readout import Readout, read_out
from ..trail import Relation
from ..widgets.key_bar import KeyBar
from ..widgets.prompt import Prompt
from ..widgets.rows import Rows
from .live import LiveScreen

__all__ = ["KEYS", "TuneUp", "limits_from"]

#: Key, words, words for a narrow screen and action, in the order of the bottom line. Without words it is not shown
#: there: `z` is offered by the remark that the zero has moved, and only then has anything to do.
KEYS = (
    ("f", "frequency", "freq", "screen.ask_frequency"),
    ("b", "forget best", "best", "screen.forget_best"),
    ("a", "alarm", "", "screen.ask_limits"),
    ("z", "", "", "screen.take_zero"),
    ("d", "dark/light", "", "app.toggle_dark"),
    ("s", "screens", "screen", "app.next_screen"),
    ("?", "help", "help", "app.help"),
    ("q", "quit", "quit", "app.quit"),
)
_GAP_S = 0.35  # a longer time without a reading breaks the thread, unless they come more slowly anyway
_RIBBON_SHRINKS_BELOW = 0.3  # of its length, and only while the key is up


class TuneUp(LiveScreen):
    """See the module."""

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding(key, action, words) for key, words, _, action in KEYS if action.startswith("screen.")
    ]
    #: A short screen gives its blank lines to the trail.
    VERTICAL_BREAKPOINTS = [(0, "-short"), (23, "-high")]  # noqa: RUF012  the library declares it so

    def __init__(self) -> None:
        """Nothing read yet."""
        super().__init__()
        self._ribbon_w = 1.0

    def compose(self) -> ComposeResult:
        """From top to bottom; the style sheet gives each its height, the trail the rest."""
        for name in ("status", "remarks", "head", "scale", "trail", "best", "ribbon", "alarm"):
            yield Rows(name)
        yield KeyBar("keys", KEYS)
        yield Prompt("prompt")

    def draw(self, view: View) -> None:
        """Hand each widget its rows."""
        readout, relation = read_out(view.snapshot.reading, view.stale), view.trail.relation()
        self._draw_edges(view, readout, relation)
        self._draw_reading(view, readout, relation)
        self._draw_trail(view, relation)

    def _draw_edges(self, view: View, readout: Readout, relation: Relation) -> None:
        width, glyphs = self._width, self.glyphs
        self.rows("status").show([draw_status(view.snapshot, view.key, view.limits, width, glyphs)])
        self.rows("remarks").show([draw_remarks(readout, view.snapshot, width, glyphs)])
        self.rows("best").show([draw_best(relation, readout.stale, width, glyphs)])
        self.rows("alarm").show([draw_alarm(view.alarm, view.limits, width)])

    def _draw_reading(self, view: View, readout: Readout, relation: Relation) -> None:
        width, glyphs = self._width, self.glyphs
        direction = None if view.stale else relation.direction
        self.rows("head").show(draw_head(readout, silence(view), direction, width, glyphs))
        role = "over" if "SWR" in view.alarm.over else ""
        scale = draw_scale(readout.rho, width, glyphs, stale=readout.stale, limit_rho=view.limits.rho, alarm=role)
        self.rows("scale").show(scale)
        self._fit_ribbon(readout.forward.value, view)
        self.rows("ribbon").show(draw_ribbon(readout, self._ribbon_w, width, glyphs))

    def _draw_trail(self, view: View, relation: Relation) -> None:
        trail = self.rows("trail")
        gap_s = max(_GAP_S, view.lasting_s)
        rows = draw_trail(view.trail.bins(), view.now_s, *trail.size, self.glyphs, best_rho=relation.best, gap_s=gap_s)
        trail.show(rows)

    def action_ask_frequency(self) -> None:
        """Ask for the frequency."""
        question = "frequency (14.1M, 14100k, 20m):" if self.size.width >= 60 else "frequency:"
        self.query_one(Prompt).ask(question, "", self._use_frequency)

    def action_ask_limits(self) -> None:
        """Ask for the limits of the alarms."""
        limits = self.owner.limits
        question = "alarm at SWR, watts, seconds:" if self.size.width >= 60 else "SWR, W, s:"
        self.query_one(Prompt).ask(question, limits_text(limits), self._use_limits)

    def action_forget_best(self) -> None:
        """Begin a new tune-up."""
        if self._view is not None:
            self._view.trail.forget()
            self.redraw()

    def action_take_zero(self) -> None:
        """Take the running dark count as zero, or go back to the calibration's."""
        self.owner.toggle_zero()

    def _use_frequency(self, text: str) -> None:
        from calibration.units import frequency_hz  # numpy comes with it

        self.owner.set_frequency(frequency_hz(text))

    def _use_limits(self, text: str) -> None:
        self.owner.set_limits(limits_from(text))

    def _fit_ribbon(self, forward_w: float, view: View) -> None:
        """Longer at once when needed, at least as long as the limit; shorter only while the key is up."""
        if view.limits.power_w is not None:
            forward_w = max(view.limits.power_w, 0.0 if math.isnan(forward_w) else forward_w)
        if math.isnan(forward_w):
            return
        wanted = full_length_w(forward_w)
        if wanted > self._ribbon_w or (not view.key.down and wanted < _RIBBON_SHRINKS_BELOW * self._ribbon_w):
            self._ribbon_w = wanted

    @property
    def _width(self) -> int:
        """Cells of a row; before the first layout those that it will have."""
        return self.rows("trail").size.width or self.size.width


def silence(view: View) -> str:
    """Why the reading is old: "stale" and the link's own words, or its age where the link sees nothing wrong."""
    if not view.silent:
        return "stale: marked so by the bridge's own numbers"
    link = view.snapshot.link
    if link is None or link.phase == "open" or not link.words:
        return f"stale for {view.silent_s:.0f} s"
    return f"stale: {link.words}"


def limits_text(limits: Limits) -> str:
    """Limits as they are typed: "2 120 10", "-" for none."""
    return " ".join("-" if value is None else f"{value:g}" for value in (limits.swr, limits.power_w, limits.key_down_s))


def limits_from(text: str) -> Limits:
    """Limits from SWR, watts and seconds, separated by blanks; missing ones and "-" are none.

    ValueError with the reason where a number cannot be a limit.
    """
    words = text.split()
    if len(words) > 3:
        raise ValueError(f"{len(words)} numbers came; wanted SWR, watts, seconds")
    values = [_limit(word) for word in words] + [None] * (3 - len(words))
    swr, power_w, key_down_s = values
    if swr is not None and swr <= 1.0:
        raise ValueError(f"SWR {swr:g} cannot be a limit; wanted above 1")
    return Limits(swr, power_w, key_down_s)


def _limit(word: str) -> float | None:
    if word == "-":
        return None
    try:
        value = float(word.replace(",", "."))
    except ValueError:
        raise ValueError(f"{word!r} is no number; wanted like 2.0 120 10") from None
    if not (math.isfinite(value) and value > 0.0):
        raise ValueError(f"{word} cannot be a limit; wanted above 0")
    return value
