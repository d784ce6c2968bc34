"""The one door through which outside text reaches a terminal or a page.

One rule: nameplates, remarks, lines, file names, file contents and errors pass `visible` before they are
shown; they are stored raw.
"""

from __future__ import annotations

import sys
from typing import TextIO

from bridgeio.visible import visible

__all__ = ["say", "visible"]


def say(text: str, stream: TextIO | None = None) -> None:
    """Write each line of `text`, made visible, to `stream` (standard error unless told)."""
    out = sys.stderr if stream is None else stream
    encoding = out.encoding or "ascii"
    for line in text.split("\n"):
        out.write(visible(line).encode(encoding, "backslashreplace").decode(encoding) + "\n")
