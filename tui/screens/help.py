"""The help page: keys, what the parts mean, and the cautions, taken from the guide beside the code.

One rule: it covers the whole screen. A number that no longer moves must not be seen beneath it.
"""

from __future__ import annotations

import re
from importlib import resources
from typing import ClassVar

from textual.app import ComposeResult
from textual.binding import Binding, BindingType
from textual.containers import VerticalScroll
from textual.screen import Screen
from textual.widgets import Static

from ..widgets.key_bar import KeyBar

__all__ = ["Help", "guide_text"]

_KEYS = (
    ("Escape", "back to the reading", "back", "screen.leave"),
    ("arrows", "scroll", "scroll", ""),
    ("q", "quit", "quit", "app.quit"),
)


class Help(Screen[None]):
    """Scroll with the arrow keys; Escape or ? goes back."""

    BINDINGS: ClassVar[list[BindingType]] = [Binding("escape,question_mark", "leave", "back")]

    def __init__(self, ascii_only: bool) -> None:
        """`ascii_only`: leave out the symbols that the terminal cannot draw."""
        super().__init__()
        self._ascii_only = ascii_only

    def compose(self) -> ComposeResult:
        """The guide, and how to leave it."""
        with VerticalScroll(id="help-text"):
            yield Static(guide_text(self._ascii_only), markup=False)
        yield KeyBar("help-keys", _KEYS)

    def action_leave(self) -> None:
        """Back to the reading."""
        self.app.pop_screen()


def guide_text(ascii_only: bool) -> str:
    """The guide as plain text: one line a paragraph or item, without the marks of its markup."""
    raw = resources.files("tui").joinpath("GUIDE.md").read_text(encoding="utf-8")
    if ascii_only:
        raw = re.sub(r" or `[^`\x00-\x7f]+`", "", raw)
    joined = re.sub(r"(?<=\S)\n {0,2}(?![-#\s])", " ", raw)
    return re.sub(r"^#+ |\*\*|`", "", joined, flags=re.MULTILINE)
