"""Rows of finished text on the Line API.

One rule: a row is repainted only where it changed, and nothing here ever asks for a new layout.
"""

from __future__ import annotations

from collections.abc import Sequence

from rich.segment import Segment
from textual.geometry import Region
from textual.strip import Strip
from textual.widget import Widget

from ..drawing.line import Row, text_of
from ..palette import PLAIN, Palette

__all__ = ["Rows", "changed_span"]


class Rows(Widget):
    """Shows rows handed to it by `show`; draws nothing by itself."""

    can_focus = False

    def __init__(self, id: str) -> None:
        """An empty widget; `id` places it by the style sheet."""
        super().__init__(id=id)
        self._rows: tuple[Row, ...] = ()
        self._palette: Palette = PLAIN

    @property
    def text(self) -> str:
        """What is shown, as plain text."""
        return "\n".join(text_of(row).rstrip() for row in self._rows)

    def show(self, rows: Sequence[Row]) -> bool:
        """Show other rows; True where anything changed. Unchanged cells are left alone."""
        before, self._rows = self._rows, tuple(rows)
        if before == self._rows:
            return False
        regions = []
        for at in range(max(len(before), len(self._rows))):
            old = before[at] if at < len(before) else ()
            new = self._rows[at] if at < len(self._rows) else ()
            if old != new:
                first, end = changed_span(old, new)
                regions.append(Region(first, at, max(1, end - first), 1))
        self.refresh(*regions)
        return True

    def dress(self, palette: Palette) -> None:
        """Use other colours."""
        self._palette = palette
        self.refresh()

    def render_line(self, y: int) -> Strip:
        """One row as a strip as wide as the widget."""
        styles = self._palette.styles
        row = self._rows[y] if y < len(self._rows) else ()
        strip = Strip([Segment(text, styles[role]) for text, role in row])
        return strip.adjust_cell_length(self.size.width, styles[""])


def changed_span(old: Row, new: Row) -> tuple[int, int]:
    """First cell that differs between two rows, and the cell after the last. Whole rows where cells are not chars."""
    before, after = _cells(old), _cells(new)
    if before is None or after is None or len(before) != len(after):
        return 0, max(len(text_of(old)), len(text_of(new))) * 2
    differing = [at for at, (one, other) in enumerate(zip(before, after, strict=True)) if one != other]
    return (differing[0], differing[-1] + 1) if differing else (0, 0)


def _cells(row: Row) -> list[tuple[str, str]] | None:
    """Each cell's character and role, None where a character may not be one cell wide."""
    cells: list[tuple[str, str]] = []
    for text, role in row:
        if not text.isascii() and any(ord(char) >= 0x1100 and not 0x2000 <= ord(char) < 0x2900 for char in text):
            return None
        cells += [(char, role) for char in text]
    return cells
