"""A serial line to measure on: a pseudo-terminal whose far end is written by a process of its own.

One rule: the measured process sees a device like any other, opens it by its path, and pays for nothing else.
"""

from __future__ import annotations

import json
import os
import pty
import subprocess
import sys
import tty
from collections.abc import Sequence
from pathlib import Path
from typing import Any

__all__ = ["Line"]

_FEEDER = Path(__file__).with_name("feeder.py")


class Line:
    """Open with `with`; `path` is the device. One `feed` at a time."""

    def __init__(self) -> None:
        self._far, self._near = pty.openpty()
        tty.setraw(self._near)
        self.path = os.ttyname(self._near)
        self._feeder = subprocess.Popen(
            [sys.executable, "-S", "-E", str(_FEEDER), str(self._far)],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            pass_fds=[self._far],
        )

    def __enter__(self) -> Line:
        return self

    def __exit__(self, *_: Any) -> None:
        self._feeder.kill()
        self._feeder.communicate()
        os.close(self._far)
        os.close(self._near)

    def feed(self, pieces: Sequence[bytes], at: Sequence[float]) -> None:
        """Have `pieces` written at the moments `at` [s from now, rising]; returns at once."""
        assert self._feeder.stdin is not None
        head = json.dumps({"at": list(at), "sizes": [len(piece) for piece in pieces]})
        self._feeder.stdin.write(head.encode("ascii") + b"\n" + b"".join(pieces))
        self._feeder.stdin.flush()

    def fed(self) -> list[float]:
        """Wait until the last `feed` is done; the moments of writing [s, CLOCK_MONOTONIC]."""
        assert self._feeder.stdout is not None
        return list(json.loads(self._feeder.stdout.readline()))

    def feed_evenly(self, pieces: Sequence[bytes], rate_hz: float) -> None:
        """Have `pieces` written `rate_hz` a second."""
        self.feed(pieces, [place / rate_hz for place in range(len(pieces))])
