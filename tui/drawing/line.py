"""Rows of text whose parts carry a role ("strong", "over" ...), and a line of cells to compose them on.

One rule: a row is exactly as wide as it was asked to be, in cells of the terminal, whatever the text.
"""

from __future__ import annotations

import unicodedata
from collections.abc import Iterable
from itertools import pairwise
from typing import TypeAlias

from rich.cells import cell_len

from ..door import visible

__all__ = ["Line", "Piece", "Row", "fit", "outside", "text_of", "width_of"]

#: A text and its role. Roles are listed in `tui.palette`.
Piece: TypeAlias = tuple[str, str]
Row: TypeAlias = tuple[Piece, ...]


class Line:
    """`width` cells, blank at first; later puts cover earlier ones."""

    def __init__(self, width: int) -> None:
        """Make a blank line. A width below 1 gives an empty one."""
        self._texts = [" "] * max(0, width)
        self._roles = [""] * max(0, width)

    def put(self, at: int, text: str, role: str = "") -> Line:
        """Write `text` from cell `at` on; what does not fit is cut. Returns the line itself.

        Outside text must have come through `outside`, so that each character has cells of its own.
        """
        if width_of(text) == len(text):
            self._put_plain(at, text, role)
            return self
        width = len(self._texts)
        for char in text:
            cells = width_of(char)
            if at >= 0 and at + cells <= width:
                self._part(at, at + cells)
                self._texts[at], self._roles[at] = char, role
                for beyond in range(at + 1, at + cells):
                    self._texts[beyond], self._roles[beyond] = "", role
            at += cells
        return self

    def _put_plain(self, at: int, text: str, role: str) -> None:
        """`put` of a text whose characters take one cell each, all at once."""
        text = text[max(0, -at) : max(0, len(self._texts) - at)]
        at = max(0, at)
        self._part(at, at + len(text))
        self._texts[at : at + len(text)] = text
        self._roles[at : at + len(text)] = [role] * len(text)

    def _part(self, *edges: int) -> None:
        """Blank the wide characters that an edge, a cell about to become the first of something, runs through."""
        for at in edges:
            if 0 < at < len(self._texts) and self._texts[at] == "":
                self._texts[at - 1] = self._texts[at] = " "

    def put_right(self, end: int, text: str, role: str = "") -> Line:
        """Write `text` so that it ends before cell `end`."""
        return self.put(end - width_of(text), text, role)

    def put_row(self, at: int, pieces: Iterable[Piece]) -> Line:
        """Write pieces one after the other."""
        for text, role in pieces:
            self.put(at, text, role)
            at += width_of(text)
        return self

    def blank(self, at: int, cells: int) -> bool:
        """Whether `cells` cells from `at` on exist and hold nothing."""
        return at >= 0 and at + cells <= len(self._texts) and not "".join(self._texts[at : at + cells]).strip()

    def row(self) -> Row:
        """The line as few pieces, neighbours of one role joined."""
        roles = self._roles
        starts = [at for at, (before, role) in enumerate(pairwise(roles), 1) if before != role]
        ends = pairwise([0, *starts, len(roles)]) if roles else ()
        return tuple(("".join(self._texts[at:end]), roles[at]) for at, end in ends)


def text_of(row: Row) -> str:
    """The text of a row without its roles."""
    return "".join(text for text, _ in row)


def width_of(text: str) -> int:
    """Cells that `text` takes."""
    return len(text) if text.isascii() else cell_len(text)


def fit(text: str, width: int) -> str:
    """`text` cut to `width` cells; where something is cut the last cells say so with dots."""
    if width_of(text) <= width:
        return text
    if width < 2:
        return "." * max(0, width)
    kept = ""
    for char in text:
        if width_of(kept + char) > width - 2:
            break
        kept += char
    return kept.rstrip() + ".."


def outside(text: str, ascii_only: bool) -> str:
    """Text from outside the program through the one door, in the terminal's alphabet and countable in cells.

    Characters that take no cell of their own, or join with their neighbours, are written as escapes too.
    """
    shown = unicodedata.normalize("NFC", visible(text))
    if ascii_only:
        return shown.encode("ascii", "backslashreplace").decode("ascii")
    return "".join(char if _has_own_cells(char) else char.encode("unicode_escape").decode("ascii") for char in shown)


def _has_own_cells(char: str) -> bool:
    joins = "\U0001f1e6" <= char <= "\U0001f1ff" or "\U0001f3fb" <= char <= "\U0001f3ff"  # flags, skin tones
    return char.isascii() or (not joins and cell_len(char) > 0)
