"""The Link screen: what the wire says, in words that a person could read aloud.

One rule: nobody turns a knob by it. It is drawn a few times a second however fast frames come.
"""

from __future__ import annotations

from typing import ClassVar

from textual import events
from textual.app import ComposeResult
from textual.binding import Binding, BindingType

from ..drawing.edges import draw_alarm, draw_status
from ..drawing.link import draw_link
from ..messages import View
from ..widgets.key_bar import KeyBar
from ..widgets.rows import Rows
from .live import LiveScreen

__all__ = ["KEYS", "LinkScreen"]

#: As in the other screens: key, words, words for a narrow screen, action.
KEYS = (
    ("s", "screens", "screen", "app.next_screen"),
    ("arrows", "scroll", "scroll", ""),
    ("d", "dark/light", "", "app.toggle_dark"),
    ("?", "help", "help", "app.help"),
    ("q", "quit", "quit", "app.quit"),
)
_EVERY_S = 0.25


class LinkScreen(LiveScreen):
    """See the module."""

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("down", "scroll_by(1)", "down"),
        Binding("up", "scroll_by(-1)", "up"),
        Binding("pagedown", "scroll_by(8)", "page down"),
        Binding("pageup", "scroll_by(-8)", "page up"),
    ]

    def __init__(self) -> None:
        """At the top."""
        super().__init__()
        self._top = 0
        self._drawn: tuple[object, ...] = ()
        self._due_s = float("-inf")

    def compose(self) -> ComposeResult:
        """From top to bottom; the facts have what the lines around them leave."""
        for name in ("status", "facts", "alarm"):
            yield Rows(name)
        yield KeyBar("keys", KEYS)

    def paint(self, view: View) -> None:
        """Show `view`, at once only where something has happened that a person should know."""
        self._view = view
        news = (view.snapshot.link, view.snapshot.journal, view.snapshot.note, view.alarm, view.silent)
        if news != self._drawn or view.now_s >= self._due_s:
            self._drawn, self._due_s = news, view.now_s + _EVERY_S
            self.draw(view)

    def draw(self, view: View) -> None:
        """Hand each widget its rows."""
        facts = self.rows("facts")
        width, height = facts.size.width or self.size.width, facts.size.height or self.size.height
        self.rows("status").show([draw_status(view.snapshot, view.key, view.limits, width, self.glyphs)])
        self.rows("alarm").show([draw_alarm(view.alarm, view.limits, width, key="")])
        rows = draw_link(view, width, height, self.glyphs)
        self._top = max(0, min(self._top, len(rows) - height))
        facts.show(rows[self._top : self._top + height])

    def action_scroll_by(self, rows: int) -> None:
        """Move on by so many rows where the screen is too small for all."""
        self._top += rows
        self.redraw()

    def on_mouse_scroll_down(self, event: events.MouseScrollDown) -> None:
        """The wheel does what the arrows do."""
        self.action_scroll_by(2)

    def on_mouse_scroll_up(self, event: events.MouseScrollUp) -> None:
        """The wheel does what the arrows do."""
        self.action_scroll_by(-2)
