"""Frames written by hand in tests/data/wire/golden.txt, against encoder and receiver, with a CRC of our own."""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from bridgeio.frames import KIND_BY_NUMBER, KINDS, Item, Tallies
from bridgeio.framing import pack, pack_text
from bridgeio.receiver import Receiver

GOLDEN = Path(__file__).parents[1] / "data" / "wire" / "golden.txt"


@dataclass
class Entry:
    title: str
    number: int
    values: dict[str, Any]
    payload: bytes
    crc: int
    pieces: list[bytes]
    text: bytes

    @property
    def wire(self) -> bytes:
        return b"".join(self.pieces)

    @property
    def frame(self) -> Item:
        kind = KIND_BY_NUMBER[self.number]
        wide = {"wide": True} if kind.wide else {}
        build = Tallies.of if kind.counted else kind.frame
        return build(**self.values, **wide)


def read_entries() -> list[Entry]:
    """The entries of the file, in its order."""
    lines = [line for line in GOLDEN.read_text("utf-8").splitlines() if line and not line.startswith("#")]
    entries = []
    for block in re.split(r"^(?=\[)", "\n".join(lines), flags=re.MULTILINE)[1:]:
        title, *rows = block.splitlines()
        row = dict(line.split(None, 1) for line in rows)
        values = dict(pair.split("=") for pair in row["values"].split())
        entries.append(
            Entry(
                title.strip("[]"),
                int(row["kind"], 16),
                {k: v.replace("_", " ") if k in ("name", "text") else int(v) for k, v in values.items()},
                bytes.fromhex(row["payload"]),
                int(row["crc"], 16),
                [bytes.fromhex(piece) for piece in row["wire"].split("|")],
                row["text"].replace(" ", "").encode(),
            )
        )
    return entries


ENTRIES = read_entries()
each_entry = pytest.mark.parametrize("entry", ENTRIES, ids=lambda entry: entry.title)


def crc_bit_by_bit(data: bytes) -> int:
    """CRC-16/CCITT-FALSE as a shift register: the definition, with no table and no library."""
    register = 0xFFFF
    for byte in data:
        for bit in range(7, -1, -1):
            differs = (register >> 15) ^ (byte >> bit & 1)
            register = (register << 1 & 0xFFFF) ^ (0x1021 if differs else 0)
    return register


def same(one: Item, other: Item) -> bool:
    """Equality of two items, column by column for tallies."""
    if not isinstance(one, Tallies) or not isinstance(other, Tallies):
        return one == other
    columns = ("seq", "ms", "forward", "reflected", "flags")
    marks = ("checked", "has_ms", "wide")
    return all(np.array_equal(getattr(one, c), getattr(other, c)) for c in columns) and all(
        getattr(one, m) == getattr(other, m) for m in marks
    )


def test_golden_covers_every_kind() -> None:
    """Every kind of the table has at least one frame written by hand."""
    assert {entry.number for entry in ENTRIES} == {kind.number for kind in KINDS}


def test_crc_bit_by_bit_gives_check_value() -> None:
    """The tests' own CRC gives the check value 0x29B1 published for CRC-16/CCITT-FALSE over 123456789.

    Catalogue of parametrised CRC algorithms, entry CRC-16/IBM-3740 alias CCITT-FALSE (value and alias from memory).
    """
    assert crc_bit_by_bit(b"123456789") == 0x29B1


@each_entry
def test_golden_checks_by_shift_register(entry: Entry) -> None:
    """The checks written in the file are those of a bit by bit shift register, binary and text."""
    assert crc_bit_by_bit(entry.payload) == entry.crc
    assert crc_bit_by_bit(entry.text[1:-4]) == int(entry.text[-4:], 16)


@each_entry
def test_golden_wire_unstuffs_piece_by_piece(entry: Entry) -> None:
    """Each piece in the file counts its own bytes, and the pieces give payload and check, low byte first."""
    *pieces, delimiter = entry.pieces
    assert delimiter == b"\0"
    assert all(piece[0] == len(piece) and 0 not in piece for piece in pieces)
    assert b"\0".join(piece[1:] for piece in pieces) == entry.payload + entry.crc.to_bytes(2, "little")


@each_entry
def test_golden_frame_is_what_the_encoder_sends(entry: Entry) -> None:
    """The reference encoder gives the bytes of the file, as frame and as twin."""
    assert pack(entry.frame) == entry.wire
    assert pack_text(entry.frame) == entry.text + b"\n"


@each_entry
def test_golden_bytes_are_what_the_receiver_reads(entry: Entry) -> None:
    """The receiver gives the values of the file, from the frame and from the twin."""
    for data in (entry.wire, entry.text + b"\n", entry.text + b"\r\n"):
        (item,) = Receiver().feed(data)
        assert same(item, entry.frame)


@each_entry
def test_golden_twin_in_lower_case_with_its_own_check(entry: Entry) -> None:
    """A twin in lower case is read when its check is over the characters as sent."""
    digits = entry.text[1:-4].lower()
    (item,) = Receiver().feed(b"$%s%04x\n" % (digits, crc_bit_by_bit(digits)))
    assert same(item, entry.frame)


def test_golden_tally_is_the_worked_example_of_the_page() -> None:
    """The page's worked example is the first frame of the file."""
    page = (Path(__file__).parents[2] / "bridgeio" / "WIRE.md").read_text("utf-8")
    example = page[page.index("## A worked example") :]
    assert ENTRIES[0].wire.hex(" ").upper() in example
    assert ENTRIES[0].payload.hex(" ").upper() in example
    assert ENTRIES[0].text.decode() in page
