"""Outside text made visible: what it holds is seen, and drives nothing.

One rule: what comes out is printable characters only; nameplates, remarks, lines, names and contents of files are
stored raw and pass here before anybody is shown them.
"""

from __future__ import annotations

__all__ = ["visible"]

_ZERO_WIDTH_AND_BIDI = frozenset(
    "\u00ad\u034f\u061c\u115f\u1160\u17b4\u17b5\u180e\u200b\u200c\u200d\u200e\u200f\u2028\u2029\u202a\u202b\u202c\u202d\u202e"
    "\u2060\u2061\u2062\u2063\u2064\u2066\u2067\u2068\u2069\u206a\u206b\u206c\u206d\u206e\u206f\u3164\ufeff\uffa0\ufff9\ufffa"
    "\ufffb"
)


def visible(text: str, most: int = 2000) -> str:
    """`text` on one line with every control, C1, bidi and zero-width character written as an escape.

    Longer than `most` characters is cut and says so. Idempotent on plain text: printable characters stay.
    """
    cut = text[:most]
    shown = "".join(char if _is_plain(char) else _escaped(char) for char in cut)
    return shown if len(text) <= most else f"{shown}... ({len(text) - most} more characters)"


def _is_plain(char: str) -> bool:
    return char == " " or (char.isprintable() and char not in _ZERO_WIDTH_AND_BIDI)


def _escaped(char: str) -> str:
    code = ord(char)
    if code < 0x100:
        return f"\\x{code:02x}"
    return f"\\u{code:04x}" if code < 0x10000 else f"\\U{code:08x}"
