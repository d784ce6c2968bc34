"""The scale: linear in rho from 0 to 1, labelled in SWR, with the reading as a mark inside its interval.

One rule: the interval is always drawn. A mark without a band would claim to be exact.
"""

from __future__ import annotations

import math
from functools import lru_cache

from ..readout import Field
from .glyphs import Glyphs
from .line import Line, Row

__all__ = ["column", "draw_scale"]

#: SWR labels in the order in which they get room.
_LABELS = ("1", "2", "1.5", "3", "5", "1.2", "10", "1.1", "1.3", "2.5", "1.7", "4", "7", "20", "1.05", "1.4")
_GAP = 3  # cells between labels of the second choice
_FIRST_CHOICE = 7


def column(rho: float, width: int) -> int:
    """Cell of a reflection (0 to 1) on an axis of `width` cells."""
    return min(max(int(rho * (width - 1) + 0.5), 0), max(0, width - 1))


def draw_scale(
    rho: Field, width: int, glyphs: Glyphs, *, stale: bool = False, limit_rho: float | None = None, alarm: str = ""
) -> tuple[Row, Row]:
    """Labels and track with the mark. `alarm`: role of the mark where an alarm is raised, else its usual one."""
    labels, ticks = _labels(width, glyphs.infinity)
    line = Line(width)
    line.put(0, glyphs.track * width, "quiet")
    for at in ticks:
        line.put(at, glyphs.tick, "quiet")
    line.put(0, glyphs.left_end, "quiet").put(width - 1, glyphs.right_end, "quiet")
    if limit_rho is not None:
        line.put(column(limit_rho, width), glyphs.limit, "limit")
    _put_band(line, rho, width, glyphs, "stale" if stale else "band")
    if not math.isnan(rho.value):
        mark = glyphs.old_mark if stale else glyphs.mark
        line.put(column(rho.value, width), mark, "stale" if stale else alarm or "mark")
    return labels, line.row()


def _put_band(line: Line, rho: Field, width: int, glyphs: Glyphs, role: str) -> None:
    """The interval; an end without a bound runs to the end of the scale and says so by its shape."""
    if math.isnan(rho.low) or math.isnan(rho.high):
        return
    left, right = column(rho.low, width), column(rho.high, width)
    open_end = rho.high >= 1.0
    line.put(left, glyphs.band * (right - left + 1), role)
    line.put(left, glyphs.band_left, role)
    line.put(right, glyphs.open_right if open_end else glyphs.band_right, role)


@lru_cache(maxsize=32)
def _labels(width: int, infinity: str) -> tuple[Row, tuple[int, ...]]:
    """The labels that find room, most useful first, and the cells of their ticks."""
    line, ticks = Line(width), []
    line.put_right(width, infinity, "quiet")
    for rank, text in enumerate(_LABELS):
        gap = 1 if rank < _FIRST_CHOICE else _GAP
        at = column((float(text) - 1.0) / (float(text) + 1.0), width)
        left = max(0, at - (len(text) - 1) // 2)
        if line.blank(max(0, left - gap), len(text) + gap + min(gap, left)):
            line.put(left, text, "label")
            ticks.append(at)
    return line.row(), tuple(ticks)
