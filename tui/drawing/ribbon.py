"""The power ribbon: forward power as one ribbon, split where the returned part begins.

One rule: the ribbon's full length only changes in steps of 1, 2, 5, and shrinks only when asked to, so that its
length means the same from one moment to the next.
"""

from __future__ import annotations

import math

from ..readout import Field, Readout
from .glyphs import Glyphs
from .line import Line, Row, width_of

__all__ = ["draw_ribbon", "full_length_w"]

_NAME = "forward "
_NARROW = 60


def full_length_w(crest_w: float) -> float:
    """The smallest of 1, 2, 5 times a power of ten that is at least `crest_w` [W]; never below 1 W."""
    if not math.isfinite(crest_w) or crest_w <= 1.0:
        return 1.0
    decade = 10.0 ** math.floor(math.log10(crest_w) + 1e-9)
    return next(step * decade for step in (1.0, 2.0, 5.0, 10.0) if step * decade >= crest_w * (1.0 - 1e-9))


def draw_ribbon(readout: Readout, full_w: float, width: int, glyphs: Glyphs) -> tuple[Row, Row]:
    """The ribbon with forward's text before it and its full length [W] after it, and the words beneath it."""
    forward, role = readout.forward, "stale" if readout.stale else "strong"
    before = 23 if width >= _NARROW else 8
    after = 8 if width >= _NARROW else 7
    cells = max(4, width - before - after - 2)
    line = Line(width)
    if width >= _NARROW:
        line.put(0, _NAME, "label").put(len(_NAME), watts(forward, readout.stale), role if forward.text else "word")
    else:
        line.put(0, "forward", "label")
    line.put(before, "|", "quiet").put(before + 1 + cells, "|", "quiet")
    line.put(before + 3 + cells, f"{full_w:g} W", "quiet")
    _put_ribbon(line, readout, full_w, before + 1, cells, glyphs)
    return line.row(), _words(readout, width, before + 1, cells)


def watts(field: Field, stale: bool = False) -> str:
    """A power with its unit, or the word for why there is none; one that is old says so."""
    return f"{'was ' if stale else ''}{field.text} W" if field.text else field.word


def _put_ribbon(line: Line, readout: Readout, full_w: float, at: int, cells: int, glyphs: Glyphs) -> None:
    line.put(at, glyphs.empty * cells, "quiet")
    if math.isnan(readout.forward.value):
        return
    ends = _Ends(full_w, cells)
    tip = ends.cell(readout.forward.value)
    split = tip if math.isnan(readout.net.value) else min(tip, ends.cell(readout.net.value))
    if readout.stale:
        line.put(at, glyphs.old * tip, "stale")
        return
    line.put(at, glyphs.delivered * split, "delivered")
    line.put(at + split, glyphs.returned * (tip - split), "returned")
    if readout.forward.value > full_w:
        line.put(at + cells - 1, ">", "strong")
    elif not math.isnan(readout.forward.high):
        reach = ends.cell(readout.forward.high)  # the upper half of the interval; the lower half lies beneath
        if reach > tip:
            line.put(at + tip, glyphs.band * (reach - tip - 1) + glyphs.band_right, "band")


class _Ends:
    """Cells for powers on a ribbon."""

    def __init__(self, full_w: float, cells: int) -> None:
        self._full_w, self._cells = full_w, cells

    def cell(self, power_w: float) -> int:
        return min(max(int(power_w / self._full_w * self._cells + 0.5), 0), self._cells)


def _words(readout: Readout, width: int, at: int, cells: int) -> Row:
    """What is delivered and what comes back, each at a fixed place."""
    role = "stale" if readout.stale else ""
    line = Line(width)
    if width < _NARROW:
        line.put(0, f"{watts(readout.forward, readout.stale)}", role)
        was = "was " if readout.stale else ""
        text = f"net {was}{readout.net.text}  back {was}{readout.reflected.text}" if readout.net.text else ""
        return line.put_right(width, text, role).row()
    if not readout.forward.text:
        bound = readout.forward.interval and f"{readout.forward.interval} W"
        return line.put(at, bound, "quiet").row()
    line.put(len(_NAME), readout.forward.interval and f"{readout.forward.interval} W", "quiet")
    line.put(at, f"delivered {watts(readout.net, readout.stale)}", role)
    text = f"returned {watts(readout.reflected, readout.stale)}"
    return line.put_right(max(at + cells, width_of(text)), text, role).row()
