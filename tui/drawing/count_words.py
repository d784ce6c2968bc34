"""What one channel counts: where it lies, how it scatters against what it should, its zero, and a histogram.

One rule: scatter is judged only where nothing moves the counts; else the word for why stands in its place.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from ..messages import View
from .facts import Fact, is_old, unknown
from .glyphs import Glyphs

if TYPE_CHECKING:
    from bridgeio.frames import Nameplate
    from bridgeio.line_watch import CalibrationFacts
    from bridgeio.recent import CountFacts

__all__ = ["count_facts", "histogram"]

_NOISY = 2.0  # times the scatter expected: beyond what few readings can mislead to
_END_ROOM = 5  # characters of a count at either end of a histogram


def count_facts(view: View, glyphs: Glyphs, side: int) -> list[Fact]:
    """One channel, 0 forward and 1 reflected: its counts, their noise, the dark count, and their histogram."""
    facts, label = view.snapshot.facts, ("forward", "reflected")[side]
    counts = facts.counts[side] if facts and facts.counts else None
    file = facts.calibration if facts else None
    if facts is None or counts is None:
        return [Fact(label, "no counts yet", "quiet"), unknown("noise"), _dark(file, side), unknown("spread")]
    old = is_old(view, facts)
    was, role = ("was ", "stale") if old else ("", "strong")
    share = _share(counts.mean, facts.nameplate)
    noise = _noise(counts, file, facts.nameplate, side)
    spread = Fact("spread", histogram(counts, glyphs))
    return [
        Fact(label, f"{was}{counts.mean:.1f}{share}", role),
        Fact("noise", noise.text, "stale") if old else noise,
        _dark(file, side),
        Fact(spread.label, spread.text, "stale") if old else spread,
    ]


def histogram(counts: CountFacts, glyphs: Glyphs) -> str:
    """One row: the lowest count, a bar for each part of the span, the highest count."""
    most, steps = max(counts.bars), len(glyphs.bars) - 1
    bars = "".join(glyphs.bars[round(steps * bar / most)] if bar else " " for bar in counts.bars)
    ends = f"{counts.low:.6g}", f"{counts.high:.6g}"
    if max(map(len, ends)) > _END_ROOM:
        return f"|{bars}| over {counts.high - counts.low:.3g}"
    return f"{ends[0]} |{bars}| {ends[1]}"


def _share(mean: float, plate: Nameplate | None) -> str:
    """How much of full scale a count is, in words."""
    if plate is None or not plate.full_scale:
        return ""
    percent = 100.0 * mean / plate.full_scale
    return f", {percent:.0f} % of full" if percent >= 10.0 else f", {percent:.1f} % of full"


def _noise(counts: CountFacts, file: CalibrationFacts | None, plate: Nameplate | None, side: int) -> Fact:
    from bridgeio.recent import counting_step_sd

    expected = file.noise_sd[side] if file else counting_step_sd(plate.summed if plate else 1)
    source, says = ("the file", "says") if file else ("a step", "gives")
    if math.isnan(counts.noise):
        return Fact("noise", "one reading tells none", "quiet")
    if counts.noise > _NOISY * expected > 0.0:
        if counts.moving(expected):
            return Fact("noise", "not told: counts move", "quiet")
        return Fact(
            "noise", f"{counts.noise:.2g}: {counts.noise / expected:.0f} times {source}'s {expected:.2g}", "word"
        )
    return Fact("noise", f"{counts.noise:.2g}, {source} {says} {expected:.2g}")


def _dark(file: CalibrationFacts | None, side: int) -> Fact:
    if file is None:
        return Fact("dark", "no calibration, no zero", "quiet")
    dark, zero = file.dark[side], file.zero[side]
    if dark == zero:
        return Fact("dark", f"{zero:.1f} by the file")
    return Fact("dark", f"{dark:.1f} now, file {zero:.1f}")
