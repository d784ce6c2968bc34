"""The table of kinds, and the page that tells it to people."""

from __future__ import annotations

import re
import struct
from pathlib import Path

import numpy as np
import pytest

from bridgeio.codes import COUNTS_FLAGS, FEATURES, REMARK_CODES
from bridgeio.frames import KIND_BY_NUMBER, KINDS, MAJOR, RESERVED_KIND, Kind, Tallies, Unknown, kind_of

PAGE = (Path(__file__).parents[2] / "bridgeio" / "WIRE.md").read_text("utf-8")
TYPES = {"B": "u8", "H": "u16", "I": "u32", "h": "i16", "12s": "12 bytes"}

each_kind = pytest.mark.parametrize("kind", KINDS, ids=lambda kind: kind.name)


def section(heading: str) -> str:
    """The text of the page under a heading, up to the next one."""
    start = PAGE.index(f"\n{heading}\n") + len(heading) + 2
    return re.split(r"\n#+ ", PAGE[start:])[0]


def rows(heading: str) -> list[list[str]]:
    """The cells of the table under a heading, without its two head lines."""
    lines = [line for line in section(heading).splitlines() if line.startswith("|")]
    return [[cell.strip() for cell in line.strip("|").split("|")] for line in lines[2:]]


@each_kind
def test_page_gives_offset_and_type_of_every_field(kind: Kind) -> None:
    """WIRE.md has a section for the kind whose offsets, names and types are those of the table."""
    told = {cells[1]: (int(cells[0]), cells[2]) for cells in rows(f"### 0x{kind.number:02X} {kind.name}")}
    codes = [code for _, code in kind.fields]
    for at, (name, code) in enumerate(kind.fields[3:], start=3):
        assert told.pop(name) == (struct.calcsize("<" + "".join(codes[:at])), TYPES[code])
    assert set(told) == ({"text"} if kind.text_limit else set())


@each_kind
def test_page_gives_length_on_the_wire(kind: Kind) -> None:
    """WIRE.md states the wire bytes that the table implies."""
    text = section(f"### 0x{kind.number:02X} {kind.name}")
    assert f"{kind.wire_bytes()} wire bytes" in text
    if kind.text_limit:
        assert f"{kind.wire_bytes(kind.text_limit)} at most" in text


def test_page_and_table_know_the_same_kinds() -> None:
    """No kind is in the page only or in the table only."""
    told = {int(number, 16) for number in re.findall(r"^### (0x\w\w)", PAGE, re.MULTILINE)}
    assert told == {kind.number for kind in KINDS} | {RESERVED_KIND}


def test_page_lists_every_flag_feature_and_remark_code() -> None:
    """Every bit and code has its row or words in the page, and none is told that the program does not know."""
    flags = {int(cells[0], 16): cells[1] for cells in rows("## Flags")}
    assert set(flags) == set(COUNTS_FLAGS)
    assert all(flags[bit].startswith(words) for bit, words in COUNTS_FLAGS.items())
    codes = {int(cells[0], 16): cells[1] for cells in rows("## Remark codes")}
    assert codes == REMARK_CODES
    features = section("### 0x12 nameplate")
    assert all(f"{bit} " in features and words.split()[-1] in features for bit, words in FEATURES.items())


def test_numbers_of_kinds_are_of_this_version_and_used_once() -> None:
    """Each number has the major version in its high nibble, none is the reserved one, none is given twice."""
    numbers = [kind.number for kind in KINDS]
    assert len(set(numbers)) == len(numbers) == len(KIND_BY_NUMBER)
    assert all(number >> 4 == MAJOR and number != RESERVED_KIND for number in numbers)


@each_kind
def test_record_has_the_length_of_the_fixed_part(kind: Kind) -> None:
    """The structured type for arrays is packed exactly as the binary payload."""
    assert kind.record.itemsize == kind.size == kind.big.size


@each_kind
def test_kind_of_a_frame_read_by_a_kind_is_that_kind(kind: Kind) -> None:
    """What a row of the table reads belongs to that row again."""
    payload = bytes([kind.number]) + bytes(kind.size - 1)
    frame = (
        Tallies.from_records(np.frombuffer(payload, kind.record), wide=kind.wide)
        if kind.counted
        else kind.read(payload)
    )
    assert frame is not None
    assert kind_of(frame) is kind


def test_kind_of_an_unknown_frame_is_none() -> None:
    """An unknown kind has no row."""
    assert kind_of(Unknown(0x19, bytes(6))) is None


def test_unknown_reads_its_head_in_the_byte_order_it_came_in() -> None:
    """The head of an unknown frame is little-endian from binary and big-endian from text."""
    assert (Unknown(0x19, b"\x19\x07\x01\x02\x00\x00").seq, Unknown(0x19, b"\x19\x07\x01\x02\x00\x00").ms) == (7, 513)
    assert Unknown(0x19, b"\x19\x07\x00\x00\x02\x01", text=True).ms == 513


def test_tallies_of_numbers_have_one_length_and_wire_types() -> None:
    """Single numbers stretch to the longest column; seq and ms wrap as on the wire."""
    tallies = Tallies.of([255, 256], [2**32 - 1, 2**32], 10, [1.5, 2], flags=4)
    assert len(tallies) == 2
    assert tallies.seq.tolist() == [255, 0]
    assert tallies.ms.tolist() == [2**32 - 1, 0]
    assert tallies.forward.tolist() == [10.0, 10.0]
    assert [c.dtype for c in (tallies.seq, tallies.ms, tallies.flags)] == [np.uint8, np.uint32, np.uint8]
