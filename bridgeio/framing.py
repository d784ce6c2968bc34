"""The reference encoder: frames to wire bytes, as `WIRE.md` says, for tests and the simulator.

One rule: it is written to be compared with the page, not to be fast; the receiver has its own quick way and
the tests hold the two together. Errors here are a caller's mistakes, never damage on the line.
"""

from __future__ import annotations

import binascii
import struct
from collections.abc import Iterator
from typing import Any

from bridgeio.errors import BridgeIOError
from bridgeio.frames import Item, Kind, Tallies, Unknown, kind_of

__all__ = [
    "CRC_START",
    "MAX_PAYLOAD",
    "MIN_PAYLOAD",
    "FramingError",
    "cobs_decode",
    "cobs_encode",
    "crc16",
    "pack",
    "pack_plain",
    "pack_text",
    "payloads",
    "wrap",
]

#: Payload bytes a frame may have: a head at least, and few enough that one byte of COBS is enough.
MIN_PAYLOAD, MAX_PAYLOAD = 6, 250

#: Start value of the CRC.
CRC_START = 0xFFFF


class FramingError(BridgeIOError, ValueError):
    """A frame cannot be encoded, or bytes handed to the strict decoder are not COBS."""


def crc16(data: bytes) -> int:
    """CRC-16/CCITT-FALSE of data: polynomial 0x1021, start 0xFFFF, not reflected, no final exclusive-or.

    crc_hqx is the same polynomial with a start value of one's choice.
    """
    return binascii.crc_hqx(data, CRC_START)


def cobs_encode(data: bytes) -> bytes:
    """Data without its zero bytes, delimiter not included.

    Cheshire and Baker, Consistent Overhead Byte Stuffing, IEEE/ACM Transactions on Networking 7(2), 1999. A
    run of exactly 254 bytes at the very end gets no further code byte.
    """
    out = bytearray()
    *inner, last = data.split(b"\0")
    for run in inner:
        out += _full_runs(run) + _coded(run[len(run) // 254 * 254 :])
    out += _full_runs(last)
    rest = last[len(last) // 254 * 254 :]
    # A full run stands for no zero, so at the very end nothing has to follow it.
    return bytes(out + _coded(rest)) if rest or not last else bytes(out)


def cobs_decode(block: bytes) -> bytes:
    """The data of one COBS block (delimiter not included), strictly.

    Raises FramingError for an empty block, a zero inside, and a code that points past the end.
    """
    if not block or 0 in block:
        raise FramingError(f"a COBS block is one or more bytes other than zero, got {block[:20].hex(' ')!r}")
    out, at = bytearray(), 0
    while at < len(block):
        code = block[at]
        if at + code > len(block):
            raise FramingError(f"COBS code {code} at byte {at} points past the end of {len(block)} bytes")
        out += block[at + 1 : at + code]
        at += code
        if code < 255 and at < len(block):
            out.append(0)
    return bytes(out)


def wrap(payload: bytes) -> bytes:
    """A payload as a binary frame: CRC low byte first, COBS, delimiter."""
    _check_length(payload)
    return cobs_encode(payload + struct.pack("<H", crc16(payload))) + b"\0"


def pack(frame: Item) -> bytes:
    """A frame as it goes over the wire in binary; `Tallies` of n give n frames one after the other.

    Raises FramingError where a value does not fit its field.
    """
    return b"".join(wrap(payload) for payload in payloads(frame))


def pack_text(frame: Item) -> bytes:
    """A frame as text twin, one line each, ending in LF. Raises FramingError as `pack` does."""
    lines = []
    for payload in payloads(frame, text=True):
        _check_length(payload)
        digits = payload.hex().upper().encode("ascii")
        lines.append(b"$%s%04X\n" % (digits, crc16(digits)))
    return b"".join(lines)


def pack_plain(tallies: Tallies) -> bytes:
    """Tallies as plain lines of two decimals, forward and reflected. Sequence, time and flags are lost."""
    pairs = zip(tallies.forward.tolist(), tallies.reflected.tolist(), strict=True)
    return "".join(f"{_decimal(f)} {_decimal(r)}\n" for f, r in pairs).encode("ascii")


def payloads(frame: Item, text: bool = False) -> Iterator[bytes]:
    """Payloads of a frame, numbers little-endian, or big-endian for the text twin."""
    kind = kind_of(frame)
    if isinstance(frame, Unknown):
        yield frame.payload
    elif kind is not None:
        for values in kind.values(frame):
            yield _payload(kind, values, text)


def _full_runs(run: bytes) -> bytes:
    """The part of a run without zeros that fills whole groups of 254, each under the code 255."""
    return b"".join(_coded(run[at : at + 254]) for at in range(0, len(run) - 253, 254))


def _coded(group: bytes) -> bytes:
    return bytes([len(group) + 1]) + group


def _payload(kind: Kind, values: tuple[Any, ...], text: bool) -> bytes:
    layout = kind.big if text else kind.little
    numbers, tail = [*values], b""
    for at, (name, value) in enumerate(zip([n for n, _ in kind.fields], values, strict=True)):
        numbers[at] = _number(kind, name, value)
    if kind.text_limit:
        tail = _text(str(values[-1]), kind.text_limit)
        numbers[-1] = len(tail)
    try:
        return layout.pack(*numbers) + tail
    except struct.error as error:
        raise FramingError(f"{kind.name}: a value does not fit its field: {error}; got {values}") from error


def _number(kind: Kind, name: str, value: Any) -> Any:
    """A field's value as struct wants it; counts must be whole numbers."""
    if isinstance(value, float):
        if not value.is_integer():
            raise FramingError(f"{kind.name}: {name} must be a whole number on the wire, got {value}")
        return int(value)
    return _text(value, 12) if name == "name" else value


def _text(text: str, limit: int) -> bytes:
    raw = text.encode("utf-8")
    if len(raw) > limit or b"\0" in raw:
        raise FramingError(f"a text of at most {limit} bytes of UTF-8 without NUL is wanted, got {text!r}")
    return raw


def _decimal(value: float) -> str:
    return f"{value:.10f}".rstrip("0").rstrip(".")


def _check_length(payload: bytes) -> None:
    if not MIN_PAYLOAD <= len(payload) <= MAX_PAYLOAD:
        raise FramingError(f"a payload has {MIN_PAYLOAD} to {MAX_PAYLOAD} bytes, got {len(payload)}")
