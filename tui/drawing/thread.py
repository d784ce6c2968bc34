"""The trail as a thread that hangs from the scale: same horizontal axis, time running down, newest on top.

One rule: every row keeps its place in time. Older seconds are pressed closer together, so that the last few, in
which the knob turns, get most of the room while the whole minute stays in sight.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator
from functools import lru_cache
from itertools import pairwise

from ..trail import SPAN_S, Bin
from .glyphs import Glyphs
from .line import Line, Row
from .scale import column

__all__ = ["age_at", "draw_trail", "part_at"]

_STRETCH = 0.15  # of the height goes evenly with age, the rest with its square
_LABEL_AGES = (5.0, 15.0, 30.0, 60.0)
_STEP_S = 0.2  # where a line of dots is longer than this the thread moves on in such steps: hardly seen, half the work
_LABEL_WIDTH = 50  # narrower than this, the right-hand labels are dropped
_DOT_BITS = ((0x01, 0x08), (0x02, 0x10), (0x04, 0x20), (0x40, 0x80))
_BRAILLE = 0x2800

#: Span of the thread in one line of dots, in dot columns; None where it has a gap.
_Span = tuple[int, int] | None


def age_at(part: float) -> float:
    """Age [s] at a part (0 top, 1 bottom) of the height."""
    return SPAN_S * part * (_STRETCH + (1.0 - _STRETCH) * part)


def part_at(age_s: float) -> float:
    """Part of the height (0 top, 1 bottom) for an age [s]: the inverse of `age_at`."""
    bend = 1.0 - _STRETCH
    return (math.sqrt(_STRETCH**2 + 4.0 * bend * max(0.0, age_s) / SPAN_S) - _STRETCH) / (2.0 * bend)


def draw_trail(
    bins: Iterable[Bin],
    now_s: float,
    width: int,
    height: int,
    glyphs: Glyphs,
    *,
    best_rho: float | None = None,
    gap_s: float = 0.35,
) -> list[Row]:
    """`height` rows. `bins` newest first; a time longer than `gap_s` [s] without a reading breaks the thread."""
    if height < 1 or width < 1:
        return []
    across, down = (2, 4) if glyphs.dots else (1, 1)
    spans = _spans(bins, now_s, width, across, height * down, gap_s)
    rule = None if best_rho is None else column(best_rho, width)
    labels = _age_labels(height) if width >= _LABEL_WIDTH else {}
    return [
        _row(tuple(spans[at * down : (at + 1) * down]), width, rule, labels.get(at, ""), glyphs) for at in range(height)
    ]


def _spans(bins: Iterable[Bin], now_s: float, width: int, across: int, lines: int, gap_s: float) -> list[_Span]:
    """What the thread covers in each line of dots: every bin's own span, and straight joins between neighbours.

    Neighbours that are joined within one line are one span, so that only lines, not bins, cost much.
    """
    spans: list[_Span] = [None] * lines
    ends, at = _ends(lines), 0
    step_from_s, stepped_s = _step_from_s(lines), math.floor(now_s / _STEP_S) * _STEP_S
    newer: Bin | None = None
    newer_at, low, high = -1, 1.0, 0.0
    for each in bins:
        age_s = now_s - each.to_s
        if age_s > step_from_s:
            age_s = stepped_s - each.to_s
        while at < lines and age_s >= ends[at]:
            at += 1
        if at == lines:
            break
        joined = newer is not None and newer.from_s - each.to_s <= gap_s
        if joined and at == newer_at:
            low, high = min(low, each.low), max(high, each.high)
        else:
            if newer is not None:
                _widen(spans, newer_at, _dot(low, width, across), _dot(high, width, across))
                if joined:
                    _join(spans, newer_at, _dot(newer.last, width, across), at, _dot(each.last, width, across))
            low, high = each.low, each.high
        newer, newer_at = each, at
    if newer is not None:
        _widen(spans, newer_at, _dot(low, width, across), _dot(high, width, across))
    return spans


@lru_cache(maxsize=32)
def _ends(lines: int) -> tuple[float, ...]:
    """Age [s] at which each line of dots ends."""
    return tuple(age_at((at + 1) / lines) for at in range(lines))


@lru_cache(maxsize=32)
def _step_from_s(lines: int) -> float:
    """Age [s] from which on a line of dots stands for more than a step."""
    ends = _ends(lines)
    return next((before for before, end in pairwise(ends) if end - before >= _STEP_S), SPAN_S)


def _dot(rho: float, width: int, across: int) -> int:
    """Dot column of a reflection; the cell's middle is where `column` changes."""
    return min(max(int((rho * (width - 1) + 0.5) * across), 0), width * across - 1)


def _join(spans: list[_Span], upper: int, upper_dot: int, lower: int, lower_dot: int) -> None:
    steps = lower - upper
    for step in range(steps):
        begin = upper_dot + (lower_dot - upper_dot) * step // steps
        end = upper_dot + (lower_dot - upper_dot) * (step + 1) // steps
        _widen(spans, upper + step, min(begin, end), max(begin, end))


def _widen(spans: list[_Span], at: int, low: int, high: int) -> None:
    span = spans[at]
    spans[at] = (low, high) if span is None else (min(span[0], low), max(span[1], high))


@lru_cache(maxsize=512)
def _row(spans: tuple[_Span, ...], width: int, rule: int | None, label: str, glyphs: Glyphs) -> Row:
    """One row of cells from its lines of dots. Cached: most rows are as they were a moment ago."""
    line = Line(width)
    if label:
        line.put_right(width, label, "quiet")
    if rule is not None:
        line.put(rule, glyphs.best, "best")
    for at, text in _runs(_cells(spans, glyphs)):
        line.put(at, text, "thread")
    return line.row()


def _runs(cells: dict[int, str]) -> Iterator[tuple[int, str]]:
    """Neighbouring cells as one text with the place of its first."""
    text, end = "", -1
    for at in sorted(cells):
        if at != end and text:
            yield end - len(text), text
            text = ""
        text, end = text + cells[at], at + 1
    if text:
        yield end - len(text), text


def _cells(spans: tuple[_Span, ...], glyphs: Glyphs) -> dict[int, str]:
    if not glyphs.dots:
        return {at: "*" for span in spans if span for at in range(span[0], span[1] + 1)}
    bits: dict[int, int] = {}
    for span, pair in zip(spans, _DOT_BITS, strict=True):
        for dot in range(span[0], span[1] + 1) if span else ():
            bits[dot // 2] = bits.get(dot // 2, 0) | pair[dot % 2]
    return {at: chr(_BRAILLE + found) for at, found in bits.items()}


@lru_cache(maxsize=32)
def _age_labels(height: int) -> dict[int, str]:
    """Row -> its label: the age at which the row stands; none where two would fall on neighbouring rows."""
    labels = {0: "now"}
    for age_s in _LABEL_AGES:
        at = min(int(part_at(age_s) * height), height - 1)
        if at - 1 not in labels and at not in labels:
            labels[at] = f"-{age_s:.0f} s"
    return labels
