"""Columns of whole numbers as planes of bytes, and the packing of them: what makes noise of a count cost half a byte.

One rule: nothing here knows what a column means; differences, signs and planes are undone exactly, modulo its width.
"""

from __future__ import annotations

import itertools
import zlib
from collections.abc import Sequence
from typing import Any, TypeAlias

import numpy as np
import numpy.typing as npt

from bridgeio.errors import FileError

__all__ = ["LONGEST_CONTENT", "Columns", "PackError", "coded", "deflate", "inflate", "split"]

#: More than this no block unpacks to [bytes].
LONGEST_CONTENT = 1 << 23

_WINDOW_BITS = -12

Columns: TypeAlias = list[npt.NDArray[Any]]


class PackError(FileError):
    """Bytes that hold no content, or a content that is too long."""


def deflate(content: bytes) -> bytes:
    """Content as a block carries it."""
    packer = zlib.compressobj(6, zlib.DEFLATED, _WINDOW_BITS, 5, zlib.Z_FILTERED)
    return packer.compress(content) + packer.flush()


def inflate(packed: bytes, length: int) -> bytes:
    """The content of a block, `length` bytes long. PackError where it is not, or longer than any block may be."""
    if not 0 < length <= LONGEST_CONTENT:
        raise PackError(f"a block of {length} bytes unpacked; wanted at most {LONGEST_CONTENT}")
    try:
        content = zlib.decompressobj(_WINDOW_BITS).decompress(packed, length + 1)
    except zlib.error as error:
        raise PackError(f"a block cannot be unpacked: {error}") from error
    if len(content) != length:
        raise PackError(f"a block unpacks to {len(content)} bytes or more; wanted {length}")
    return content


def coded(column: npt.NDArray[Any]) -> bytes:
    """Differences (the first from 0), sign in the lowest bit, all lowest bytes first, then the next."""
    width = column.itemsize
    signed = np.diff(column, prepend=column.dtype.type(0)).view(f"<i{width}")
    folded = (signed << 1) ^ (signed >> (8 * width - 1))
    return folded.view(np.uint8).reshape(-1, width).T.tobytes()


def split(planes: npt.NDArray[np.uint8], widths: Sequence[int], ends: npt.NDArray[np.intp]) -> Columns:
    """Columns of the given widths [bytes] out of planes uint8[sum of widths, n]."""
    if len(planes) != sum(widths):
        raise ValueError(f"{len(planes)} planes of bytes; wanted {sum(widths)}")
    at = [0, *itertools.accumulate(widths)]
    return [_uncoded(planes[a:b], ends) for a, b in itertools.pairwise(at)]


def _uncoded(planes: npt.NDArray[np.uint8], ends: npt.NDArray[np.intp]) -> npt.NDArray[Any]:
    """The column in planes uint8[width, n]; differences start anew after each of `ends`, of which n is the last."""
    folded = np.ascontiguousarray(planes.T).view(f"<u{len(planes)}")[:, 0]
    one = folded.dtype.type(1)
    column = np.cumsum((folded >> one) ^ (~(folded & one) + one), dtype=folded.dtype)
    if len(ends) > 1:
        column[ends[0] :] -= np.repeat(column[ends[:-1] - 1], np.diff(ends))
    return column
