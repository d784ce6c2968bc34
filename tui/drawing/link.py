"""The Link screen's body: three groups of facts side by side, in two columns, or one below the other.

One rule: where there is room for all of it nothing moves; where there is not, the most important comes first. Only
trouble takes the rows it needs.
"""

from __future__ import annotations

from collections.abc import Sequence

from ..messages import View
from .count_words import count_facts
from .facts import Fact
from .glyphs import Glyphs
from .line import Line, Row, fit, width_of
from .wire_words import bridge_facts, line_facts, said_facts

__all__ = ["draw_link", "wrapped"]

_LABEL = 11  # cells of a label with its gap
_GAP = 2
_THREE, _TWO = 105, 64  # widths from which there are so many columns
_FIRST = 6  # facts of the line that a narrow screen has above the counts
_MOST_ROWS = 3  # of one sentence where there is room
_AIRY = 6  # rows to spare from which groups are set apart
_TROUBLE = ("word", "over")  # roles of what is told whole even where it pushes the rest down


def draw_link(view: View, width: int, height: int, glyphs: Glyphs) -> list[Row]:
    """All rows at this width, as many as it takes; `height` decides whether groups are set apart and sentences long."""
    if width < _TWO:
        return _stacked(view, width, glyphs)
    columns = _three(view, width, glyphs) if width >= _THREE else _two(view, width, glyphs)
    said = said_facts(view, glyphs)
    spare = height - len(columns) - len(said)
    rows = list(columns)
    if spare >= _AIRY:
        rows.append(Line(width).row())
    most = _MOST_ROWS if spare >= _AIRY else 1
    for fact in said:
        rows += wrapped(fact, width, _MOST_ROWS if fact.role in _TROUBLE else most)
    return rows


def wrapped(fact: Fact, width: int, most: int) -> list[Row]:
    """A fact in up to `most` rows, broken between words; what is left is cut and says so."""
    room = width - _LABEL
    rows, rest = [], fact.text
    for at in range(max(1, most)):
        part = rest if at == most - 1 else _head(rest, room)
        rest = rest[len(part) :].lstrip()
        line = Line(width).put(0, fact.label if not at else "", "label")
        rows.append(line.put(_LABEL, fit(part.rstrip(), room), fact.role).row())
        if not rest:
            break
    return rows


def _head(text: str, room: int) -> str:
    """The longest beginning that ends between words and fits; cut within a word only where one word is too long."""
    if width_of(text) <= room:
        return text
    end, cells = 0, 0
    for char in text:
        cells += width_of(char)
        if cells > room:
            break
        end += 1
    space = text.rfind(" ", 0, end + 1)
    return text[:space] if space > 0 else text[: max(1, end)]


def _three(view: View, width: int, glyphs: Glyphs) -> list[Row]:
    counts = [*count_facts(view, glyphs, 0), Fact("", ""), *count_facts(view, glyphs, 1)]
    return _beside(
        width, (_group("the line", line_facts(view, glyphs)), _bridge(view, glyphs), _group("the counts", counts))
    )


def _two(view: View, width: int, glyphs: Glyphs) -> list[Row]:
    above = _beside(width, (_group("the line", line_facts(view, glyphs)), _bridge(view, glyphs)))
    forward = _group("the counts", count_facts(view, glyphs, 0))
    return [*above, *_beside(width, (forward, _group("", count_facts(view, glyphs, 1))))]


def _stacked(view: View, width: int, glyphs: Glyphs) -> list[Row]:
    """One column: how the line does, the counts, what readings are made by, and then the rest."""
    line, bridge = line_facts(view, glyphs), _bridge(view, glyphs)
    counts = [count_facts(view, glyphs, side) for side in (0, 1)]
    rows = [_row(fact, width) for fact in [*line[:_FIRST], *counts[0][:2], *counts[1][:2]]]
    for fact in said_facts(view, glyphs):
        rows += wrapped(fact, width, _MOST_ROWS)
    rest = [*counts[0][2:], *counts[1][2:], *bridge, *line[_FIRST:]]
    return rows + [_row(fact, width) for fact in rest]


def _bridge(view: View, glyphs: Glyphs) -> list[Fact]:
    return _group("the bridge", bridge_facts(view, glyphs))


def _group(heading: str, facts: Sequence[Fact]) -> list[Fact]:
    return [Fact("", heading, "heading"), *facts]


def _beside(width: int, columns: Sequence[Sequence[Fact]]) -> list[Row]:
    """Columns of equal width side by side."""
    each = (width - _GAP * (len(columns) - 1)) // len(columns)
    rows = []
    for at in range(max(map(len, columns))):
        line = Line(width)
        for column, facts in enumerate(columns):
            if at < len(facts):
                line.put_row(column * (each + _GAP), _row(facts[at], each))
        rows.append(line.row())
    return rows


def _row(fact: Fact, width: int) -> Row:
    if fact.role == "heading":
        return Line(width).put(0, fit(fact.text, width), "strong").row()
    return Line(width).put(0, fact.label, "label").put(_LABEL, fit(fact.text, width - _LABEL), fact.role).row()
