"""The screen library's own colours: a theme for each ground, and none where colour is not wanted.

One rule: our widgets take their colours from the palette; a theme only keeps the library's parts from standing out.
"""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager

from textual.theme import Theme

from .palette import DARK, LIGHT

__all__ = ["THEMES", "no_color"]


@contextmanager
def no_color(wanted: bool) -> Iterator[None]:
    """Have the library strip, or keep, the colour of its own widgets: it asks NO_COLOR when an app is made."""
    before = os.environ.pop("NO_COLOR", None)
    if wanted:
        os.environ["NO_COLOR"] = "1"
    try:
        yield
    finally:
        os.environ.pop("NO_COLOR", None)
        if before is not None:
            os.environ["NO_COLOR"] = before


def _theme(name: str, ground: str, text: str, accent: str, dark: bool) -> Theme:
    return Theme(name=name, primary=accent, foreground=text, background=ground, surface=ground, panel=ground, dark=dark)


#: Dark, light, without colour.
THEMES = (
    _theme("shack-dark", DARK.ground, "#d8dee6", "#56b4e9", True),
    _theme("shack-light", LIGHT.ground, "#1c2126", "#0072b2", False),
    _theme("shack-plain", "ansi_default", "ansi_default", "ansi_default", True),
)
