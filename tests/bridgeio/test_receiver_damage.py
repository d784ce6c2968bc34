"""Damage on the line: never an exception, never a wrong number, always a fresh start at the next delimiter."""

from __future__ import annotations

import random
import tracemalloc
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bridgeio.account import Counters
from bridgeio.bulk import sort_out
from bridgeio.frames import KINDS, Conditions, Crest, Item, Nameplate, Remark, Tallies, Unknown
from bridgeio.framing import cobs_encode, crc16, pack, pack_plain, pack_text
from bridgeio.receiver import BULK_BYTES, LONGEST_STRETCH, PIECE_BYTES, Receiver

PERIOD_MS = 10


def flat(items: list[Item]) -> list[Any]:
    """Items as a list that can be compared: one tuple for every tally, however they were grouped."""
    out: list[Any] = []
    for item in items:
        if isinstance(item, Tallies):
            columns = (item.seq, item.ms, item.forward, item.reflected, item.flags)
            marks = (item.checked, item.has_ms, item.wide)
            out += [(*row, *marks) for row in zip(*(c.tolist() for c in columns), strict=True)]
        else:
            out.append(item)
    return out


def stream(dice: random.Random, count: int, wide: bool = False, rare: float = 0.05) -> list[Item]:
    """Frames as a bridge sends them: mostly tallies, seq and ms running, now and then another kind."""
    frames: list[Item] = [Nameplate(0, 1000, 0, 1, 7, PERIOD_MS, 16, 65520, 0, 0, 0, 1, "bridge")]
    top = 2**32 - 1 if wide else 2**16 - 1
    for at in range(1, count):
        head = (at % 256, 1000 + at * PERIOD_MS)
        if dice.random() < rare:
            choice: list[Item] = [
                Crest(*head, 1, 2, 3, dice.randrange(65536), 5, 0x80),
                Conditions(*head, -100, 5000, 14_100_000),
                Remark(*head, 0, at, "text"),
                Tallies.of(*head, 70_000, 5, wide=True),
                Unknown(0x19, bytes([0x19, head[0]]) + head[1].to_bytes(4, "little") + bytes(5)),
            ]
            frames.append(dice.choice(choice))
        else:
            counts = (dice.choice([0, 10, dice.randrange(top)]), dice.randrange(300))
            frames.append(Tallies.of(*head, *counts, dice.choice([0, 0, 4, 0x80]), wide=wide))
    return frames


def damage(dice: random.Random, wire: bytes) -> tuple[bytes, int]:
    """One flip of one to three bits, or one byte dropped, added or replaced; and where."""
    at = dice.randrange(len(wire))
    how = dice.choice(["flip", "drop", "add", "replace"])
    head, byte, tail = wire[:at], wire[at], wire[at + 1 :]
    if how == "flip":
        for bit in dice.sample(range(8), dice.randint(1, 3)):
            byte ^= 1 << bit
        return head + bytes([byte]) + tail, at
    if how == "drop":
        return head + tail, at
    other = dice.choice([0, 0x0A, dice.randrange(256)])
    return head + bytes([other] if how == "replace" else [other, byte]) + tail, at


def fed(receiver: Receiver, wire: bytes, sizes: list[int]) -> list[Any]:
    """What a receiver gives for wire, in feeds of these sizes over and over."""
    items: list[Item] = []
    at = turn = 0
    while at < len(wire):
        size = sizes[turn % len(sizes)]
        items += receiver.feed(wire[at : at + size])
        at, turn = at + size, turn + 1
    return flat(items)


def mixture(dice: random.Random) -> bytes:
    """Anything at all: frames, twins, plain lines, damage, noise, long stretches, delimiters."""

    def good() -> bytes:
        frames = stream(dice, dice.choice([2, 5, 80]), wide=dice.random() < 0.3)
        return b"".join(map(pack, frames))

    def some() -> bytes:
        return dice.choice(
            [
                good,
                lambda: damage(dice, damage(dice, good())[0])[0],
                lambda: pack_text(Tallies.of(1, dice.randrange(9999), 5, 6)),
                lambda: pack_plain(Tallies.of(0, 0, dice.randrange(999), [1, 2.5])),
                lambda: dice.randbytes(dice.choice([1, 20, 300, 600])),
                lambda: dice.choice([b"\0", b"\n", b"\r\n", b"\0\0", b"$"]) * dice.choice([1, 1, 2, 700]),
                lambda: b"x" * dice.choice([250, 511, 512, 513, 2000]),
            ]
        )()

    parts = [some() for _ in range(dice.randint(1, 12))]
    if dice.random() < 0.5:  # without a good frame early on, so that lines stay in play
        parts = [part for part in parts if len(part) < 60] + parts[-1:]
    return b"".join(parts)


@settings(max_examples=120, deadline=None)
@given(
    seed=st.integers(0, 2**32),
    sizes=st.lists(st.sampled_from([1, 2, 14, 15, 100, 511, 512, 513, 4096]), min_size=1, max_size=4),
    wire=st.sampled_from(["auto", "auto", "text"]),
)
def test_any_split_of_any_stream_gives_the_same(seed: int, sizes: list[int], wire: str) -> None:
    """Items and counters do not depend on how the bytes are split, so one by one and in bulk agree."""
    data = mixture(random.Random(seed))
    whole, split = Receiver(wire), Receiver(wire)
    assert fed(split, data, sizes) == flat(whole.feed(data))
    assert split.counters == whole.counters


@pytest.mark.parametrize("wide", [False, True])
@settings(max_examples=40, deadline=None)
@given(seed=st.integers(0, 2**32))
def test_bulk_and_single_path_agree_on_damaged_mixes(wide: bool, seed: int) -> None:
    """A long stream with a few damages reads the same at once as frame by frame, and bulk did take part."""
    dice = random.Random(seed)
    data = b"".join(map(pack, stream(dice, 200, wide)))
    for _ in range(dice.randint(0, 6)):
        data, _ = damage(dice, data)
    stretch = sort_out(data)
    assert stretch is not None
    assert len(stretch.payloads) > 100
    bulk, single = Receiver(), Receiver()
    assert flat(bulk.feed(data)) == fed(single, data, [BULK_BYTES - 300])
    assert bulk.counters == single.counters


@settings(max_examples=150, deadline=None)
@given(seed=st.integers(0, 2**32), rare=st.sampled_from([0.0, 0.3]), size=st.sampled_from([1, 40, 10_000]))
def test_one_damage_gives_no_wrong_frame_and_a_good_one_within_two(seed: int, rare: float, size: int) -> None:
    """After a flip, a drop or an insertion only true frames come, again from the second one on, and it shows.

    Three bits or one byte: none in 300,000 passed the checks beforehand, so the test does not depend on luck.
    """
    dice = random.Random(seed)
    frames = stream(dice, 60, rare=rare)
    wires = [pack(frame) for frame in frames]
    start = len(b"".join(wires[:10]))
    inner, at = damage(dice, b"".join(wires[10:50]))
    data = b"".join(wires[:10]) + inner + b"".join(wires[50:])
    receiver = Receiver(from_start=True)
    got = fed(receiver, data, [size])

    ends = np.cumsum([len(wire) for wire in wires])
    hit = int(np.searchsorted(ends, start + at, side="right"))
    true = flat(frames)
    assert got[:hit] == true[:hit]
    assert all(item in true for item in got)
    assert got[-(len(true) - hit - 2) :] == true[hit + 2 :]
    counters = receiver.counters
    assert len(got) + counters.lost == len(true)
    assert len(got) == len(true) or counters.damaged >= 1


@settings(max_examples=40, deadline=None)
@given(seed=st.integers(0, 2**32), size=st.sampled_from([15, 4096]))
def test_accepted_and_lost_are_what_was_sent(seed: int, size: int) -> None:
    """Where whole frames vanish, up to 255 in a row, frames accepted and counted lost are the frames sent."""
    dice = random.Random(seed)
    frames = stream(dice, 900, rare=0.02)
    kept = [True] * len(frames)
    for slot in range(0, len(frames), 300):
        start, gap = slot + dice.randint(1, 40), dice.choice([0, 1, 2, 17, 255])
        kept[start : start + gap] = [False] * gap
    receiver = Receiver()
    got = fed(receiver, b"".join(pack(f) for f, k in zip(frames, kept, strict=True) if k), [size])
    assert len(got) == sum(kept)
    assert len(got) + receiver.counters.lost == len(frames)


@pytest.mark.parametrize("wire", ["auto", "text"])
@pytest.mark.parametrize("size", [100, PIECE_BYTES])
def test_random_bytes_give_no_reading(wire: str, size: int) -> None:
    """Five million random bytes, four times over, raise nothing and give not one reading; the damage is counted."""
    noise = np.random.default_rng(20).integers(0, 256, 5_000_000, np.uint8).tobytes()
    receiver = Receiver(wire)
    assert fed(receiver, noise, [size]) == []
    assert receiver.counters.bytes == len(noise)
    assert receiver.counters.damaged > 1000


@pytest.mark.parametrize("seen", [b"", pack(Tallies.of(1, 1, 1, 1))])
@pytest.mark.parametrize("unit", [b"\xff", b"\n", b"\0", b"1 ", b"$\n", b"x" * 600 + b"\n"])
def test_memory_is_bounded_whatever_comes(unit: bytes, seen: bytes) -> None:
    """Half a million bytes without sense leave next to nothing behind, fed in pieces or at once."""
    flood = (unit * (500_000 // len(unit) + 1))[:500_000]
    receiver = Receiver()
    receiver.feed(seen)
    tracemalloc.start()
    for piece in (flood[at : at + 1000] for at in range(0, 20_000, 1000)):
        receiver.feed(piece)
    receiver.feed(flood)
    kept, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert kept < 50_000
    assert peak < 8_000_000


@pytest.mark.parametrize("seen", [False, True])
@pytest.mark.parametrize(("length", "damaged"), [(512, 0), (513, 1), (100_000, 1)])
def test_long_stretch_is_one_damage_before_its_delimiter_comes(length: int, damaged: int, seen: bool) -> None:
    """More than 512 bytes without a delimiter count once, at once, and the frame after the delimiter is good."""
    receiver = Receiver(from_start=True)
    tally = pack(Tallies.of(1, 1000, 5, 6))
    receiver.feed(tally if seen else b"")
    receiver.feed(b"\x55" * length)
    assert receiver.counters.malformed == damaged
    assert len(receiver.feed(b"\0" + tally)) == 1
    assert receiver.counters.malformed == 1
    assert receiver.counters.resyncs == 1


def test_damaged_frame_with_line_ends_is_one_damage_and_no_bad_line() -> None:
    """What ends in 00 is a frame and nothing else, also where it is damaged and lines go on after it."""
    receiver = Receiver(from_start=True)
    wire = bytearray(pack(Tallies.of(10, 0x0A0A0A0A, 0x0A0A, 0x0A0A, 0x0A)))
    wire[1] ^= 0x02
    receiver.feed(bytes(wire) + b"1 2\n")
    assert (receiver.counters.bad_crc, receiver.counters.bad_lines, receiver.counters.lines) == (1, 0, 1)


def test_frame_beyond_the_longest_is_damage_though_its_check_is_right() -> None:
    """A payload of 251 bytes is malformed, one of 250 is not."""
    for length, malformed in ((250, 0), (251, 1)):
        payload = b"\x19" * length
        receiver = Receiver(from_start=True)
        receiver.feed(cobs_encode(payload + crc16(payload).to_bytes(2, "little")) + b"\0")
        assert (receiver.counters.malformed, receiver.counters.unknown) == (malformed, 1 - malformed)


def test_noise_of_lines_counts_as_bad_lines() -> None:
    """Text of no known form is counted line by line once it cannot be a frame any more."""
    receiver = Receiver(from_start=True)
    receiver.feed(b"hello there, no numbers\n" * 100)
    assert receiver.counters.bad_lines >= 100 - LONGEST_STRETCH // 24 - 1
    assert receiver.counters.malformed == 0
    receiver.feed(b"1 2\n")
    assert receiver.counters.bad_lines == 100


def test_twin_with_a_wrong_check_is_a_bad_crc() -> None:
    """A twin that fails its check is told from a line of no form."""
    receiver = Receiver("text", from_start=True)
    assert receiver.feed(pack_text(Tallies.of(1, 2, 3, 4)).replace(b"3", b"7")) == []
    assert (receiver.counters.bad_crc, receiver.counters.bad_lines) == (1, 0)


@pytest.mark.parametrize(
    ("block", "name"),
    [
        ("03 11", "malformed"),
        ("05 11 07 E8 03 01 04 9A 0A 0C 01 04 72 9E", "malformed"),
        ("05 11 07 E8 03 01 04 9A 0A 0C 01 02 72 9E", "malformed"),
        ("05 11 07 E8 03 01 04 9A 0A 0C 01 03 72 9F", "bad_crc"),
        ("FF" + "11" * 253, "malformed"),
        ("08 11 11 11 11 11 11 11", "malformed"),
    ],
)
def test_damage_is_counted_by_what_was_wrong(block: str, name: str) -> None:
    """Too short, past the end, not filled, wrong check, too long: each under its name."""
    receiver = Receiver(from_start=True)
    assert receiver.feed(bytes.fromhex(block) + b"\0") == []
    counters = receiver.counters
    assert (getattr(counters, name), counters.damaged) == (1, 1)


def test_counters_of_a_clean_stream_show_no_fault() -> None:
    """A stream without damage counts its frames and nothing else."""
    frames = stream(random.Random(1), 500)
    receiver = Receiver()
    receiver.feed(b"\0" + b"".join(map(pack, frames)))
    counters = receiver.counters
    assert sum(counters.frames.values()) + counters.unknown == 500
    expected = Counters(
        bytes=counters.bytes,
        frames=counters.frames,
        unknown=counters.unknown,
        dropped_flag=counters.dropped_flag,
        lone_zeros=1,
    )
    assert counters == expected
    assert set(counters.frames) == {kind.number for kind in KINDS}
