"""From what the reading hands over to rows of the journal: seconds are cut, times told, stretches begun.

One rule: order is kept, and each frame goes into one block of the stretch whose bridge sent it.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, fields, replace

import numpy as np
import numpy.typing as npt

from bridgeio.clock import DeviceClock
from bridgeio.frames import Item, Nameplate, Tallies

from .book import Block, Mark, Row, Stretch
from .pack import Micros, Timed, frames_in

__all__ = ["BLOCK_S", "MOST_FRAMES", "Assembly", "Feed", "Reopened", "Unkept"]

#: A block is cut at this age: a fifth is left for the disk, so that a kill costs a second at most [s].
BLOCK_S = 0.8

#: A block with so many frames is cut whatever its age: a recording read from a file comes as fast as it can.
MOST_FRAMES = 10_000

_US = 1_000_000


@dataclass(frozen=True, slots=True)
class Feed:
    """Items that arrived together, and the receiver's counters then: pieces damaged and frames missing so far.

    at_s: when they were handed over, by the steady clock [s].
    """

    items: Sequence[Item]
    arrival_s: float
    at_s: float
    damaged: int = 0
    missing: int = 0


@dataclass(frozen=True, slots=True)
class Unkept:
    """Frames that found no room while the disk was behind, and when the first and the last of them came."""

    frames: int
    first_s: float
    last_s: float


@dataclass(frozen=True, slots=True)
class Reopened:
    """The source was lost and is back since `utc_us` [us since 1970], perhaps with another board."""

    utc_us: int


class Assembly:
    """Gathers rows in `rows`; whoever writes them clears the list. Not for several threads at once."""

    def __init__(self, stretch: Stretch) -> None:
        """Begin with a stretch."""
        self.rows: list[Row] = [stretch]
        self._stretch = stretch
        self._clock = DeviceClock()
        self._timed: list[Timed] = []
        self._frames = 0
        self._since_s: float | None = None
        self._utc_us = stretch.started_us
        self._counted = (0, 0)
        self._damaged = self._missing = 0

    @property
    def frames(self) -> int:
        """Frames gathered and not yet written."""
        rows = (one for row in self.rows if isinstance(row, Block) for one in row.timed)
        return sum(frames_in(one.item) for one in (*rows, *self._timed))

    @property
    def due_s(self) -> float | None:
        """When the block that is being gathered is to be cut, by the steady clock [s]; None where there is none."""
        return None if self._since_s is None else self._since_s + BLOCK_S

    def begin(self, stretch: Stretch) -> None:
        """What follows belongs to another stretch; without a nameplate of its own it has the board's of before."""
        self.cut()
        if stretch.nameplate is None and stretch.source == self._stretch.source:
            stretch = replace(stretch, nameplate=self._stretch.nameplate)
        if stretch.source != self._stretch.source:
            self._clock.restart()
            self._counted = (0, 0)
        self._stretch = stretch
        self.rows.append(stretch)

    def reopened(self, started_us: int) -> None:
        """The source was lost and is back: whose frames follow is not known until a nameplate tells."""
        self.cut()
        self._clock.restart()
        self._stretch = replace(self._stretch, nameplate=None, started_us=started_us)
        self.rows.append(self._stretch)

    def mark(self, mark: Mark) -> None:
        """Note something, after the frames that came before it."""
        self.rows.append(mark)

    def unkept(self, gap: Unkept) -> None:
        """Account for frames that were not kept, in a block of their own and a mark with the length of the gap."""
        self.cut()
        self.rows.append(Block((), int(gap.first_s * _US), unkept=gap.frames))
        length_s = max(0.0, gap.last_s - gap.first_s)
        text = f"{gap.frames} frames not kept in {length_s:.1f} s: the disk was behind"
        self.mark(Mark("gap", int(gap.first_s * _US), text, length_s))

    def clock_stepped(self, utc_s: float, step_s: float) -> None:
        """Our clock was set, or the machine slept: times are told anew from here on."""
        self._clock.restart()
        self.mark(Mark("clock", int(utc_s * _US), f"the clock went {step_s:+.3f} s", step_s))

    def take(self, feed: Feed) -> None:
        """Gather a feed; the block before it is cut where it is old enough."""
        self.tick(feed.at_s)
        self._count(feed.damaged, feed.missing)
        for item in feed.items:
            if isinstance(item, Nameplate):
                self._meet(item, feed)
            for one in self._told(item, feed.arrival_s) if frames_in(item) else ():
                if self._frames >= MOST_FRAMES:
                    self.cut()
                self._open(feed)
                self._timed.append(one)
                self._frames += frames_in(one.item)
        if self._damaged or self._missing:
            self._open(feed)

    def tick(self, at_s: float) -> None:
        """Cut the block where it is old enough by the steady clock [s]."""
        if self._since_s is not None and not 0 <= at_s - self._since_s < BLOCK_S:
            self.cut()

    def cut(self) -> None:
        """End the block that is being gathered."""
        if self._timed or self._damaged or self._missing:
            self.rows.append(Block(self._timed, self._utc_us, missing=self._missing, damaged=self._damaged))
        self._timed, self._frames, self._since_s = [], 0, None
        self._damaged = self._missing = 0

    def _open(self, feed: Feed) -> None:
        if self._since_s is None:
            self._since_s, self._utc_us = feed.at_s, int(feed.arrival_s * _US)

    def _count(self, damaged: int, missing: int) -> None:
        """Add what the counters grew by; a receiver made anew counts from 0."""
        before = self._counted
        if damaged < before[0] or missing < before[1]:
            before = (0, 0)
        self._damaged += damaged - before[0]
        self._missing += missing - before[1]
        self._counted = (damaged, missing)

    def _meet(self, plate: Nameplate, feed: Feed) -> None:
        """A nameplate that says anything new begins a stretch; another start or board has another time too."""
        known = self._stretch.nameplate
        if known is not None and _same(known, plate):
            return
        self.cut()
        if known is not None and (known.boot, known.device_id) != (plate.boot, plate.device_id):
            self._clock.restart()
        self._stretch = replace(self._stretch, nameplate=plate, started_us=int(feed.arrival_s * _US))
        self.rows.append(self._stretch)

    def _told(self, item: Item, arrival_s: float) -> Iterator[Timed]:
        """The item with its times, in parts: none is long, and in none the device time falls."""
        if not isinstance(item, Tallies):
            yield Timed(item, self._utc(np.array([item.ms], dtype=np.uint32), arrival_s))
            return
        cuts = set(range(0, len(item), MOST_FRAMES)) | {len(item)}
        if item.has_ms:
            utc_us = self._utc(item.ms, arrival_s)
            # Modulo 2^32 a fall is a huge step; a wrap is a small one.
            cuts.update((np.flatnonzero(np.diff(item.ms) >= 1 << 31) + 1).tolist())
        else:
            utc_us = np.full(len(item), int(arrival_s * _US))
        for at, upto in itertools.pairwise(sorted(cuts)):
            yield Timed(_part(item, slice(at, upto)), utc_us[at:upto])

    def _utc(self, ms: npt.NDArray[np.uint32], arrival_s: float) -> Micros:
        return np.rint(self._clock.utc(ms, arrival_s) * _US).astype(np.int64)


def _same(one: Nameplate, other: Nameplate) -> bool:
    """Whether two nameplates say the same, but for when."""
    return all(getattr(one, f.name) == getattr(other, f.name) for f in fields(one) if f.name not in ("seq", "ms"))


def _part(item: Tallies, part: slice) -> Tallies:
    columns = {name: getattr(item, name)[part] for name in ("seq", "ms", "forward", "reflected", "flags")}
    return replace(item, **columns)
