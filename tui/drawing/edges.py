"""The quiet lines around the reading: status on top, remarks, the best point, the alarm line.

One rule: what is well is said in few words; what is not well says what it is.
"""

from __future__ import annotations

import math

from calibration.figures import shown

from ..alarm import AlarmState, KeyState, Limits
from ..messages import Snapshot
from ..readout import FLAG_WORDS, Readout, frequency_text, swr_of_rho
from ..trail import Relation
from .glyphs import Glyphs
from .journal import journal_word
from .line import Line, Piece, Row, fit, outside, width_of
from .scale import column

__all__ = ["draw_alarm", "draw_best", "draw_remarks", "draw_status", "link_words"]

_NARROW = 60
_CLOCK_ROOM = 16  # "key down 12/10 s"
_FREQUENCY_ROOM = 18
_FINEST = 1.01e-3  # of SWR at the best point: finer is noise to the eye


def draw_status(snapshot: Snapshot, key: KeyState, limits: Limits, width: int, glyphs: Glyphs) -> Row:
    """Bridge, frequency and band, link, key-down clock. A narrow screen has the bridge's name among the remarks."""
    line = Line(width)
    clock, role = _key_text(key, limits)
    line.put_right(width, clock, role)
    if width < _NARROW:
        return line.put(0, _frequency(snapshot), "strong").row()
    name = snapshot.bridge or snapshot.nameplate or "no bridge named yet"
    link, link_role = link_words(snapshot, glyphs)
    link_room = 22 if width >= 76 else 18
    link_at = width - _CLOCK_ROOM - link_room
    frequency_at = max(0, link_at - _FREQUENCY_ROOM)
    line.put(0, fit(outside(name, not glyphs.dots), frequency_at - 2), "label")
    line.put(frequency_at, _frequency(snapshot), "strong")
    return line.put(link_at, fit(link, width - link_at - width_of(clock) - 1), link_role).row()


def link_words(snapshot: Snapshot, glyphs: Glyphs) -> Piece:
    """Rate and losses of a link that is well, else the link's own words."""
    link = snapshot.link
    if link is None:
        return "starting", "quiet"
    if link.phase != "open":
        return outside(link.words, not glyphs.dots), "over" if link.phase in ("lost", "looking") else "word"
    troubles = [f"{count} {word}" for count, word in ((snapshot.lost, "lost"), (snapshot.damaged, "damaged")) if count]
    return f"{snapshot.rate_hz:.0f}/s, {', '.join(troubles) or 'nothing lost'}", "quiet"


def draw_remarks(readout: Readout, snapshot: Snapshot, width: int, glyphs: Glyphs) -> Row:
    """Flags in words and the note, else what the board says against its calibration; at the right how recording stands.

    A narrow screen, without room in the status line, has trouble first, name last.
    """
    parts: list[Piece] = []
    if width < _NARROW:
        words, role = link_words(snapshot, glyphs)
        if role != "quiet" or snapshot.lost or snapshot.damaged:
            parts.append((words, role))
    parts += [(words, "label" if words == FLAG_WORDS["simulated"] else "word") for words in readout.remarks]
    if note := snapshot.note or snapshot.caution:
        parts.append((outside(note, not glyphs.dots), "word"))
    name = snapshot.bridge or snapshot.nameplate
    if width < _NARROW and name:
        parts.append((outside(name, not glyphs.dots), "label"))
    text = "; ".join(words for words, _ in parts)
    journal, journal_role = journal_word(snapshot.journal)
    room = width - width_of(journal) - 2 if journal else width
    line = Line(width).put(0, fit(text, room), parts[0][1] if parts else "")
    return line.put_right(width, journal, journal_role).row()


def draw_best(relation: Relation, stale: bool, width: int, glyphs: Glyphs) -> Row:
    """The best point under its rule, and how far a live reading is from it, at the right where it keeps its place."""
    line = Line(width)
    if relation.best is None:
        return line.put(0, "no best point yet", "quiet").row()
    best = "best: below reading" if relation.best <= 0.0 else f"best {_fine_swr(relation.best, relation.noise)}"
    away = "" if stale else _away(relation)
    room = width - width_of(away) - 2
    at = min(column(relation.best, width), max(0, room - width_of(best)))
    return line.put(at, fit(best, room), "best").put_right(width, away, "label").row()


def draw_alarm(alarm: AlarmState, limits: Limits, width: int, key: str = "a") -> Row:
    """The alarm line: over, may exceed, blind or quiet, and the limits; `key` sets them, "" where none does."""
    line = Line(width)
    names = _limit_words(limits, brief=width < _NARROW)
    if alarm.over:
        texts = [names[name] for name in alarm.over if name in names]
        return line.put(0, fit(f"!! OVER THE LIMIT: {', '.join(texts)} !!", width), "over").row()
    if alarm.may:
        texts = [names[name] for name in alarm.may if name in names]
        return line.put(0, fit(f"! may exceed {', '.join(texts)}", width), "may").row()
    known = ", ".join(names.values())
    if not known:
        return line.put(0, f"no limits set: press {key}" if key else "no limits set", "quiet").row()
    wide = width >= _NARROW
    blind = "no alarm can be given" if wide else "alarm blind"
    begin, role = (blind, "word") if alarm.blind else ("no alarm", "quiet")
    text = f"{begin}   limits {known}" if wide else f"{begin}; {known}"
    return line.put(0, fit(text, width), role).row()


def _limit_words(limits: Limits, brief: bool) -> dict[str, str]:
    words = {}
    if limits.swr is not None:
        words["SWR"] = f"SWR {limits.swr:g}"
    if limits.power_w is not None:
        words["power"] = f"{limits.power_w:g} W" + ("" if brief else " forward")
    if limits.key_down_s is not None:
        words["key down"] = ("" if brief else "key down ") + f"{limits.key_down_s:g} s"
    return words


def _frequency(snapshot: Snapshot) -> str:
    if not snapshot.frequency_hz or not math.isfinite(snapshot.frequency_hz):
        return "frequency ?"
    from calibration.units import band_name  # numpy comes with it

    band = band_name(snapshot.frequency_hz)
    text = frequency_text(snapshot.frequency_hz)
    return f"{text} {band[:-1]} m" if band else text


def _key_text(key: KeyState, limits: Limits) -> Piece:
    if key.down is None:
        return "key ?", "quiet"
    if not key.down:
        return "key up", "quiet"
    of = "" if limits.key_down_s is None else f"/{limits.key_down_s:g}"
    over = limits.key_down_s is not None and key.seconds > limits.key_down_s
    return f"key down {int(key.seconds)}{of} s", "over" if over else "strong"


def _fine_swr(rho: float, noise: float) -> str:
    """SWR with the digits that the repeatability supports: relative, hence finer than the reading's own."""
    swr = swr_of_rho(rho)
    if not math.isfinite(swr):
        return "oo"
    half = max(4.0 * noise / (1.0 - rho) ** 2, _FINEST)
    return shown(swr, swr - half, swr + half)


def _away(relation: Relation) -> str:
    if math.isnan(relation.away) or relation.best is None:
        return ""
    if relation.away <= 0.0:
        return "at the best"
    swr, best = swr_of_rho(relation.best + relation.away), swr_of_rho(relation.best)
    if not math.isfinite(swr):
        return "far from the best"
    half = max(4.0 * relation.noise / (1.0 - relation.best - relation.away) ** 2, _FINEST)
    return f"{shown(swr - best, -half, half)} away from the best"
