"""The reference encoder: CRC, COBS, and what it refuses."""

from __future__ import annotations

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bridgeio.frames import Conditions, Crest, Nameplate, Remark, Tallies, Unknown
from bridgeio.framing import (
    FramingError,
    cobs_decode,
    cobs_encode,
    crc16,
    pack,
    pack_plain,
    pack_text,
    wrap,
)

RUN = bytes(range(1, 255))

# The first is the example in Cheshire and Baker 1999 (from memory); the others were worked out by hand.
COBS_PAIRS = [
    ("45 00 00 2C 4C 79 00 00 40 06 4F 37", "02 45 01 04 2C 4C 79 01 05 40 06 4F 37"),
    ("", "01"),
    ("00", "01 01"),
    ("00 00", "01 01 01"),
    ("11 22 00 33", "03 11 22 02 33"),
    ("11 22 33 44", "05 11 22 33 44"),
    ("11 00 00 00", "02 11 01 01 01"),
    (RUN[:-1].hex(), "FE" + RUN[:-1].hex()),
    (RUN.hex(), "FF" + RUN.hex()),
    (RUN.hex() + "00", "FF" + RUN.hex() + "01 01"),
    ("00" + RUN.hex(), "01 FF" + RUN.hex()),
    (RUN.hex() + "FF", "FF" + RUN.hex() + "02 FF"),
    (RUN.hex() + "FF 00", "FF" + RUN.hex() + "02 FF 01"),
    (RUN.hex() * 2, "FF" + RUN.hex() + "FF" + RUN.hex()),
]


def test_crc16_of_the_nine_digits_is_the_published_check_value() -> None:
    """CRC-16/CCITT-FALSE over 123456789 is 0x29B1 (catalogue of parametrised CRC algorithms, from memory)."""
    assert crc16(b"123456789") == 0x29B1


def test_crc16_of_nothing_is_the_start_value() -> None:
    """Start value 0xFFFF and no final exclusive-or."""
    assert crc16(b"") == 0xFFFF


@pytest.mark.parametrize(("plain", "stuffed"), COBS_PAIRS)
def test_cobs_of_an_example_worked_by_hand(plain: str, stuffed: str) -> None:
    """Encoder and decoder agree with the examples in both directions."""
    assert cobs_encode(bytes.fromhex(plain)) == bytes.fromhex(stuffed)
    assert cobs_decode(bytes.fromhex(stuffed)) == bytes.fromhex(plain)


@settings(deadline=None)
@given(st.lists(st.one_of(st.binary(max_size=20), st.integers(250, 260).map(lambda n: b"x" * n)), max_size=6))
def test_cobs_returns_any_data_without_zeros(runs: list[bytes]) -> None:
    """Any data comes back, its block holds no zero, and is longer by one byte for each 254 and one."""
    data = b"\0".join(runs)
    block = cobs_encode(data)
    assert 0 not in block
    assert len(block) <= len(data) + 1 + len(data) // 254
    assert cobs_decode(block) == data


@pytest.mark.parametrize("block", ["", "03 11", "02 11 05 22", "01 00 01", "FF 01"])
def test_cobs_decode_refuses_a_block_that_is_none(block: str) -> None:
    """Empty, a code past the end, a zero inside: the strict decoder says so."""
    with pytest.raises(FramingError, match="COBS"):
        cobs_decode(bytes.fromhex(block))


@pytest.mark.parametrize("length", [5, 251])
def test_wrap_refuses_a_payload_of_a_wrong_length(length: int) -> None:
    """A payload has 6 to 250 bytes."""
    with pytest.raises(FramingError, match=f"6 to 250 bytes, got {length}"):
        wrap(b"\x11" * length)


@pytest.mark.parametrize(
    ("frame", "words"),
    [
        (Tallies.of(0, 0, 65536, 0), "tally: a value does not fit"),
        (Tallies.of(0, 0, 1.5, 0), "forward must be a whole number on the wire, got 1.5"),
        (Tallies.of(0, 0, -1, 0), "does not fit"),
        (Crest(0, 0, 0, 0, 1 << 16, 0, 0, 0), "crest: a value"),
        (Conditions(0, 0, -32769, 0, 0), "conditions: a value"),
        (Remark(256, 0, 0, 0, ""), "remark: a value"),
        (Remark(0, 0, 0, 0, "x" * 25), "at most 24 bytes"),
        (Nameplate(0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, "gr\u00fc\u00dfe \u00e4\u00f6\u00fc!"), "at most 12 bytes"),
        (Nameplate(0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, "a\0b"), "without NUL"),
        (Unknown(0x19, b"\x19"), "6 to 250"),
    ],
)
def test_pack_refuses_what_does_not_fit(frame: Tallies, words: str) -> None:
    """A value outside its field is the caller's mistake, in both forms, with words."""
    for encode in (pack, pack_text):
        with pytest.raises(FramingError, match=words):
            encode(frame)


def test_pack_gives_one_frame_after_the_other_for_many_tallies() -> None:
    """Tallies of n are n frames on the wire."""
    both = pack(Tallies.of([1, 2], [10, 20], [100, 200], 5))
    assert both == pack(Tallies.of(1, 10, 100, 5)) + pack(Tallies.of(2, 20, 200, 5))
    assert both.count(b"\0") == 2


def test_pack_plain_writes_decimals_without_needless_digits() -> None:
    """Plain lines carry whole numbers as such and fractions as they are."""
    assert pack_plain(Tallies.of(0, 0, [2714, 2714.25], [0, 11.9])) == b"2714 0\n2714.25 11.9\n"
