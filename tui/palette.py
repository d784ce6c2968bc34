"""Colours of the roles, dark, light and without colour.

One rule: colour only repeats what a symbol or a word already says. The hues are those of Okabe and Ito's set for
all kinds of colour vision (M. Okabe and K. Ito, Color Universal Design, 2008; values from memory), shaded for dark
and light grounds.
"""

from __future__ import annotations

from dataclasses import dataclass

from rich.style import Style

__all__ = ["DARK", "LIGHT", "PLAIN", "ROLES", "Palette", "palette"]

#: Role -> (on dark, on light, attributes that also serve without colour).
_COLORS: dict[str, tuple[str, str, str]] = {
    "": ("#d8dee6", "#1c2126", ""),
    "label": ("#a9b4c0", "#4a545e", ""),
    "quiet": ("#7d8894", "#66717c", ""),
    "strong": ("#f4f7fa", "#000000", "bold"),
    "figures": ("#f4f7fa", "#000000", ""),
    "word": ("#e69f00", "#8a5a00", "bold"),
    "stale": ("#66717c", "#8b96a1", ""),
    "mark": ("#f0e442", "#000000", "bold"),
    "band": ("#56b4e9", "#0072b2", ""),
    "thread": ("#56b4e9", "#0072b2", ""),
    "best": ("#009e73", "#00704f", ""),
    "limit": ("#d55e00", "#b34e00", "bold"),
    "delivered": ("#0072b2", "#0072b2", ""),
    "returned": ("#e69f00", "#e69f00", ""),
    "turn-towards": ("#009e73", "#00704f", "bold"),
    "turn-away": ("#d55e00", "#b34e00", "bold"),
    "turn-same": ("#7d8894", "#66717c", ""),
    "may": ("#e69f00", "#8a5a00", "bold"),
    "over": ("#ffffff", "#ffffff", "bold reverse"),
    "key": ("#f4f7fa", "#000000", "bold"),
}

ROLES = tuple(_COLORS)
_GROUNDS = ("#11161c", "#fbfaf7")
_ALARM_GROUND = "#b34700"


@dataclass(frozen=True, slots=True)
class Palette:
    """A style for each role and the ground they stand on."""

    ground: str
    styles: dict[str, Style]


def _colored(side: int) -> Palette:
    ground = _GROUNDS[side]
    styles = {
        role: Style.parse(f"{row[2].replace('reverse', '')} {row[side]} on {ground}".strip())
        for role, row in _COLORS.items()
    }
    styles["over"] = Style.parse(f"bold #ffffff on {_ALARM_GROUND}")
    return Palette(ground, styles)


DARK = _colored(0)
LIGHT = _colored(1)
PLAIN = Palette("default", {role: Style.parse(row[2] or "none") for role, row in _COLORS.items()})


def palette(color: bool, dark: bool) -> Palette:
    """The palette for a terminal."""
    return (DARK if dark else LIGHT) if color else PLAIN
