"""A program in a terminal of ours, and the grammar of all that it may write there.

One rule: the grammar is a list of what is allowed, written down from what terminals understand; what is not in it is a
residue, whoever wrote it. It knows nothing of the door that outside text passes.
"""

from __future__ import annotations

import fcntl
import os
import re
import select
import signal
import struct
import subprocess
import termios
import threading
import time
import unicodedata
from collections.abc import Mapping, Sequence
from pathlib import Path
from types import TracebackType
from typing import Self

__all__ = ["HOSTILE", "Screen", "residue"]

ROOT = Path(__file__).parents[1]

#: Sequences by ECMA-48 and the terminals' private modes, all that a drawn screen needs: colours, the cursor's place,
#: the other screen, mouse, focus and paste reports, synchronised output, the keyboard's protocol, the pointer's shape.
_ALLOWED = re.compile(
    r"\x1b\[[0-9;:]*m"
    r"|\x1b\[[0-9]+;[0-9]+H"
    r"|\x1b\[\?(?:7|25|1000|1002|1003|1004|1006|1015|1016|1049|2004|2026|2048)[hl]"
    r"|\x1b\[\?(?:2026|2048)\$p"
    r"|\x1b\[(?:>25|<)u"
    r"|\x1b\]22;(?:default|pointer|text)\x07"
    r"|\r*\n"
)
#: Categories of characters that are no text to be read, and characters without width of other categories.
_NO_TEXT = ("Cc", "Cf", "Cs", "Co", "Cn", "Zl", "Zp")
_NO_WIDTH = frozenset("\u034f\u115f\u1160\u17b4\u17b5\u3164\uffa0")

#: Colours that only hostile text here asks for: its sequences would be in the grammar.
_CANARY = re.compile(r"\x1b\[38;5;199m|\x1b\[19;7H")

_ESC_STRINGS = (
    "\x1b[2J",
    "\x1b[6n",
    "\x1b[c",
    "\x1b[38;5;199mx",
    "\x1b[19;7Hx",
    "\x1bc",
    "\x1b(0",
    "\x1b#8",
    "\x1b%G",
    "\x1b[?5h",
    "\x1b]0;owned\x07",
    "\x1b]2;owned\x1b\\",
    "\x1b]8;;a:b\x07x",
    "\x1b]52;c;eA==\x07",
    "\x1b]4;1;?\x07",
    "\x1b]22;x\x07",
    "\x1bPq\x1b\\",
    "\x1bP$q\x1b\\",
    "\x1b_G\x1b\\",
    "\x1b^x\x1b\\",
    "\x1bXx\x1b\\",
    "\x1b[5i",
    "\x1b[8;1;1t",
    "\x1b[21t",
)
_C1_STRINGS = ("\x9b2J", "\x9b31mx", "\x9d0;owned\x9c", "\x90q\x9c", "\x85", "\x84", "\x8d", "\x9ec\x9c", "\x9fc\x9c")
_C0_STRINGS = (
    "\x00",
    "\x05",
    "\x07",
    "\x08\x08",
    "\t",
    "\x0b",
    "\x0c",
    "\r-",
    "\x0e",
    "\x0f",
    "\x18",
    "\x1a",
    "\x7f",
    "a\nb",
)
_UNSEEN_STRINGS = (
    "\u202egnp",
    "\u2066a\u2069",
    "\u200fa",
    "\u061ca",
    "\u2028a",
    "\u2029a",
    "a\u200bb",
    "\ufeffa",
    "\u00ada",
    "\u3164",
    "\U000e0041",
    "\ufff9a",
)
_MARKUP_STRINGS = ("[red]x[/]", "[@click=q]x", "[/]", "[bold", "\\[x]", "<b>x</b>", "{x}", "$x", "%s")

#: What an outside text may hold to drive a terminal, a page or our own drawing; each fits a nameplate in part at least.
HOSTILE = (*_ESC_STRINGS, *_C1_STRINGS, *_C0_STRINGS, *_UNSEEN_STRINGS, *_MARKUP_STRINGS)


def residue(written: bytes, bells: int = 0) -> list[str]:
    """What of `written` is not in the grammar, each with a little of what surrounds it; empty where all is allowed.

    bells: how many alarms may ring.
    """
    text = written.decode("utf-8", "surrogateescape")
    planted = [match[0] for match in _CANARY.finditer(text)]
    rest = _ALLOWED.sub("\n", text)
    rest = rest.replace("\x07", "", bells)
    found = [
        rest[max(0, at - 8) : at + 12]
        for at, char in enumerate(rest)
        if char != "\n" and (unicodedata.category(char) in _NO_TEXT or char in _NO_WIDTH)
    ]
    return planted + found


class Screen:
    """A program on a pseudo terminal of its own; all bytes that it writes are in `written`."""

    def __init__(self, words: Sequence[str], columns: int = 120, lines: int = 40, env: Mapping[str, str] = {}) -> None:
        """Start `words` in the project's folder."""
        self._master, slave = os.openpty()
        fcntl.ioctl(slave, termios.TIOCSWINSZ, struct.pack("HHHH", lines, columns, 0, 0))
        surroundings = {**os.environ, "TERM": "xterm-256color", "COLORTERM": "truecolor", "LC_ALL": "C.UTF-8", **env}
        self.child = subprocess.Popen(
            words, cwd=ROOT, stdin=slave, stdout=slave, stderr=slave, env=surroundings, start_new_session=True
        )
        os.close(slave)
        self._written = bytearray()
        self._reader = threading.Thread(target=self._read, daemon=True)
        self._reader.start()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self.child.poll() is None:
            os.killpg(self.child.pid, signal.SIGKILL)
        self.child.wait(10)
        self._reader.join(10)
        os.close(self._master)

    @property
    def written(self) -> bytes:
        """All that the program has written so far."""
        return bytes(self._written)

    def type(self, keys: str) -> None:
        """Press keys."""
        os.write(self._master, keys.encode())

    def wait_for(self, word: str, after: int = 0, timeout_s: float = 20.0) -> int:
        """Wait until `word` stands in what was written after place `after`; the length written then."""
        end_s = time.monotonic() + timeout_s
        while word.encode() not in self._written[after:]:
            ended = self.child.poll() is not None and not self._reader.is_alive()
            assert not ended, f"ended without {word!r}: {self.written[-2000:]!r}"
            assert time.monotonic() < end_s, f"waited in vain for {word!r}: {self.written[-2000:]!r}"
            time.sleep(0.01)
        return len(self._written)

    def end(self, timeout_s: float = 20.0) -> int:
        """Wait for the program's own end; its exit code."""
        code = self.child.wait(timeout_s)
        self._reader.join(timeout_s)
        return code

    def _read(self) -> None:
        while True:
            try:
                ready, _, _ = select.select([self._master], [], [], 0.2)
                data = os.read(self._master, 65536) if ready else b""
            except OSError:  # EIO: nobody holds the other end any more
                return
            if data:
                self._written += data
            elif not ready and self.child.poll() is not None:
                return
