"""Bytes in, frames out, no port in sight: all forms of the wire, told apart as `WIRE.md` says.

One rule: nothing that comes over the line raises. What cannot be used is counted, and the next delimiter
is a fresh start. How the bytes are split between calls makes no difference.
"""

from __future__ import annotations

import re
import struct
from typing import Any

import numpy as np

from bridgeio.account import Counters, Losses
from bridgeio.bulk import Stretch, sort_out
from bridgeio.frames import (
    FLAG_DROPPED,
    KIND_BY_NUMBER,
    MAJOR,
    Item,
    Kind,
    Nameplate,
    Unknown,
)
from bridgeio.framing import MAX_PAYLOAD, MIN_PAYLOAD, crc16
from bridgeio.lines import plain_reader, read_twin
from bridgeio.outbox import MOULDS, PLAIN, PLAIN_TIMED, Outbox, plain_row

__all__ = ["LONGEST_STRETCH", "Counters", "Receiver"]

#: More bytes than this without a delimiter are damage.
LONGEST_STRETCH = 512
#: Bytes taken at a time, so that a huge feed needs no huge tables.
PIECE_BYTES = 1 << 16
#: From this many bytes on, decoding in bulk is cheaper than one by one.
BULK_BYTES = 512

_CRC_BYTES = 2
_MIN_BLOCK, _MAX_BLOCK = MIN_PAYLOAD + _CRC_BYTES + 1, MAX_PAYLOAD + _CRC_BYTES + 1
_HEAD = struct.Struct("<xBI")
_ENDS = re.compile(rb"[\0\n]")


class Receiver:
    """Turns what a bridge sends into items.

    wire: "auto" tells the forms apart; "text" never tries binary frames. pattern: a regular expression for
    plain lines with the groups forward, reflected and perhaps ms (PatternError where it cannot be used).
    from_start: the first byte is known to begin a frame or line, as in a file; otherwise what is half at
    opening is dropped and not counted.
    """

    def __init__(self, wire: str = "auto", pattern: str | None = None, *, from_start: bool = False) -> None:
        if wire not in ("auto", "text"):
            raise ValueError(f"wire is auto or text, got {wire!r}")
        self.counters = Counters()
        self._losses = Losses(self.counters)
        self._read_plain = plain_reader(pattern)
        self._text_only = wire == "text"
        self._out = Outbox()
        self._astray = False
        self._listen_afresh(opening=not from_start)

    def feed(self, data: bytes) -> list[Item]:
        """What these bytes complete, in order; consecutive tallies of one kind come as one `Tallies`."""
        self.counters.bytes += len(data)
        for at in range(0, len(data), PIECE_BYTES):
            piece = data[at : at + PIECE_BYTES]
            if not self._locked:
                piece = self._listen(piece)
            if piece:
                self._take_frames(piece)
        return self._out.empty()

    def reopened(self) -> None:
        """The port was opened again: half of something may come first, and the form may have changed."""
        self._losses.reopened()
        self._listen_afresh(opening=True)

    # Until a good binary frame has come, lines are tried too.

    def _listen_afresh(self, opening: bool) -> None:
        self._locked = False
        self._skipping = False
        # Since the last delimiter that counted: a zero, or the end of a good line.
        self._stretch = b""
        self._line_at = 0
        # Damage by lines of this stretch: void if it ends in a zero, since then it was tried as a frame only.
        self._pending: list[str] = []
        self._half_stretch = self._half_line = opening

    def _listen(self, piece: bytes) -> bytes:
        """Takes bytes while lines are tried; returns what follows the first good binary frame."""
        at = 0
        for match in _ENDS.finditer(piece):
            self._extend(piece[at : match.start()])
            at = match.end()
            if self._skipping:
                self._skipping = self._half_line = False
            elif match[0] == b"\n":
                self._end_line()
            else:
                self._end_stretch()
            if self._locked:
                return piece[at:]
        self._extend(piece[at:])
        return b""

    def _extend(self, part: bytes) -> None:
        if self._skipping:
            return
        self._stretch += part
        if len(self._stretch) > LONGEST_STRETCH and self._line_at:
            self._settle(self._stretch[self._line_at :])
        if len(self._stretch) > LONGEST_STRETCH:
            self._damage("bad_lines" if self._text_only else "malformed")
            self._settle(b"")
            self._skipping = True

    def _settle(self, rest: bytes) -> None:
        """What came before rest was lines: their damage counts, and a new stretch begins."""
        for name in self._pending:
            self._damage(name)
        self._pending.clear()
        self._stretch, self._line_at = rest, 0
        self._half_stretch = False

    def _end_stretch(self) -> None:
        block, half = self._stretch, self._half_stretch
        if self._text_only:
            block, half = block[self._line_at :], self._half_line
        self._stretch, self._line_at = b"", 0
        self._pending.clear()
        self._half_stretch = self._half_line = False
        if self._text_only and block:
            self._damage("" if half else "bad_lines")
        else:
            self._block(block, forgiven=half)

    def _end_line(self) -> None:
        line, half = self._stretch[self._line_at :].removesuffix(b"\r"), self._half_line
        self._half_line = False
        fault = self._line(line, half) if line else ""
        if fault is None:
            self._settle(b"")
            return
        if fault and not half:
            self._pending.append(fault)
        if self._text_only:
            self._settle(b"")
        else:
            self._stretch += b"\n"
            self._line_at = len(self._stretch)

    def _line(self, line: bytes, half: bool) -> str | None:
        """Takes a line; returns the name of its damage, or None. A half line needs a check to be believed."""
        payload = read_twin(line)
        if isinstance(payload, bytes):
            fault = self._payload(payload, text=True)
            self.counters.twins += fault is None
            return fault
        plain = None if payload or half else self._read_plain(line)
        if plain is None:
            return "bad_crc" if payload else "bad_lines"
        forward, reflected, ms = plain
        mould = PLAIN if ms is None else PLAIN_TIMED
        self._out.row(mould, plain_row(forward, reflected, ms))
        self.counters.lines += 1
        self._well()
        return None

    # From the first good binary frame on there are only frames.

    def _take_frames(self, piece: bytes) -> None:
        if self._skipping:
            _, zero, piece = piece.partition(b"\0")
            self._skipping = not zero
        data = self._stretch + piece
        stretch = sort_out(data) if len(data) >= BULK_BYTES else None
        if stretch is None:
            *blocks, self._stretch = data.split(b"\0")
            for block in blocks:
                self._block(block)
        else:
            self._take_bulk(data, stretch)
        if len(self._stretch) > LONGEST_STRETCH or self._skipping:
            if not self._skipping:
                self._damage("malformed")
            self._stretch, self._skipping = b"", True

    def _take_bulk(self, data: bytes, stretch: Stretch) -> None:
        others = np.flatnonzero(~stretch.good)
        done = 0
        for at, upto in zip(others.tolist(), np.cumsum(stretch.good)[others].tolist(), strict=True):
            self._tallies(stretch.kind, stretch.payloads[done:upto])
            self._block(data[stretch.starts[at] : stretch.ends[at]])
            done = upto
        self._tallies(stretch.kind, stretch.payloads[done:])
        self._stretch = data[stretch.ends[-1] + 1 :]

    def _tallies(self, kind: Kind, payloads: np.ndarray[Any, np.dtype[np.uint8]]) -> None:
        if not len(payloads):
            return
        records = payloads.view(kind.record)[:, 0]
        self._losses.block(records["seq"], records["ms"])
        self.counters.frames[kind.number] += len(payloads)
        self.counters.dropped_flag += int(np.count_nonzero(records["flags"] & FLAG_DROPPED))
        self._well()
        self._out.row(MOULDS[kind.number], payloads.tobytes())

    def _block(self, block: bytes, forgiven: bool = False) -> None:
        """What stood before a delimiter; its damage is not counted where it is forgiven."""
        if not block:
            self.counters.lone_zeros += 1
            return
        payload = _unwrap(block)
        fault = self._payload(payload) if isinstance(payload, bytes) else payload
        if fault is None:
            self._locked = True
        elif not forgiven:
            self._damage(fault)

    def _payload(self, payload: bytes, text: bool = False) -> str | None:
        """Takes a payload whose check was right; returns the name of its damage, or None."""
        kind = KIND_BY_NUMBER.get(payload[0])
        if kind is None:
            return self._strange(payload, text)
        if len(payload) < kind.size:
            return "malformed"
        if text:
            payload = kind.little.pack(*kind.big.unpack_from(payload)) + payload[kind.size :]
        if kind.counted:
            self._out.row(MOULDS[kind.number], payload[: kind.size])
        else:
            item = kind.read(payload)
            if item is None:
                return "malformed"
            if isinstance(item, Nameplate):
                self._losses.nameplate(item)
            self._out.item(item)
        self._losses.frame(*_HEAD.unpack_from(payload))
        self.counters.frames[kind.number] += 1
        if kind.flags_at is not None and payload[kind.flags_at] & FLAG_DROPPED:
            self.counters.dropped_flag += 1
        self._well()
        return None

    def _strange(self, payload: bytes, text: bool) -> str | None:
        """A sound payload of no known kind: kept if of this major version, counted if of a later one."""
        major = payload[0] >> 4
        if major < MAJOR:
            return "malformed"
        if major > MAJOR:
            self.counters.newer += 1
        else:
            item = Unknown(payload[0], payload, text)
            self._losses.frame(item.seq, item.ms)
            self._out.item(item)
            self.counters.unknown += 1
        self._well()
        return None

    def _damage(self, name: str) -> None:
        if name:
            setattr(self.counters, name, getattr(self.counters, name) + 1)
            self._astray = True

    def _well(self) -> None:
        if self._astray:
            self._astray = False
            self.counters.resyncs += 1


def _unwrap(block: bytes) -> bytes | str:
    """The payload of a block without zeros, or the name of its damage.

    Strict COBS, in place: each code byte becomes the zero it stands for, the first one is dropped. A block
    this short cannot hold a full run, so code 255 always points past the end.
    """
    length = len(block)
    if not _MIN_BLOCK <= length <= _MAX_BLOCK:
        return "malformed"
    body, at = bytearray(block), 0
    while at < length:
        code = body[at]
        body[at] = 0
        at += code
    if at != length:
        return "malformed"
    payload = bytes(body[1:-2])
    return payload if crc16(payload) == body[-2] | body[-1] << 8 else "bad_crc"
