"""What a journal holds and lacks, in the words that export and report share.

One rule: a time is told in UTC; what has none is said to have none.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from datetime import UTC, datetime, timedelta

from bridgeio.frames import KIND_BY_NUMBER
from bridgeio.journal import BadBlock

__all__ = ["bad_blocks", "frame_kinds", "lasting", "other_frames", "utc"]

_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
#: Damaged places that are told one by one.
_MOST_TOLD = 100
_TALLIES, _UNKNOWN = -1, 0


def utc(utc_us: int, form: str = "%Y-%m-%d %H:%M:%S") -> str:
    """A time [us since 1970] as text in UTC; whatever a journal holds, it is no error."""
    try:
        return (_EPOCH + timedelta(microseconds=utc_us)).strftime(form)
    except (OverflowError, ValueError):
        return "time out of range"


def lasting(seconds: float) -> str:
    """A duration [s] as h:mm:ss, below a minute as seconds."""
    if seconds < 60.0:
        return f"{seconds:.1f} s"
    whole = round(seconds)
    return f"{whole // 3600}:{whole // 60 % 60:02d}:{whole % 60:02d}"


def frame_kinds(frames: Mapping[int, int]) -> list[tuple[int, str]]:
    """Number and name of each kind of frame, by `Gathered.frames`; tallies first."""
    return [(number, _name(kind, number)) for kind, number in sorted(frames.items())]


def other_frames(frames: Mapping[int, int]) -> str:
    """The frames that are no tallies, in words; "" where there are none."""
    return ", ".join(f"{number} {name}" for number, name in frame_kinds({**frames, _TALLIES: 0}) if number)


def bad_blocks(bad: Sequence[BadBlock]) -> list[str]:
    """A sentence each for the places that cannot be read, with the time of each."""
    told = [_bad_block(one) for one in bad[:_MOST_TOLD]]
    more = sum(one.number for one in bad[_MOST_TOLD:])
    return [*told, f"and {more} more blocks cannot be read"] if more else told


def _bad_block(bad: BadBlock) -> str:
    when = "at a time not known" if bad.utc_us is None else f"about {utc(bad.utc_us)} UTC"
    which = f"block {bad.first}" if bad.number == 1 else f"blocks {bad.first} to {bad.first + bad.number - 1}"
    return f"{which}, {when}: {bad.words}"


def _name(kind: int, number: int) -> str:
    if kind == _TALLIES:
        return "tally" if number == 1 else "tallies"
    if kind == _UNKNOWN:
        return f"frame{'' if number == 1 else 's'} of a kind not known"
    name = KIND_BY_NUMBER[kind].name
    return name if number == 1 or name.endswith("s") else f"{name}s"
