"""What all screens share: they paint from a view, and only when they are on top.

One rule: a screen keeps nothing of a reading; the app hands it everything it paints.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, cast

from textual.screen import Screen

from ..drawing.glyphs import ASCII, Glyphs
from ..messages import View
from ..palette import PLAIN, Palette
from ..widgets.rows import Rows

if TYPE_CHECKING:
    from ..app import BridgewrightApp

__all__ = ["LiveScreen"]


class LiveScreen(Screen[None]):
    """A screen that shows readings as they come. Its own part is `compose` and `draw`."""

    AUTO_FOCUS = ""
    glyphs: Glyphs = ASCII
    palette: Palette = PLAIN
    first: View | None = None
    _view: View | None = None

    def on_mount(self) -> None:
        """Dress and draw once all widgets are there, so that the first picture is already a whole one."""
        self.dress(self.palette)
        if self.first is not None:
            self.paint(self.first)

    def on_screen_resume(self) -> None:
        """Nothing was painted while another screen was on top, and the colours may be others."""
        if self._view is not None:
            self.owner.repaint()

    @property
    def owner(self) -> BridgewrightApp:
        """The app, which a key asks to do something."""
        return cast("BridgewrightApp", self.app)

    def rows(self, name: str) -> Rows:
        """The widget of that name."""
        return self.query_one(f"#{name}", Rows)

    def paint(self, view: View) -> None:
        """Show `view` from now on."""
        self._view = view
        self.draw(view)

    def draw(self, view: View) -> None:
        """Hand rows to the widgets; each screen's own."""
        raise NotImplementedError

    def on_resize(self) -> None:
        """Draw for the other size once the widgets have theirs."""
        self.call_after_refresh(self.redraw)

    def redraw(self) -> None:
        """Draw the last view once more."""
        if self._view is not None:
            self.draw(self._view)

    def dress(self, palette: Palette) -> None:
        """Use other colours."""
        self.palette = palette
        self.styles.background = palette.ground if palette is not PLAIN else "ansi_default"
        for rows in self.query(Rows):
            rows.dress(palette)
