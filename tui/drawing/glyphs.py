"""The characters the drawings are made of, once for UTF-8 and once for plain ASCII.

One rule: both sets tell the same with the same number of cells; nothing is told by colour alone.
"""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["ASCII", "UTF8", "Glyphs", "glyphs"]


@dataclass(frozen=True, slots=True)
class Glyphs:
    """track, tick, left_end, right_end, infinity: the scale. band_left, band, band_right, open_right: the interval.
    mark: the reading, old_mark when stale. best: the rule of the best point. limit: the alarm limit. delivered,
    returned, empty: the ribbon, old when stale. towards, away, same: direction. bars: a histogram's heights, lowest
    first. point, coming, wall: a law's measured point, the one to come, the plot's left edge. taken, refused, chosen:
    marks of bench steps. dots: the thread in braille dots."""

    track: str
    tick: str
    left_end: str
    right_end: str
    band_left: str
    band: str
    band_right: str
    open_right: str
    mark: str
    old_mark: str
    best: str
    limit: str
    infinity: str
    delivered: str
    returned: str
    empty: str
    old: str
    towards: str
    away: str
    same: str
    bars: str
    point: str
    coming: str
    wall: str
    taken: str
    refused: str
    chosen: str
    dots: bool


ASCII = Glyphs(
    track="-",
    tick="+",
    left_end="|",
    right_end="|",
    band_left="[",
    band="=",
    band_right="]",
    open_right=">",
    mark="#",
    old_mark="?",
    best=":",
    limit="!",
    infinity="oo",
    delivered="#",
    returned="%",
    empty=".",
    old=":",
    towards="<<",
    away=">>",
    same="==",
    bars=".:-=+*%#",
    point="o",
    coming="O",
    wall="|",
    taken="+",
    refused="x",
    chosen=">",
    dots=False,
)

UTF8 = Glyphs(
    track="─",
    tick="┼",
    left_end="├",
    right_end="┤",
    band_left="╺",
    band="━",
    band_right="╸",
    open_right="╸",
    mark="█",
    old_mark="░",
    best="┊",
    limit="!",
    infinity="∞",
    delivered="█",
    returned="▒",
    empty="·",
    old="░",
    towards="◀◀",
    away="▶▶",
    same="══",
    bars="▁▂▃▄▅▆▇█",
    point="●",
    coming="○",
    wall="│",
    taken="✓",
    refused="✗",
    chosen="▶",
    dots=True,
)


def glyphs(ascii_only: bool) -> Glyphs:
    """The set for a terminal."""
    return ASCII if ascii_only else UTF8
