"""Large figures, three rows high: the one value that is read from across the shack.

One rule: a stale figure has another shape, not only another colour: its strokes fall apart into dots.
"""

from __future__ import annotations

from functools import lru_cache

__all__ = ["HEIGHT", "large"]

HEIGHT = 3

# Six rows of pixels a figure, two to a cell: drawn for this program on a 4 by 6 grid, the point on 1 by 6,
# all figures equally wide so that none shifts its neighbours.
_PIXELS = {
    "0": (".##.", "#..#", "#..#", "#..#", "#..#", ".##."),
    "1": ("..#.", ".##.", "..#.", "..#.", "..#.", "..#."),
    "2": ("###.", "...#", "..#.", ".#..", "#...", "####"),
    "3": ("###.", "...#", ".##.", "...#", "...#", "###."),
    "4": ("#..#", "#..#", "####", "...#", "...#", "...#"),
    "5": ("####", "#...", "###.", "...#", "...#", "###."),
    "6": (".##.", "#...", "###.", "#..#", "#..#", ".##."),
    "7": ("####", "...#", "..#.", "..#.", ".#..", ".#.."),
    "8": (".##.", "#..#", ".##.", "#..#", "#..#", ".##."),
    "9": (".##.", "#..#", "#..#", ".###", "...#", ".##."),
    ".": (".", ".", ".", ".", ".", "#"),
}
_HALVES = {"..": " ", "#.": "▀", ".#": "▄", "##": "█"}

_STROKES = {
    "0": (" _ ", "| |", "|_|"),
    "1": ("   ", "  |", "  |"),
    "2": (" _ ", " _|", "|_ "),
    "3": ("__ ", " _|", "__|"),
    "4": ("   ", "|_|", "  |"),
    "5": (" _ ", "|_ ", " _|"),
    "6": (" _ ", "|_ ", "|_|"),
    "7": ("__ ", "  |", "  |"),
    "8": (" _ ", "|_|", "|_|"),
    "9": (" _ ", "|_|", " _|"),
    ".": (" ", " ", "."),
}

_FALL_APART = str.maketrans({"▀": "⠉", "▄": "⣀", "█": "⣉", "|": ":", "_": "."})


@lru_cache(maxsize=64)
def large(text: str, ascii_only: bool, stale: bool = False) -> tuple[str, str, str]:
    """`text` (figures and points) as three rows of equal width. KeyError for any other character."""
    shapes = [_strokes(char) if ascii_only else _blocks(char) for char in text]
    rows = [" ".join(shape[row] for shape in shapes) for row in range(HEIGHT)]
    first, second, third = (row.translate(_FALL_APART) if stale else row for row in rows)
    return first, second, third


def _strokes(char: str) -> tuple[str, ...]:
    return _STROKES[char]


def _blocks(char: str) -> tuple[str, ...]:
    pixels = _PIXELS[char]
    return tuple(
        "".join(_HALVES[upper + lower] for upper, lower in zip(pixels[at], pixels[at + 1], strict=True))
        for at in range(0, len(pixels), 2)
    )
