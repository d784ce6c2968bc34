"""What the wire says, fact by fact: a label and the rest of a sentence that a person could read aloud.

One rule: a fact keeps its place. Where its value is missing the word for why stands there.
"""

from __future__ import annotations

import math
import os
from collections.abc import Sequence
from typing import TYPE_CHECKING

from ..messages import View
from .facts import JUST_NOW_S, Fact, age_s, is_old, unknown
from .glyphs import Glyphs
from .line import outside

if TYPE_CHECKING:
    from bridgeio.account import Counters
    from bridgeio.frames import Nameplate, Remark
    from bridgeio.line_watch import CalibrationFacts, LineFacts

__all__ = ["bridge_facts", "line_facts", "remark_words", "said_facts"]

_OPENED = ("open", "silent")


def line_facts(view: View, glyphs: Glyphs) -> list[Fact]:
    """The line: port, what it is doing, frames, losses, damage by kind, the bridge's clock."""
    facts = view.snapshot.facts
    if facts is None:
        return [Fact("port", "not opened yet", "quiet"), *(unknown(label) for label in _LINE_LABELS[1:])]
    counters = facts.counters
    texts = (
        Fact("port", outside(facts.port, not glyphs.dots)),
        _doing(view, facts, glyphs),
        _last_frame(view, facts),
        _frames(view, facts),
        Fact("lost", f"at least {counters.lost}", "word") if counters.lost else Fact("lost", "none"),
        _damage(counters),
        _dropped(counters),
        Fact("came", _came(counters)),
        _strange(counters),
        Fact("rate", _baud(facts)),
        _clock(facts),
    )
    return list(texts)


def bridge_facts(view: View, glyphs: Glyphs) -> list[Fact]:
    """The bridge as its nameplate has it, and what it is read by."""
    facts = view.snapshot.facts
    plate, file = (facts.nameplate, facts.calibration) if facts else (None, None)
    read_by = Fact(
        "read by", outside(file.name, not glyphs.dots) if file else "nothing: counts only", "" if file else "word"
    )
    if plate is None:
        lines = facts is not None and facts.counters.lines > 0
        name = Fact("name", "plain lines bring none" if lines else "no nameplate yet", "quiet")
        return [name, read_by, *(unknown(label) for label in _PLATE_LABELS), _box(facts)]
    return [
        Fact("name", outside(plate.name, not glyphs.dots) or "none given"),
        read_by,
        _fit_id(plate, file),
        Fact("device", f"{plate.device_id:08X}") if plate.device_id else unknown("device"),
        _start(plate, facts),
        Fact("period", f"{plate.period_ms} ms" if plate.period_ms else "irregular"),
        Fact("full scale", f"{plate.full_scale}, of {plate.summed} summed"),
        Fact("reference", f"{plate.reference_mv} mV") if plate.reference_mv else unknown("reference"),
        Fact("firmware", f"{plate.firmware_version:04X} hex"),
        Fact("tells", _features(plate)),
        _box(facts),
    ]


def said_facts(view: View, glyphs: Glyphs) -> list[Fact]:
    """Whole sentences: the link, what readings are made by, the journal, and the bridge's newest remarks."""
    from .journal import journal_sentence

    snapshot, ascii_only = view.snapshot, not glyphs.dots
    link = snapshot.link.words if snapshot.link else "starting"
    journal, role = journal_sentence(snapshot.journal)
    good = snapshot.link is None or snapshot.link.phase in ("opening", "open", "ended")
    return [
        _reading(view, ascii_only),
        Fact("link", outside(link, ascii_only), "" if good else "over"),
        Fact("journal", outside(journal, ascii_only), role),
        *_remarks(view, ascii_only),
    ]


def remark_words(remark: Remark) -> str:
    """A remark's code in words with its number, argument and text; the text is raw."""
    from bridgeio.codes import REMARK_CODES

    words = REMARK_CODES.get(remark.code, "the builder's own remark" if remark.code >= 0x80 else "unknown remark")
    argument = f", argument {remark.argument}" if remark.argument else ""
    return f"{words} (code {remark.code:02X}{argument})" + (f": {remark.text}" if remark.text else "")


_LINE_LABELS = (
    "port",
    "state",
    "last frame",
    "frames",
    "lost",
    "damaged",
    "dropped",
    "came",
    "unknown",
    "rate",
    "clock",
)
_PLATE_LABELS = ("fit", "device", "start", "period", "full scale", "reference", "firmware", "tells")


def _doing(view: View, facts: LineFacts, glyphs: Glyphs) -> Fact:
    link = view.snapshot.link
    if link is None:
        return Fact("state", "starting", "quiet")
    if link.phase not in _OPENED:
        return Fact("state", _PHASE_WORDS.get(link.phase, link.phase), "word")
    if facts.heard_s is None:
        return Fact("state", "open, nothing came yet", "word")
    if is_old(view, facts):
        return Fact("state", f"open but silent for {age_s(view, facts):.0f} s", "word")
    return Fact("state", "open, and frames come")


_PHASE_WORDS = {
    "opening": "being opened",
    "looking": "gone, and looked for",
    "lost": "gone",
    "ended": "at its end",
}


def _last_frame(view: View, facts: LineFacts) -> Fact:
    ago_s = age_s(view, facts)
    if math.isinf(ago_s):
        return Fact("last frame", "none yet", "quiet")
    if ago_s < JUST_NOW_S:
        return Fact("last frame", "less than 1 s ago")
    return Fact("last frame", f"{ago_s:.0f} s ago", "word" if is_old(view, facts) else "")


def _frames(view: View, facts: LineFacts) -> Fact:
    link = view.snapshot.link
    if facts.heard_s is None:
        return Fact("frames", "none yet", "quiet")
    if is_old(view, facts) or link is None or link.phase not in _OPENED:
        return Fact("frames", "none now", "word")
    return Fact("frames", f"{_rate(facts.frames_hz)} a second")


def _baud(facts: LineFacts) -> str:
    if facts.simulated:
        return "none: simulated"
    return "none: no serial port" if facts.baud is None else f"{facts.baud} baud"


def _damage(counters: Counters) -> Fact:
    kinds = ((counters.bad_crc, "checksum"), (counters.malformed, "form"), (counters.bad_lines, "line"))
    found = [f"{count} {noun}{'s' if count > 1 else ''}" for count, noun in kinds if count]
    return Fact("damaged", ", ".join(found), "word") if found else Fact("damaged", "none")


def _dropped(counters: Counters) -> Fact:
    count = counters.dropped_flag
    return Fact("dropped", f"{count} times by the bridge", "word") if count else Fact("dropped", "none by the bridge")


def _came(counters: Counters) -> str:
    from bridgeio.frames import KINDS

    tallies = sum(counters.frames[kind.number] for kind in KINDS if kind.counted)
    if counters.lines:
        return f"{_many(counters.lines)} plain lines"
    return f"{_many(tallies)} tallies, {_many(sum(counters.frames.values()) - tallies)} others"


def _strange(counters: Counters) -> Fact:
    if counters.newer:
        return Fact("unknown", f"{_many(counters.newer)} of a newer wire", "word")
    return Fact("unknown", f"{_many(counters.unknown)} kept as bytes" if counters.unknown else "none")


def _clock(facts: LineFacts) -> Fact:
    if not facts.live:
        return Fact("clock", "none to compare: a file", "quiet")
    if facts.clock_ppm is None:
        lines = facts.counters.lines > 0
        return Fact("clock", "plain lines carry none" if lines else "not known before 30 s", "quiet")
    return Fact("clock", f"{abs(facts.clock_ppm):.0f} ppm {'fast' if facts.clock_ppm >= 0.0 else 'slow'}")


def _fit_id(plate: Nameplate, file: CalibrationFacts | None) -> Fact:
    told = plate.bridge_file_id
    if not told:
        return unknown("fit")
    if file is None:
        return Fact("fit", f"{told:04X}, no file in use", "word")
    if told == file.fit_id:
        return Fact("fit", f"{told:04X}, matches the file")
    return Fact("fit", f"{told:04X} differs, file {file.fit_id or 0:04X}", "word")


def _start(plate: Nameplate, facts: LineFacts | None) -> Fact:
    again = facts.counters.resets if facts else 0
    words = f"restarted {again} times" if again > 1 else "restarted once" if again else "not restarted"
    return Fact("start", f"number {plate.boot}, {words}" if plate.boot else words, "word" if again else "")


def _features(plate: Nameplate) -> str:
    from bridgeio.codes import FEATURE_CONDITIONS, FEATURE_CRESTS, FEATURE_KEY, FEATURE_RESULT

    words = {FEATURE_CRESTS: "crests", FEATURE_CONDITIONS: "box", FEATURE_KEY: "key", FEATURE_RESULT: "result"}
    return ", ".join(word for bit, word in words.items() if plate.features & bit) or "counts alone"


def _box(facts: LineFacts | None) -> Fact:
    from bridgeio.frames import TEMPERATURE_UNKNOWN

    told = facts.conditions if facts else None
    warm = told is not None and told.temperature_c100 != TEMPERATURE_UNKNOWN
    parts = [f"{told.temperature_c100 / 100.0:.1f} C"] if told and warm else []
    parts += [f"supply {told.supply_mv} mV"] if told and told.supply_mv else []
    return Fact("box", ", ".join(parts)) if parts else unknown("box")


def _reading(view: View, ascii_only: bool) -> Fact:
    snapshot, facts = view.snapshot, view.snapshot.facts
    if words := snapshot.note or snapshot.caution:
        return Fact("reading", outside(words, ascii_only), "word")
    file = facts.calibration if facts else None
    if file is None:
        return Fact("reading", "no calibration is in force yet", "quiet")
    fit = f", fit {file.fit_id:04X}" if file.fit_id else ""
    return Fact("reading", f"by bridge file {outside(os.path.basename(file.source), ascii_only)}{fit}")


def _remarks(view: View, ascii_only: bool) -> list[Fact]:
    facts = view.snapshot.facts
    remarks: Sequence[tuple[float, Remark]] = facts.remarks if facts else ()
    if not remarks:
        return [Fact("remark", "the bridge has made none", "quiet")]
    return [
        Fact("remark", f"{max(0.0, view.now_s - at_s):.0f} s ago: {outside(remark_words(remark), ascii_only)}")
        for at_s, remark in remarks
    ]


def _rate(hz: float) -> str:
    return f"{hz:.0f}" if hz >= 10.0 else f"{hz:.1f}"


def _many(count: int) -> str:
    return str(count) if count < 1_000_000 else f"{count / 1e6:.1f} million"
