"""A second of frames as bytes: every kind comes back as it was, and no bytes do harm."""

import contextlib

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bridgeio.frames import KINDS, Conditions, Crest, Nameplate, Remark, Tallies, Unknown
from bridgeio.journal.columns import LONGEST_CONTENT, PackError, deflate, inflate
from bridgeio.journal.pack import Timed, contents_of, unpack

U8, U16, U32 = st.integers(0, 0xFF), st.integers(0, 0xFFFF), st.integers(0, 0xFFFF_FFFF)
UTC = st.integers(0, 2**52)
COUNTS = {False: U16, True: U32}
FRACTIONS = st.floats(allow_nan=True, allow_infinity=True)
RARE = {
    Nameplate: st.builds(Nameplate, U8, U32, U8, U8, U32, U16, U16, U32, U16, U8, U16, U16, st.text(max_size=30)),
    Remark: st.builds(Remark, U8, U32, U8, U32, st.text(max_size=60)),
    Conditions: st.builds(Conditions, U8, U32, st.integers(-32768, 32767), U16, U32),
    Unknown: st.builds(Unknown, U8, st.binary(min_size=6, max_size=250), st.booleans()),
}


@st.composite
def crests(draw):
    """Crests of both widths."""
    wide = draw(st.booleans())
    count = COUNTS[wide]
    return Crest(
        draw(U8), draw(U32), *(draw(count) for _ in range(4)), conversions=draw(U16), flags=draw(U8), wide=wide
    )


@st.composite
def tallies(draw):
    """Tallies of any mould with their times; device times rise, perhaps across a wrap."""
    n = draw(st.integers(1, 40))
    wide, checked, has_ms = draw(st.booleans()), draw(st.booleans()), draw(st.booleans())
    count = FRACTIONS if draw(st.booleans()) else COUNTS[wide]
    column = lambda kind: draw(st.lists(kind, min_size=n, max_size=n))  # noqa: E731
    since_ms = np.cumsum(column(st.integers(0, 60_000)))
    ms = (draw(U32) + since_ms) % 2**32 if has_ms else np.zeros(n)
    utc_us = draw(UTC) + (since_ms - since_ms[0]) * 1000 if has_ms else np.array(column(UTC))
    marks = {"checked": checked, "has_ms": has_ms, "wide": wide}
    made = Tallies.of(column(U8), ms.astype(np.int64), column(count), column(count), column(U8), **marks)
    return Timed(made, utc_us.astype(np.int64))


RARE_TIMED = st.tuples(st.one_of(*RARE.values(), crests()), UTC).map(lambda t: Timed(t[0], np.array([t[1]])))
SECONDS = st.lists(st.one_of(tallies(), RARE_TIMED), max_size=12)


def one_by_one(timed):
    """Frames as tuples of plain values: what they are, bit by bit, and when [us]."""
    for one in timed:
        item = one.item
        if not isinstance(item, Tallies):
            yield item, int(one.utc_us[0])
            continue
        mould = (item.checked, item.has_ms, item.wide)
        columns = (item.seq, item.ms, item.forward.view(np.uint64), item.reflected.view(np.uint64), item.flags)
        yield from zip([mould] * len(item), *(c.tolist() for c in (*columns, one.utc_us)), strict=True)


def assert_same(found, wanted):
    """Same frames in the same order; UTC within the 5 ms in which runs join."""
    found, wanted = list(one_by_one(found)), list(one_by_one(wanted))
    assert [frame[:-1] for frame in found] == [frame[:-1] for frame in wanted]
    assert all(abs(a[-1] - b[-1]) <= 5_000 for a, b in zip(found, wanted, strict=True))


@settings(max_examples=80, deadline=None)
@given(SECONDS)
def test_content_comes_back_as_it_was(timed):
    """Every kind, width and mould survives packing, frame by frame, in order."""
    content = contents_of(timed)
    assert_same(unpack([content]), timed)
    assert inflate(deflate(content), len(content)) == content


@settings(max_examples=40, deadline=None)
@given(st.lists(SECONDS, min_size=1, max_size=5))
def test_blocks_unpacked_together_give_the_same_as_one_by_one(seconds):
    """Unpacking many blocks at once changes nothing but the size of the arrays."""
    assert_same(unpack([contents_of(second) for second in seconds]), [one for second in seconds for one in second])


def test_every_kind_is_among_the_examples():
    """A kind added to the table of kinds must be tried here too."""
    assert {kind.frame for kind in KINDS} == {Tallies, Crest, *RARE} - {Unknown}


@settings(max_examples=100, deadline=None)
@given(SECONDS, st.data())
def test_damaged_content_gives_frames_or_a_pack_error(timed, data):
    """Bytes changed, dropped or added never raise anything but PackError."""
    content = bytearray(contents_of(timed))
    at = data.draw(st.integers(0, len(content)))
    content[at : at + data.draw(st.integers(0, 4))] = data.draw(st.binary(max_size=4))
    with contextlib.suppress(PackError):
        assert all(isinstance(one, Timed) for one in unpack([bytes(content)]))


@settings(max_examples=100, deadline=None)
@given(st.binary(max_size=200))
def test_random_bytes_are_refused_in_words(noise):
    """What is no content at all raises PackError and nothing else; two zeros are a block without frames."""
    if noise == b"\0\0":
        assert unpack([noise]) == []
    else:
        with contextlib.suppress(PackError):
            assert unpack([noise])


def test_a_bomb_is_not_unpacked():
    """A block that unpacks to more than it says is refused without unpacking it all; so is one that says too much."""
    bomb = deflate(bytes(LONGEST_CONTENT // 4))
    with pytest.raises(PackError, match="unpacks to 1001 bytes or more"):
        inflate(bomb, 1000)
    with pytest.raises(PackError, match="wanted at most"):
        inflate(bomb, LONGEST_CONTENT + 1)


def test_a_noisy_second_takes_less_than_four_bytes_a_tally():
    """Counts with a noise of 0.8 counts at 100 a second cost less than a third of what the wire takes."""
    rng, n = np.random.default_rng(5), 100
    noise = [np.rint(level + rng.normal(0.0, 0.8, n)) for level in (30_000, 3_000)]
    timed = Timed(Tallies.of(np.arange(n), np.arange(n) * 10, *noise), np.arange(n) * 10_000)
    assert len(deflate(contents_of([timed]))) < 2 * n
