"""What the terminal can show: UTF-8 or ASCII, colour or none, a screen at all.

One rule: the environment is asked here and nowhere else; the screen library would draw regardless.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

__all__ = ["Terminal", "terminal"]

#: Terminals without cursor movement, and those whose fonts lack the block and dot characters.
_NO_SCREEN = ("dumb", "unknown")
_ASCII_ONLY = ("linux", "vt100", "vt102", "vt220", "ansi", "cons25", "sun")


@dataclass(frozen=True, slots=True)
class Terminal:
    """screen: can move its cursor. ascii: draw in plain ASCII. color: may use colour."""

    screen: bool
    ascii: bool
    color: bool


def terminal(environ: Mapping[str, str], encoding: str | None, is_tty: bool) -> Terminal:
    """Judge a terminal by its environment variables, its encoding and whether it is one.

    NO_COLOR counts where it is set and not empty.
    """
    kind = environ.get("TERM") or ("windows" if environ.get("OS") == "Windows_NT" else "dumb")
    utf8 = (encoding or "").lower().replace("-", "").replace("_", "") in ("utf8", "utf8sig")
    return Terminal(
        screen=is_tty and kind not in _NO_SCREEN,
        ascii=not utf8 or kind in _ASCII_ONLY,
        color=not environ.get("NO_COLOR") and kind not in (*_NO_SCREEN, "vt100", "vt102", "vt220"),
    )
