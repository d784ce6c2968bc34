"""The Bench screen's body: what it would give, the steps, the law growing, and what to do now.

One rule: every part keeps its place and its rows. Before a key-down the cautions take the place of the law.
"""

from __future__ import annotations

import textwrap
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from .glyphs import Glyphs
from .law_plot import draw_law
from .line import Line, Piece, Row, fit, outside, width_of

if TYPE_CHECKING:
    from ..bench.choices import Entry
    from ..bench.law import LawPicture

__all__ = ["Asking", "Scene", "draw_asking", "draw_bench"]

_WIDE = 100  # from here on the law stands beside the list
_NARROW = 60
_LIST_PART = 0.5
_LEAST_LAW = 7
_SHORT, _NOTED = 14, 36  # characters of a note that keeps its room, on rows from this width
_HINT = 3  # rows that a hint above the questions may take


@dataclass(frozen=True, slots=True)
class Scene:
    """What is drawn; (text, role) where the role is not always the same. Texts are raw: drawing makes them visible.

    forecast: what the calibration would give. first: what is to be said before all else. taken, choices: the list,
    with the cursor in `choices`. instruction: one sentence. heeding: the cautions are to be read now. state: of the
    counts; progress 0..1 of two windows. more: heat, wattmeter, news.
    """

    forecast: str
    first: tuple[Piece, ...]
    taken: tuple[Entry, ...]
    choices: tuple[Entry, ...]
    cursor: int
    instruction: Piece
    cautions: tuple[str, ...]
    heeding: bool
    state: Piece
    progress: float | None
    more: tuple[Piece, ...]
    law: LawPicture


@dataclass(frozen=True, slots=True)
class Asking:
    """Questions being answered: what for, the answers so far as (label, text), and the question."""

    purpose: str
    answers: tuple[tuple[str, str], ...]
    label: str
    sentence: str
    default: str


def draw_bench(scene: Scene, width: int, height: int, glyphs: Glyphs) -> list[Row]:
    """`height` rows of `width` cells."""
    top, bottom = _top(scene, width, height, glyphs), _bottom(scene, width, height, glyphs)
    room = max(0, height - len(top) - len(bottom))
    middle = _beside(scene, width, room, glyphs) if width >= _WIDE else _stacked(scene, width, room, glyphs)
    return [*top, *_padded(middle, width, room), *bottom][:height]


def draw_asking(asking: Asking, width: int, height: int, glyphs: Glyphs) -> list[Row]:
    """The question under the answers that have been given; the newest of these stay in sight."""
    rows = [*_wrapped((asking.purpose, "label"), width, _HINT, glyphs), _blank(width)]
    question = [*_wrapped((asking.sentence, "strong"), width, 3, glyphs)]
    question += _wrapped((f"Enter takes {asking.default}; Escape leaves", "quiet"), width, 1, glyphs)
    room = max(0, height - len(rows) - len(question) - 1)
    column = max((len(label) for label, _ in asking.answers), default=0) + 2
    for label, text in asking.answers[len(asking.answers) - min(room, len(asking.answers)) :]:
        line = Line(width).put(0, label, "label")
        rows.append(line.put(column, fit(outside(text, not glyphs.dots), width - column), "").row())
    rows += [_blank(width), *question]
    return _padded(rows, width, height)[:height]


def _top(scene: Scene, width: int, height: int, glyphs: Glyphs) -> list[Row]:
    """The forecast and what is said first, each with its own rows."""
    forecast_rows, first_rows = (2 if width < _NARROW else 1), (1 if height < 30 else 3)
    rows = _padded(_wrapped((scene.forecast, "strong"), width, forecast_rows, glyphs), width, forecast_rows)
    said: list[Row] = []
    for piece in scene.first:
        said += _wrapped(piece, width, max(1, first_rows - len(said)), glyphs)
    rows += _padded(said, width, first_rows)[:first_rows]
    return rows if height < 30 else [_blank(width), *rows, _blank(width)]


def _bottom(scene: Scene, width: int, height: int, glyphs: Glyphs) -> list[Row]:
    """Instruction, caution, counts, and what else there is to know."""
    tall = height >= 30
    rows = [_rule(width, glyphs)] if tall or width >= _NARROW else []
    rows += _padded(_wrapped(scene.instruction, width, 2, glyphs), width, 2)
    caution_rows = 2 if tall or width < _NARROW else 1
    caution = " ".join(scene.cautions[: caution_rows if width >= _NARROW else 1])
    rows += _padded(
        _wrapped(("" if scene.heeding else caution, "word"), width, caution_rows, glyphs), width, caution_rows
    )
    rows += _state(scene, width, glyphs)
    more_rows = 3 if tall else 2
    more: list[Row] = []
    for piece in scene.more:
        roomy = tall or (width < _NARROW and piece[1] == "strong")
        more += _wrapped(piece, width, 2 if roomy else 1, glyphs)
    return rows + _padded(more, width, more_rows)[:more_rows]


def _state(scene: Scene, width: int, glyphs: Glyphs) -> list[Row]:
    """The counts, and how far two windows have come."""
    rows = 2 if width < _NARROW else 1
    cells = 12 if scene.progress is not None else 0
    lines = _wrapped(scene.state, width - (cells + 1 if cells and rows == 1 else 0), rows, glyphs)
    lines = _padded(lines, width, rows)
    if scene.progress is None:
        return lines
    full = round(scene.progress * (cells - 2))
    bar = glyphs.left_end + glyphs.delivered * full + glyphs.empty * (cells - 2 - full) + glyphs.right_end
    last = Line(width).put_row(0, lines[-1]).put_right(width, bar, "label")
    return [*lines[:-1], last.row()]


def _beside(scene: Scene, width: int, room: int, glyphs: Glyphs) -> list[Row]:
    left = int(width * _LIST_PART) - 2
    right = width - left - 3
    column = _list(scene, left, room, glyphs)
    other = _cautions(scene, right, room, glyphs) if scene.heeding else draw_law(scene.law, right, room, glyphs)
    pairs = zip(_padded(column, left, room), _padded(other, right, room), strict=True)
    return [Line(width).put_row(0, mine).put_row(left + 3, its).row() for mine, its in pairs]


def _stacked(scene: Scene, width: int, room: int, glyphs: Glyphs) -> list[Row]:
    if scene.heeding:
        cautions = _cautions(scene, width, room - 2, glyphs)
        return [*_list(scene, width, room - len(cautions), glyphs), *cautions]
    law = room // 2 + 1 if room // 2 + 1 >= _LEAST_LAW else 0
    drawn = draw_law(scene.law, width, law, glyphs) if law else []
    return [*_padded(_list(scene, width, room - len(drawn), glyphs), width, room - len(drawn)), *drawn]


def _cautions(scene: Scene, width: int, room: int, glyphs: Glyphs) -> list[Row]:
    rows: list[Row] = []
    left_out = False
    for sentence in scene.cautions:
        lines = textwrap.wrap(outside(sentence, not glyphs.dots), width - 2) or [""]
        if len(rows) + len(lines) >= room:
            left_out = True
            continue
        rows += [Line(width).put(0, "" if at else "!", "word").put(2, text).row() for at, text in enumerate(lines)]
    heading = "before you key" + ("; more with ?" if left_out else "")
    return [Line(width).put(0, fit(heading, width), "strong").row(), *rows][: max(0, room)]


def _list(scene: Scene, width: int, room: int, glyphs: Glyphs) -> list[Row]:
    """What was taken, the newest at its end; below it what may be chosen, around the cursor."""
    headed = room >= 9
    rows_left = room - (2 if headed else 0)
    chosen_rows = min(len(scene.choices), max(rows_left - min(len(scene.taken), rows_left // 2), 1))
    taken_rows = min(len(scene.taken), rows_left - chosen_rows)
    rows = []
    if headed:
        hidden = len(scene.taken) - taken_rows
        rows.append(_heading(f"taken {len(scene.taken)}" + (f", {hidden} above" if hidden else ""), width))
    entries = scene.taken[len(scene.taken) - taken_rows :]
    rows += [_entry(entry, width, glyphs, chosen=False) for entry in entries]
    if headed:
        rows.append(
            _heading(
                "to be chosen; narrower by, alone (with others)" if scene.choices else "nothing to be chosen yet", width
            )
        )
    first = min(max(0, scene.cursor - chosen_rows // 2), max(0, len(scene.choices) - chosen_rows))
    for at, entry in enumerate(scene.choices[first : first + chosen_rows], first):
        rows.append(_entry(entry, width, glyphs, chosen=at == scene.cursor))
    return rows[:room]


def _entry(entry: Entry, width: int, glyphs: Glyphs, *, chosen: bool) -> Row:
    marks = {"taken": glyphs.taken, "slip": glyphs.limit, "next": glyphs.coming, "no": glyphs.refused}
    roles = {"taken": "best", "slip": "over", "next": "strong" if chosen else "", "no": "quiet"}
    line = Line(width).put(0, glyphs.chosen if chosen else " ", "key").put(2, marks[entry.mark], roles[entry.mark])
    text, note = (outside(words, not glyphs.dots) for words in (entry.text, entry.note))
    text_role = "strong" if chosen else "label" if entry.mark in ("taken", "slip") else ""
    # A short note, a gain or counts, keeps its room; a long one takes what the step leaves.
    room = width - 4 - (len(note) + 2 if len(note) <= _SHORT and width >= _NOTED else 0)
    text = fit(text, room)
    line.put(4, text, text_role)
    at = 4 + width_of(text) + 2
    if at + min(len(note), 6) <= width:
        line.put_right(width, fit(note, width - at), "word" if entry.mark in ("slip", "no") else "quiet")
    return line.row()


def _heading(text: str, width: int) -> Row:
    return Line(width).put(0, fit(text, width), "label").row()


def _rule(width: int, glyphs: Glyphs) -> Row:
    return Line(width).put(0, glyphs.track * width, "quiet").row()


def _blank(width: int) -> Row:
    return Line(width).row()


def _padded(rows: Sequence[Row], width: int, count: int) -> list[Row]:
    return [*rows, *(_blank(width) for _ in range(count - len(rows)))]


def _wrapped(piece: Piece, width: int, most: int, glyphs: Glyphs) -> list[Row]:
    """A text in up to `most` rows; what is left is cut and says so."""
    text, role = outside(piece[0], not glyphs.dots), piece[1]
    lines = textwrap.wrap(text, max(8, width)) or [""]
    if len(lines) > most:
        lines = [*lines[: most - 1], fit(" ".join(lines[most - 1 :]), width)]
    return [Line(width).put(0, fit(line, width), role).row() for line in lines]
