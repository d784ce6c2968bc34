"""The law growing under the builder's hands: points, the fitted curve, and the residual strip beneath.

One rule: the strip shares the plot's watts, so that a step that does not fit stands below its own point.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from functools import lru_cache
from typing import TYPE_CHECKING

from .glyphs import Glyphs
from .line import Line, Row, fit

if TYPE_CHECKING:
    from ..bench.law import LawPicture

__all__ = ["draw_law"]

#: Columns left of the plot for its figures.
_LEFT = 7
#: The strip's ends [sd].
_STRIP_SD = 4.0
_LEAST = 7  # rows below which there is no plot
_TALL = 15  # rows from which the strip has five
_BRAILLE = 0x2800
_DOT_BITS = ((0x01, 0x02, 0x04, 0x40), (0x08, 0x10, 0x20, 0x80))
_MARGIN = 0.15  # decades around what is drawn


@lru_cache(maxsize=8)
def draw_law(picture: LawPicture, width: int, height: int, glyphs: Glyphs) -> list[Row]:
    """`height` rows, none where there is no room."""
    if height < _LEAST or width < _LEFT + 16:
        return []
    title = Line(width).put(0, fit(f"{picture.side} detector: counts above dark, against watts", width), "label").row()
    if not picture.points and picture.coming is None:
        words = "no step has shown it a known power yet"
        empty = [Line(width).row() for _ in range(height - 2)]
        return [title, Line(width).put(_LEFT, fit(words, width - _LEFT), "quiet").row(), *empty]
    strip = 5 if height >= _TALL else 3
    window = _Window(picture, width, height - strip - 2)
    return [title, *_plot(picture, window, glyphs), _axis(window, glyphs), *_strip(picture, window, strip, glyphs)]


class _Window:
    """Which part of the plane is drawn: decades of watts across, of counts up."""

    def __init__(self, picture: LawPicture, width: int, rows: int) -> None:
        places = [(x, y) for x, y, _ in picture.points] + ([picture.coming] if picture.coming else [])
        self.low, self.high = _span([x for x, _ in places])
        self.bottom, self.top = _span([y for _, y in places])
        self.width, self.rows, self.cells = width, rows, width - _LEFT

    def column(self, x: float, across: int = 1) -> int:
        """Column of a place, in cells of the plot or parts of them."""
        return int((x - self.low) / (self.high - self.low) * (self.cells * across - 1) + 0.5)

    def row(self, y: float, down: int = 1) -> int:
        """Row of a place from the top."""
        return int((self.top - y) / (self.top - self.bottom) * (self.rows * down - 1) + 0.5)


def _span(values: list[float]) -> tuple[float, float]:
    low, high = min(values) - _MARGIN, max(values) + _MARGIN
    spare = max(0.0, 1.0 - (high - low)) / 2.0
    return low - spare, high + spare


def _plot(picture: LawPicture, window: _Window, glyphs: Glyphs) -> Iterable[Row]:
    lines = [Line(window.width) for _ in range(window.rows)]
    _decades(lines, window, glyphs)
    for (row, column), text in _curve(picture, window, glyphs).items():
        lines[row].put(_LEFT + column, text, "thread")
    if picture.coming is not None:
        _mark(lines, window, picture.coming, glyphs.coming, "best")
    for x, y, slip in picture.points:
        _mark(lines, window, (x, y), glyphs.limit if slip else glyphs.point, "over" if slip else "mark")
    return [line.row() for line in lines]


def _decades(lines: list[Line], window: _Window, glyphs: Glyphs) -> None:
    """Figures at whole decades of counts, and a wall."""
    for line in lines:
        line.put(_LEFT - 1, glyphs.wall, "quiet")
    for decade in range(math.ceil(window.bottom), math.floor(window.top) + 1):
        line = lines[window.row(float(decade))]
        line.put_right(_LEFT - 2, f"{10.0**decade:g}", "quiet").put(_LEFT - 1, glyphs.left_end, "quiet")


def _curve(picture: LawPicture, window: _Window, glyphs: Glyphs) -> dict[tuple[int, int], str]:
    across, down = (2, 4) if glyphs.dots else (1, 1)
    bits: dict[tuple[int, int], int] = {}
    for x, y in picture.curve:
        column, row = window.column(x, across), window.row(y, down)
        if 0 <= column < window.cells * across and 0 <= row < window.rows * down:
            cell = row // down, column // across
            bits[cell] = bits.get(cell, 0) | _DOT_BITS[column % across][row % down]
    return {cell: chr(_BRAILLE + found) if glyphs.dots else "." for cell, found in bits.items()}


def _mark(lines: list[Line], window: _Window, place: tuple[float, float], text: str, role: str) -> None:
    lines[window.row(place[1])].put(_LEFT + window.column(place[0]), text, role)


def _axis(window: _Window, glyphs: Glyphs) -> Row:
    """The watts, written at decades, once for plot and strip."""
    line = Line(window.width).put(_LEFT - 1, glyphs.left_end + glyphs.track * window.cells, "quiet")
    for decade in range(math.ceil(window.low), math.floor(window.high) + 1):
        text = f" {10.0**decade:g} W "
        at = min(_LEFT + window.column(float(decade)) - len(text) // 2, window.width - len(text))
        line.put(max(_LEFT, at), text, "label")
    return line.row()


def _strip(picture: LawPicture, window: _Window, rows: int, glyphs: Glyphs) -> Iterable[Row]:
    """What each point is off the law, in sd: within the strip or at its edge."""
    lines = [Line(window.width) for _ in range(rows)]
    for at, line in enumerate(lines):
        sigma = _STRIP_SD * (1.0 - 2.0 * at / (rows - 1))
        if at in (0, rows // 2, rows - 1):
            line.put_right(_LEFT - 2, f"{sigma:+.0f} sd" if sigma else "0", "quiet")
        line.put(_LEFT - 1, glyphs.left_end if not sigma else glyphs.wall, "quiet")
    lines[rows // 2].put(_LEFT, glyphs.track * window.cells, "quiet")
    if not picture.residuals:
        lines[rows // 2].put(_LEFT + 2, " residuals come with the first fit ", "quiet")
    for x, sigmas, slip in picture.residuals:
        part = min(max(sigmas / _STRIP_SD, -1.0), 1.0)
        beyond = slip or abs(sigmas) > _STRIP_SD
        at = int((1.0 - part) / 2.0 * (rows - 1) + 0.5)
        text, role = (glyphs.limit, "over") if beyond else (glyphs.point, "mark")
        lines[at].put(_LEFT + window.column(x), text, role)
    return [line.row() for line in lines]
