"""Rows of finished text on the Line API.

One rule: a row is repainted only where it changed, and nothing here ever asks for a new layout.
"""

from __future__ import annotations

import re
from collections.abc import Sequence

from rich.segment import Segment
from textual.geometry import Region
from textual.strip import Strip
from textual.widget import Widget

from ..drawing.line import Row, text_of
from ..palette import PLAIN, Palette

__all__ = ["Rows", "changed_span"]

#: Characters that may not be one cell wide.
_UNSURE = re.compile(r"[^\x00-\u10ff\u2000-\u28ff]")


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
    before, after = text_of(old), text_of(new)
    if len(before) != len(after) or _UNSURE.search(before) or _UNSURE.search(after):
        return 0, max(len(before), len(after)) * 2
    first = _shared(old, new)
    if first == len(after):
        return 0, 0
    return first, len(after) - _shared(_mirrored(old), _mirrored(new))


def _shared(old: Row, new: Row) -> int:
    """Cells that two rows share from their left end on."""
    cells = 0
    for (before, role), (after, new_role) in zip(old, new, strict=False):
        if role != new_role:
            break
        if before != after:
            return cells + _first_difference(before, after)
        cells += len(after)
    return cells


def _first_difference(one: str, other: str) -> int:
    pairs = enumerate(zip(one, other, strict=False))
    return next((at for at, (mine, its) in pairs if mine != its), min(len(one), len(other)))


def _mirrored(row: Row) -> Row:
    return tuple((text[::-1], role) for text, role in reversed(row))
