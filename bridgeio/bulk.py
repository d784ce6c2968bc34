"""Many frames of counts at once, with numpy: the common case of a stream, well under a microsecond a frame.

One rule: it takes only what is beyond doubt. Whatever it leaves, damage above all, is judged by the
receiver's path for single frames, so both always agree.
"""

from __future__ import annotations

import binascii
from dataclasses import dataclass
from functools import cache

import numpy as np
import numpy.typing as npt

from bridgeio.frames import KINDS, Kind
from bridgeio.framing import CRC_START

__all__ = ["Stretch", "sort_out"]

Bytes = npt.NDArray[np.uint8]


@dataclass(frozen=True, slots=True)
class Stretch:
    """Bytes up to the last delimiter, cut into blocks; block i is `data[starts[i]:ends[i]]`.

    `good`: bool[blocks], those that are sound frames of `kind`; `payloads`: uint8[sum of good, kind.size].
    """

    kind: Kind
    starts: npt.NDArray[np.intp]
    ends: npt.NDArray[np.intp]
    good: npt.NDArray[np.bool_]
    payloads: Bytes


def sort_out(data: bytes) -> Stretch | None:
    """Cuts data at its delimiters and decodes the blocks of the kind of counts that fills most of it.

    None where there is no delimiter.
    """
    stream = np.frombuffer(data, np.uint8)
    ends = np.flatnonzero(stream == 0)
    if not ends.size:
        return None
    starts = np.empty_like(ends)
    starts[0], starts[1:] = 0, ends[:-1] + 1
    lengths = ends - starts
    kind = max(COUNTED, key=lambda kind: np.count_nonzero(lengths == kind.size + 3))
    found = np.flatnonzero(lengths == kind.size + 3)
    sound, payloads = _decode(stream, starts[found], kind)
    good = np.zeros(len(ends), np.bool_)
    good[found[sound]] = True
    return Stretch(kind, starts, ends, good, payloads)


def _decode(stream: Bytes, starts: npt.NDArray[np.intp], kind: Kind) -> tuple[npt.NDArray[np.bool_], Bytes]:
    """Which blocks from starts are sound, bool[n], and the payloads of those.

    All blocks have the length of `kind`, and no zero inside. Row j of `bytes_at` is byte j of every block.
    """
    length = kind.size + 3
    bytes_at = stream[starts + np.arange(length)[:, np.newaxis]]
    # COBS, all blocks abreast: `code_at` is where each has its next code, made the zero it stands for.
    code_at = bytes_at[0].astype(np.uint16)
    for j in range(1, length):
        code = bytes_at[j] * (code_at == j)
        code_at += code
        bytes_at[j] -= code
    body = bytes_at[1:]
    offsets, table = _crc_table(kind.size)
    check = np.bitwise_xor.reduce(table[body + offsets], axis=0)
    sound = (code_at == length) & (check == 0) & (body[0] == kind.number)
    return sound, np.ascontiguousarray(body[: kind.size, sound].T)


@cache
def _crc_table(size: int) -> tuple[npt.NDArray[np.intp], npt.NDArray[np.uint16]]:
    """Offsets intp[size + 2, 1] and a table uint16 to look up byte + offset of its position.

    A CRC is linear over exclusive-or, so each byte of a payload of this size adds its own part whatever the
    others are; the start value's part is in the first position. With the two bytes of the received CRC the
    sum is 0.
    """
    parts: list[list[int]] = []
    for position in range(size):
        zeros = bytes(size - 1 - position)
        parts.append([binascii.crc_hqx(bytes([byte]) + zeros, 0) for byte in range(256)])
    start = binascii.crc_hqx(bytes(size), CRC_START)
    parts[0] = [part ^ start for part in parts[0]]
    parts += [list(range(256)), [byte << 8 for byte in range(256)]]
    offsets = 256 * np.arange(size + 2)[:, np.newaxis]
    return offsets, np.array(parts, np.uint16).ravel()


#: Kinds that come by the thousand.
COUNTED: tuple[Kind, ...] = tuple(kind for kind in KINDS if kind.counted)
