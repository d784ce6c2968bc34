"""A journal's report as lines of text: whether it is all there, what it holds, and what was on the air.

One rule: it opens with what is missing. Outside text stands in it as it came: to show it is for the door.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Iterable, Iterator, Sequence

from bridgeio.bridge_file import BridgeFile
from bridgeio.journal import Account, Journal, Mark, Stretch
from calibration.block import Block
from calibration.readings import Readings

from .passages import Passage
from .replay import Replay
from .summary import Crest, Hour, hours
from .words import bad_blocks, frame_kinds, lasting, utc

__all__ = ["report_lines"]

_US = 1_000_000
#: So many marks, and seconds with losses, are told one by one.
_MOST_MARKS, _MOST_LOSSES = 200, 20
#: What ends an absence of the link, and what begins one.
_FOUND, _GONE = ("link found",), ("link looking", "link silent", "link lost")


def report_lines(journal: Journal, files: Sequence[BridgeFile] = ()) -> list[str]:
    """The report, read by `files` or else by the bridge files in the journal. FileError as by `Replay`."""
    replay = Replay(journal, files)
    seen = _Seen()
    told = list(hours(seen.watching(replay.columns())))
    account = journal.walked
    return [
        account.words,
        "",
        *_head(journal, seen, replay, account),
        *_section("Notes", [*replay.notes, *journal.faults]),
        *_section("Cannot be read", bad_blocks(account.bad)),
        *_section("Seconds with missing frames (UTC)", _losses(account)),
        *_section("What happened (UTC)", _marks(journal.marks)),
        *_section("On the air", _totals(told)),
        *_section("Hour by hour (UTC; SWR where forward is above a fifth of the hour's highest)", _table(told)),
        "",
        *_digest(journal),
    ]


class _Seen:
    """Notes what passes by on the way to the summary."""

    def __init__(self) -> None:
        self.first_us: int | None = None
        self.last_us = 0
        #: Tallies by what they were read by.
        self.read_by: Counter[str] = Counter()
        self.flagged: Counter[str] = Counter()

    def watching(self, columns: Iterable[tuple[Passage, Block]]) -> Iterator[tuple[Passage, Block]]:
        """Hand on what comes."""
        for passage, block in columns:
            utc_us, n = passage.counts.utc_us, len(passage.counts)
            low, high = int(utc_us.min()), int(utc_us.max())
            self.first_us = low if self.first_us is None else min(low, self.first_us)
            self.last_us = max(high, self.last_us)
            self.read_by[_calibration(passage)] += n
            self.flagged["simulated"] += n * passage.stretch.simulated
            self.flagged["unchecked"] += n * (not passage.counts.checked)
            yield passage, block


def _calibration(passage: Passage) -> str:
    if passage.calibration is None:
        return "no bridge file: counts only"
    file = passage.calibration.file
    fit = f", fit {file.fit_id:04X}" if file.fit_id else ""
    return f"{file.name} ({file.source}{fit})"


def _head(journal: Journal, seen: _Seen, replay: Replay, account: Account) -> Iterator[str]:
    yield _row("journal", str(journal.path))
    if seen.first_us is not None:
        length = lasting((seen.last_us - seen.first_us) / _US)
        yield _row("span", f"{utc(seen.first_us)} to {utc(seen.last_us)} UTC, {length}")
    frames = ", ".join(f"{number} {name}" for number, name in frame_kinds(replay.frames)) or "none"
    yield _row("frames", frames)
    yield _row("account", f"{account.sent} sent, {account.kept} kept, {account.missing} missing on the line at least,")
    yield _row("", f"{account.unkept} not kept by a slow disk; {account.damaged} damaged pieces of the line")
    for words in _sources(list(journal.stretches.values())):
        yield _row("source", words)
    for words, number in seen.read_by.most_common():
        yield _row("read by", f"{words}: {number} tallies")
    for name, number in seen.flagged.items():
        if number:
            yield _row(name, f"{number} tallies")


def _sources(stretches: Sequence[Stretch]) -> list[str]:
    """Sources with their boards, each once; what came before a board's first nameplate is not told apart."""
    named = {stretch.source for stretch in stretches if stretch.nameplate is not None}
    told = (one for one in stretches if one.nameplate is not None or one.source not in named)
    return list(dict.fromkeys(map(_board, told)))


def _board(stretch: Stretch) -> str:
    plate = stretch.nameplate
    board = "no nameplate" if plate is None else f'board {plate.device_id:08X} "{plate.name}"'
    return f"{stretch.source}, {board}{', simulated' if stretch.simulated else ''}"


def _losses(account: Account) -> list[str]:
    seconds = sorted({utc_us // _US for utc_us in account.losses})
    told = [utc(second * _US) for second in seconds[:_MOST_LOSSES]]
    more = len(seconds) - _MOST_LOSSES
    return [*told, f"and {more} more"] if more > 0 else told


def _marks(marks: Sequence[Mark]) -> list[str]:
    """Marks in order, with how long the link was away where it was found again."""
    lines, gone_us = [], None
    for mark in marks:
        if mark.kind in _GONE and gone_us is None:
            gone_us = mark.utc_us
        lines.append(f"{utc(mark.utc_us)}  {mark.kind:<12}  {_what(mark, gone_us)}".rstrip())
        if mark.kind.startswith("link ") and mark.kind not in _GONE:
            gone_us = None
    more = len(lines) - _MOST_MARKS
    return [*lines[:_MOST_MARKS], f"and {more} more marks"] if more > 0 else lines


def _what(mark: Mark, gone_us: int | None) -> str:
    if mark.kind == "frequency":
        return f"{mark.value / 1e6:.6g} MHz, {mark.text}".rstrip(", ")
    if mark.kind in _FOUND and gone_us is not None:
        return f"{mark.text}, after {lasting((mark.utc_us - gone_us) / _US)}"
    return mark.text


def _totals(told: Sequence[Hour]) -> list[str]:
    on_air_s = sum(hour.on_air_s for hour in told)
    counted_s = sum(hour.counted_s for hour in told)
    lines = [_row("recorded", f"{lasting(sum(hour.recorded_s for hour in told))}, with carrier {lasting(on_air_s)}")]
    if counted_s:
        lines.append(_row("counts only", lasting(counted_s)))
    crests = [hour.crest for hour in told if hour.crest is not None]
    sure = [crest for crest in crests if not math.isnan(crest.forward_w)]
    if sure:
        best = max(sure, key=lambda crest: crest.forward_w)
        lines.append(_row("highest", f"{_forward(best)} forward, {utc(best.utc_us)} UTC, in two frames or more"))
    lone = [crest for crest in crests if not math.isnan(crest.lone_w)]
    if lone:
        best = max(lone, key=lambda crest: crest.lone_w)
        lines.append(_row("unconfirmed", f"{best.lone_w:.3g} W in a single frame, {utc(best.lone_us)} UTC"))
    if on_air_s:
        lines.append(_row("energy", f"{sum(hour.energy_j for hour in told) / 3600.0:.4g} Wh net"))
    return lines


def _table(told: Sequence[Hour]) -> list[str]:
    if not told:
        return []
    head = f"{'hour':<16} {'on air':>9} {'highest':>9}  {'SWR, median':<22} {'SWR, worst':<22} at"
    return [head, *(_hour(hour) for hour in told)]


def _hour(hour: Hour) -> str:
    highest = _forward(hour.crest).split(" (")[0] if hour.crest else "-"
    start, worst_at = utc(hour.start_us, "%Y-%m-%d %H:%M"), utc(hour.worst_us, "%H:%M:%S") if hour.worst else ""
    swrs = f"{_swr(hour.median):<22} {_swr(hour.worst):<22}"
    return f"{start} {lasting(hour.on_air_s):>9} {highest:>9}  {swrs} {worst_at}".rstrip()


def _swr(reading: Readings | None) -> str:
    """SWR with its interval, as far as each end is known."""
    if reading is None:
        return "-"
    swr, low, high = (float(column[0]) for column in (reading.swr, reading.swr_low, reading.swr_high))
    if reading.has("below-reading")[0]:
        return "too low to read" if math.isnan(high) else f"below {high:.3g}"
    if math.isnan(swr):
        return "open or short" if math.isnan(low) else f"above {low:.3g}"
    return _with_ends(swr, low, high)


def _forward(crest: Crest) -> str:
    """The highest power with its interval."""
    if crest.reading is None:
        return "-"
    one = crest.reading
    return _with_ends(crest.forward_w, float(one.forward_low_w[0]), float(one.forward_high_w[0]), " W")


def _with_ends(value: float, low: float, high: float, unit: str = "") -> str:
    """A value with its interval, none of them finer than half the interval carries; an open end is told as such."""
    half = (high - low) / 2.0 if high > low else value / 20.0
    step = math.floor(math.log10(half)) if half > 0.0 else 0
    shown = [f"{round(x, -step):.{max(0, -step)}f}" for x in (value, low, *([] if math.isnan(high) else [high]))]
    ends = f"{shown[1]} to {shown[2]}" if len(shown) == 3 else f"{shown[1]} or more"
    return f"{shown[0]}{unit} ({ends})"


def _digest(journal: Journal) -> Iterator[str]:
    if journal.digest is None:
        return
    yield "Digest of the last block; noted on paper it shows later that all up to here is whole and in order (not who"
    yield "wrote it):"
    yield f"  {journal.digest.hex()}"


def _section(title: str, lines: Sequence[str]) -> list[str]:
    return ["", title, *(f"  {line}" for line in lines)] if lines else []


def _row(name: str, words: str) -> str:
    return f"{name:<12} {words}"
