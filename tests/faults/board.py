"""A bridge that goes on whatever happens to its listener: a thousand tallies a second into a pseudo terminal.

One rule: what was sent can be told from the device time alone, so every kept frame can be compared with the truth.
"""

from __future__ import annotations

import os
import select
import termios
import threading
import time
import tty
from typing import Any

import numpy as np

from bridgeio.frames import Nameplate, Tallies
from bridgeio.framing import pack

__all__ = ["PERIOD_MS", "SteadyBoard", "truth"]

PERIOD_MS = 1
#: A nameplate comes this often [ms].
_PLATE_MS = 2000
_TICK_S = 0.004
_SPARE = 16


def truth(ms: Any) -> tuple[Any, Any]:
    """Forward and reflected counts of the tally with device time `ms` [ms], scalar or array."""
    return ms * 7 % 4093, ms * 13 % 1021


class SteadyBoard:
    """Open with `with`; `path` is the device. It sends from then on, to nobody where the port is not open."""

    def __init__(self) -> None:
        # The lowest free number is given out: take a high one, for which no other session's link may be looking.
        low = [end for _ in range(_SPARE) for end in os.openpty()]
        self._far, near = os.openpty()
        for end in low:
            os.close(end)
        tty.setraw(near)
        self.path = os.ttyname(near)
        # Nobody else holds the near end: a listener that dies takes its exclusive use of it along.
        os.close(near)
        os.set_blocking(self._far, False)
        self._port = select.poll()
        self._port.register(self._far, 0)
        self._began_s = time.monotonic()
        self._seq = 0
        self._waiting = b""
        #: Device time of the newest frame made [ms]; first device time since the port was opened last, -1 while closed.
        self.now_ms = self.opened_ms = -1
        #: Most bytes that ever waited for the listener, beyond what the terminal holds.
        self.most_waiting = 0
        self._ending = threading.Event()
        self._thread = threading.Thread(target=self._run, name="board", daemon=True)

    def __enter__(self) -> SteadyBoard:
        self._thread.start()
        return self

    def __exit__(self, *_: object) -> None:
        self._ending.set()
        self._thread.join(10)
        os.close(self._far)

    def _run(self) -> None:
        while not self._ending.wait(_TICK_S):
            first_ms = self.now_ms + 1
            upto_ms = int((time.monotonic() - self._began_s) * 1000)
            if upto_ms < first_ms:
                continue
            self._waiting += self._frames(first_ms, upto_ms)
            self.now_ms = upto_ms
            self._send(first_ms)

    def _frames(self, first_ms: int, upto_ms: int) -> bytes:
        out = b""
        if first_ms // _PLATE_MS != (first_ms - 1) // _PLATE_MS or first_ms // _PLATE_MS != upto_ms // _PLATE_MS:
            out = pack(
                Nameplate(self._seq, first_ms, 0, 1, 0xB21D6E, PERIOD_MS, 1, 4095, 5000, 0, 0, 1, "steady"),
            )
            self._seq = self._seq + 1 & 0xFF
        ms = np.arange(first_ms, upto_ms + 1)
        tallies = Tallies.of(self._seq + np.arange(len(ms)), ms, *truth(ms))
        self._seq = self._seq + len(ms) & 0xFF
        return out + pack(tallies)

    def _send(self, first_ms: int) -> None:
        if self._port.poll(0):
            # The port is closed (a hang-up is told unasked): what is sent, and was not yet read, goes nowhere.
            termios.tcflush(self._far, termios.TCOFLUSH)
            self._waiting, self.opened_ms = b"", -1
            return
        if self.opened_ms < 0:
            self.opened_ms = first_ms
        try:
            sent = os.write(self._far, self._waiting)
        except BlockingIOError:
            sent = 0
        self._waiting = self._waiting[sent:]
        self.most_waiting = max(self.most_waiting, len(self._waiting))
