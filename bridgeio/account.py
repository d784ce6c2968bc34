"""What came over the line, what was damaged, and what is missing: damage is a count, never an exception.

One rule: a loss is claimed only as far as frames prove it. `seq` wraps at 256, so the figure is "at least".
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from bridgeio.frames import KINDS, Nameplate

__all__ = ["Counters", "Losses"]

#: A frame may be dated a little before the one it follows; a fall beyond this is a restart [ms].
FALL_MS = 250
#: `ms` wraps after 49.7 days; a fall is a wrap only where the way forward is shorter than this [ms].
WRAP_MS = 3_600_000
_MS_MASK = 0xFFFF_FFFF


@dataclass(slots=True)
class Counters:
    """Totals since the receiver was made. Only the receiver changes them; others take a `copy`."""

    bytes: int = 0
    #: Good frames and text twins by number of kind.
    frames: dict[int, int] = field(default_factory=lambda: {kind.number: 0 for kind in KINDS})
    #: Good frames of a kind that is not known, and of a higher major version.
    unknown: int = 0
    newer: int = 0
    #: Good text twins (also counted by kind) and good plain lines.
    twins: int = 0
    lines: int = 0
    #: Damage: right in form but for the check; wrong in form; a line that is none of the known forms.
    bad_crc: int = 0
    malformed: int = 0
    bad_lines: int = 0
    #: Good frames that followed damage.
    resyncs: int = 0
    #: Frames missing by `seq` and `ms`, at least; frames that say the bridge itself dropped some before them.
    lost: int = 0
    dropped_flag: int = 0
    #: Frames that repeat `seq` and `ms` of the one before; restarts; delimiters with nothing before them.
    repeated: int = 0
    resets: int = 0
    lone_zeros: int = 0

    @property
    def damaged(self) -> int:
        """All that came and could not be used."""
        return self.bad_crc + self.malformed + self.bad_lines

    def copy(self) -> Counters:
        """The figures as they stand now."""
        return replace(self, frames=dict(self.frames))


class Losses:
    """Follows `seq` and `ms` from frame to frame and adds what is missing to the counters."""

    def __init__(self, counters: Counters) -> None:
        self._counters = counters
        self._last: tuple[int, int] | None = None
        self._board: tuple[int, int] | None = None
        self._period_ms = 0
        # Across a reopened port nothing is claimed until a nameplate shows the same start of the same board.
        self._left: tuple[int, int] | None = None
        self._back: tuple[int, int] | None = None

    def frame(self, seq: int, ms: int) -> None:
        """One good frame with its sequence number and device time [ms]."""
        last, self._last = self._last, (seq, ms)
        if last is None:
            self._back = self._last
        elif seq != (last[0] + 1) & 0xFF or ms < last[1]:
            self._step(last, self._last)

    def block(self, seq: npt.NDArray[np.uint8], ms: npt.NDArray[Any]) -> None:
        """Good frames one after the other: seq uint8[n], ms uint32[n] [ms], n at least 1."""
        self.frame(int(seq[0]), int(ms[0]))
        odd = (seq[1:] - seq[:-1] != 1) | (ms[1:] < ms[:-1])
        for at in np.flatnonzero(odd).tolist() if odd.any() else ():
            self._step((int(seq[at]), int(ms[at])), (int(seq[at + 1]), int(ms[at + 1])))
        self._last = (int(seq[-1]), int(ms[-1]))

    def nameplate(self, plate: Nameplate) -> None:
        """A nameplate, before its own `frame`: another board or another start begins afresh."""
        board = (plate.device_id, plate.boot)
        if self._board not in (None, board):
            self._restart()
            self._last = None
        elif self._left and plate.boot and self._board == board:
            self._step(self._left, self._back or (plate.seq, plate.ms))
        self._board, self._period_ms = board, plate.period_ms
        self._left = None

    def reopened(self) -> None:
        """The port was closed and opened: the loss between is claimed once the board is known again."""
        self._left, self._last, self._back = self._last or self._left, None, None

    def _step(self, last: tuple[int, int], now: tuple[int, int]) -> None:
        ahead_ms = (now[1] - last[1]) & _MS_MASK
        if now[1] < last[1] and ahead_ms > WRAP_MS:
            if last[1] - now[1] > FALL_MS:
                self._restart()
                return
            ahead_ms = 0
        gap = (now[0] - last[0] - 1) & 0xFF
        if gap == 0xFF and ahead_ms == 0:
            self._counters.repeated += 1
        elif gap:
            self._counters.lost += gap + 256 * self._rounds(gap, ahead_ms)

    def _rounds(self, gap: int, ahead_ms: int) -> int:
        """How often `seq` went round unseen, by the nominal period less a tenth for clock and jitter.

        Only asked where there is a gap: a `seq` that runs on after a pause says that the bridge paused.
        """
        if not self._period_ms:
            return 0
        expected = 0.9 * ahead_ms / self._period_ms - 1
        return max(0, int((expected - gap + 128) // 256))

    def _restart(self) -> None:
        self._counters.resets += 1
        self._board = self._left = None
