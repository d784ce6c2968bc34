"""The head of the Tune-up screen: SWR in large figures, its interval beside it, net power to the right.

One rule: every field has one place. Where its value is missing, the word for why stands there.
"""

from __future__ import annotations

from ..readout import Readout
from .digits import HEIGHT, large
from .glyphs import Glyphs
from .line import Line, Row, fit, outside
from .ribbon import watts

__all__ = ["draw_head"]

_NAME = "SWR"
_FIGURES_AT = 4
_BESIDE = 28  # where the interval stands
_BESIDE_NARROW = 24
_RIGHT_COLUMN = 53  # where net power stands; dropped on narrower screens than it needs
_NEEDED = 70
_NARROW = 60
_DIRECTIONS = {-1: ("towards", "better"), 1: ("away", "worse"), 0: ("same", "steady")}


def draw_head(readout: Readout, silence: str, direction: int | None, width: int, glyphs: Glyphs) -> list[Row]:
    """Three rows. `silence` says why the reading is old; `direction` is -1 to a better match, +1 away, 0 steady."""
    lines = [Line(width) for _ in range(HEIGHT)]
    lines[1].put(0, _NAME, "label")
    beside = _BESIDE if width >= _NARROW else _BESIDE_NARROW
    large_enough = _put_figures(lines, readout, beside, glyphs)
    # The interval has its place beside the figures; on a narrow screen a long word pushes it a row down.
    room_beside = large_enough or width >= _NARROW
    row, at = (1, beside) if room_beside else (2, _FIGURES_AT)
    was = "was " if readout.stale and readout.swr.interval else ""
    lines[row].put(at, was + readout.swr.interval, "stale" if readout.stale else "strong")
    if readout.stale:
        said = silence if width >= _NARROW or not large_enough else "stale"
        _put_silence(lines[0], outside(said, not glyphs.dots), beside if large_enough else 0, width)
    elif room_beside:
        _put_direction(lines[2], beside, direction, glyphs)
    if width >= _NEEDED:
        _put_net(lines, readout)
    return [line.row() for line in lines]


def _put_figures(lines: list[Line], readout: Readout, beside: int, glyphs: Glyphs) -> bool:
    """SWR in large figures where there is one and it fits, else its text or the word for why there is none."""
    text, stale = readout.swr.text, readout.stale
    rows = large(text, not glyphs.dots, stale)
    if text and _FIGURES_AT + len(rows[0]) < beside:
        for line, row in zip(lines, rows, strict=True):
            line.put(_FIGURES_AT, row, "stale" if stale else "figures")
        return True
    lines[1].put(_FIGURES_AT, text or readout.swr.word, "stale" if stale else "word")
    return False


def _put_silence(line: Line, words: str, at: int, width: int) -> None:
    line.put(at, fit(words, width - at), "over")


def _put_direction(line: Line, at: int, direction: int | None, glyphs: Glyphs) -> None:
    if direction is None:
        return
    name, words = _DIRECTIONS[direction]
    symbol = {"towards": glyphs.towards, "away": glyphs.away, "same": glyphs.same}[name]
    line.put_row(at, ((symbol + " ", f"turn-{name}"), (words, "quiet")))


def _put_net(lines: list[Line], readout: Readout) -> None:
    net, role = readout.net, "stale" if readout.stale else "strong"
    text = watts(net, readout.stale)
    lines[1].put_row(_RIGHT_COLUMN, (("net ", "label"), (text, role if net.text else "word")))
    lines[2].put(_RIGHT_COLUMN + 4, net.interval and f"{net.interval} W", "quiet")
