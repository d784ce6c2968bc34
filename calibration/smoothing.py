"""Averages of consecutive readings, without ever averaging across what must not be mixed.

One rule: powers are averaged, each sample linearised first; a group is closed short where the carrier comes or goes, a
detector clips, frames are missing or the frequency changes.
"""

from __future__ import annotations

from dataclasses import dataclass, fields
from itertools import pairwise

import numpy as np
import numpy.typing as npt

__all__ = ["Averager", "Samples"]

Array = npt.NDArray[np.float64]
Bools = npt.NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class Samples:
    """n consecutive samples, columns of length n.

    carrier, clipped, gap_before: what each is; kind: any number that must not change within a group (frequency [Hz],
    NaN unknown). forward, reflected [counts], wire_flags, time_s [s].
    """

    forward: Array
    reflected: Array
    wire_flags: npt.NDArray[np.uint8]
    time_s: Array
    carrier: Bools
    clipped: Bools
    gap_before: Bools
    kind: Array

    def __len__(self) -> int:
        """How many samples."""
        return len(self.forward)

    def at(self, rows: slice) -> Samples:
        """Some of them."""
        return Samples(*(getattr(self, column.name)[rows] for column in fields(self)))

    def followed_by(self, other: Samples) -> Samples:
        """These and then the others."""
        return Samples(
            *(np.concatenate([getattr(self, column.name), getattr(other, column.name)]) for column in fields(self))
        )


class Averager:
    """Cuts a run of samples into groups of at most `size`."""

    def __init__(self, size: int) -> None:
        """`size` samples make a group, fewer where it is closed short."""
        self._size = size
        self._waiting: Samples | None = None
        self._carrier_before = True  # of the sample before those that wait; unknown counts as no rise

    def push(self, samples: Samples) -> list[Samples]:
        """Groups that are closed now, in order; the rest waits for what follows."""
        run = samples if self._waiting is None else self._waiting.followed_by(samples)
        if not len(run):
            return []
        # A last sample cannot know yet whether it ends a transmission: a full group closes when its successor is here.
        cuts = _cuts(run, self._size)
        before = np.concatenate([[self._carrier_before], run.carrier[:-1]])
        groups = [_settled(run, before, start, stop) for start, stop in pairwise(cuts)]
        self._waiting = run.at(slice(cuts[-1], None))
        self._carrier_before = bool(before[cuts[-1]])
        return groups

    @property
    def waiting(self) -> int:
        """Samples that no group has yet."""
        return 0 if self._waiting is None else len(self._waiting)


def _breaks(run: Samples) -> Bools:
    """Where a sample must not be mixed with the one before it."""
    if len(run) < 2:
        return np.ones(len(run), dtype=bool)
    kind = run.kind
    same = (kind[1:] == kind[:-1]) | (np.isnan(kind[1:]) & np.isnan(kind[:-1]))
    changed = (run.carrier[1:] != run.carrier[:-1]) | (run.clipped[1:] != run.clipped[:-1])
    return np.concatenate([[True], changed | run.gap_before[1:] | ~same])


def _cuts(run: Samples, size: int) -> list[int]:
    """Starts of groups; the last one is of the group that still waits."""
    cuts = [0]
    for begin in [*np.flatnonzero(_breaks(run))[1:].tolist(), len(run)]:
        last = begin == len(run)
        # Within a stretch every `size` samples; the last full group of the run waits for its successor.
        cuts += [at for at in range(cuts[-1] + size, begin, size)]
        if not last:
            cuts.append(begin)
    return cuts


def _settled(run: Samples, carrier_before: Bools, start: int, stop: int) -> Samples:
    """The group, less the first and the last sample of a transmission where at least three are there.

    Within those the carrier rose or fell: they are part of one and part of the other.
    """
    if stop - start < 3 or not run.carrier[start]:
        return run.at(slice(start, stop))
    rises = not carrier_before[start] and not run.gap_before[start]
    falls = stop < len(run) and not run.carrier[stop]
    return run.at(slice(start + int(rises), stop - int(falls)))
