"""An eye on a terminal: keeps what stands on the screen from the bytes that a program writes to it.

One rule: it knows just what is needed to read a field that changes: moves of the cursor, and characters of one cell.
"""

from __future__ import annotations

import codecs
import re

__all__ = ["Eye"]

#: A control sequence, a string for the terminal (title and the like), another escape, a control character, or text.
_PARTS = re.compile(
    r"\x1b\[([0-9;?<=>]*)[ !$]?([@-~])|\x1b[P\]^_X].*?(?:\x1b\\|\x07)|\x1b.|([\x00-\x1f])|[^\x00-\x1f]+"
)
#: What may be the beginning of a part whose end has not come yet.
_UNFINISHED = re.compile(r"\x1b(?:\[[0-9;?<=>]*[ !$]?|[P\]^_X][^\x07]*)?\Z")


class Eye:
    """Feed it bytes as they come; `row(y)` is a line's text. Width and height in cells."""

    def __init__(self, width: int, height: int) -> None:
        self._cells = [[" "] * width for _ in range(height)]
        self._width, self._height = width, height
        self._x = self._y = 0
        self._decode = codecs.getincrementaldecoder("utf-8")("replace").decode
        self._rest = ""

    def row(self, y: int) -> str:
        """The text of line `y`, from 0."""
        return "".join(self._cells[y])

    def find(self, words: str) -> tuple[int, int] | None:
        """Column and line where `words` stand, or None."""
        for y in range(self._height):
            if (x := self.row(y).find(words)) >= 0:
                return x, y
        return None

    def feed(self, data: bytes) -> list[int]:
        """Look at what is written; the lines in which characters were written, in order, one entry a run."""
        text = self._rest + self._decode(data)
        cut = _UNFINISHED.search(text)
        text, self._rest = (text[: cut.start()], text[cut.start() :]) if cut else (text, "")
        lines = []
        for part in _PARTS.finditer(text):
            if part[2]:
                self._control(part[1], part[2])
            elif part[3]:
                self._move(part[3])
            elif not part[0].startswith("\x1b"):
                lines.append(self._y)
                self._write(part[0])
        return lines

    def _write(self, text: str) -> None:
        row = self._cells[self._y]
        for char in text[: self._width - self._x]:
            row[self._x] = char
            self._x += 1

    def _move(self, control: str) -> None:
        if control == "\r":
            self._x = 0
        elif control == "\n":
            self._y = min(self._y + 1, self._height - 1)
        elif control == "\b":
            self._x = max(0, self._x - 1)

    def _control(self, numbers: str, name: str) -> None:
        if name in "Hf":
            y, _, x = numbers.partition(";")
            self._y, self._x = min(int(y or 1), self._height) - 1, min(int(x or 1), self._width) - 1
        elif name == "J" and numbers == "2":
            self._cells = [[" "] * self._width for _ in range(self._height)]
