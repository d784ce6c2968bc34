"""All forms of the wire, told apart, kind by kind; damage is in test_receiver_damage."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bridgeio.frames import KINDS, RESERVED_KIND, Item, Kind, Nameplate, Remark, Tallies, Unknown
from bridgeio.framing import crc16, pack, pack_plain, pack_text, payloads, wrap
from bridgeio.receiver import Receiver

RANGES = {"B": (0, 2**8 - 1), "H": (0, 2**16 - 1), "I": (0, 2**32 - 1), "h": (-(2**15), 2**15 - 1)}
TALLY = pack(Tallies.of(1, 1000, 2714, 12))

each_kind = pytest.mark.parametrize("kind", KINDS, ids=lambda kind: kind.name)


def texts(limit: int) -> st.SearchStrategy[str]:
    """Any text that fits a field of limit bytes."""
    letters = st.characters(exclude_characters="\0", exclude_categories=["Cs"])
    return st.text(letters, max_size=limit).filter(lambda text: len(text.encode()) <= limit)


def frames_of(kind: Kind) -> st.SearchStrategy[Item]:
    """Frames of one kind with any values its fields can hold."""

    def field(name: str, code: str) -> tuple[str, st.SearchStrategy[Any]]:
        if name == "length":
            return "text", texts(kind.text_limit)
        return name, texts(int(code[:-1])) if code.endswith("s") else st.integers(*RANGES[code])

    fields = dict(field(name, code) for name, code in kind.fields[1:])
    marks = {"wide": st.just(True)} if kind.wide else {}
    return st.builds(Tallies.of if kind.counted else kind.frame, **fields, **marks)


def flat(items: list[Item]) -> list[Any]:
    """Items as a list that can be compared: one tuple for every tally, however they were grouped."""
    out: list[Any] = []
    for item in items:
        if isinstance(item, Tallies):
            marks = (item.checked, item.has_ms, item.wide)
            columns = (item.seq, item.ms, item.forward, item.reflected, item.flags)
            out += [(*row, *marks) for row in zip(*(c.tolist() for c in columns), strict=True)]
        else:
            out.append(item)
    return out


def twin(payload: bytes) -> bytes:
    """A text twin of any payload, numbers as they stand."""
    digits = payload.hex().upper().encode()
    return b"$%s%04X\n" % (digits, crc16(digits))


def locked() -> Receiver:
    """A receiver that has seen a good binary frame."""
    receiver = Receiver()
    receiver.feed(TALLY)
    return receiver


# One battery over the table of kinds


@each_kind
@settings(max_examples=30, deadline=None)
@given(data=st.data())
def test_kind_comes_back_from_binary_and_text(kind: Kind, data: st.DataObject) -> None:
    """Any frame of the kind comes back from both forms, and is counted by its number."""
    frame = data.draw(frames_of(kind))
    for receiver, wire in ((Receiver(), pack(frame)), (locked(), pack(frame)), (Receiver("text"), pack_text(frame))):
        before = receiver.counters.frames[kind.number]
        assert flat(receiver.feed(wire)) == flat([frame])
        assert receiver.counters.frames[kind.number] == before + 1
        assert receiver.counters.damaged == 0


@each_kind
@given(data=st.data(), more=st.binary(min_size=1, max_size=100))
@settings(max_examples=20, deadline=None)
def test_kind_with_appended_fields_gives_the_known_part(kind: Kind, data: st.DataObject, more: bytes) -> None:
    """A longer payload of a later minor version gives the fields that are known."""
    frame = data.draw(frames_of(kind))
    (payload,), (big,) = payloads(frame), payloads(frame, text=True)
    assert flat(locked().feed(wrap(payload + more))) == flat([frame])
    assert flat(Receiver().feed(twin(big + more))) == flat([frame])


@each_kind
def test_kind_shorter_than_its_first_version_is_damage(kind: Kind) -> None:
    """A sound payload that lacks the last byte of its fields is malformed, in both forms."""
    payload = bytes([kind.number]) + bytes(kind.size - 2)
    for receiver, wire in ((locked(), wrap(payload)), (Receiver("text", from_start=True), twin(payload))):
        assert receiver.feed(wire) == []
        assert receiver.counters.malformed == 1


@each_kind
@given(data=st.data())
@settings(max_examples=20, deadline=None)
def test_half_a_frame_at_opening_is_dropped_uncounted(kind: Kind, data: st.DataObject) -> None:
    """What the port opens in the middle of costs nothing but itself."""
    wire = pack(data.draw(frames_of(kind)))
    cut = data.draw(st.integers(1, len(wire) - 1))
    receiver = Receiver()
    assert flat(receiver.feed(wire[cut:] + TALLY)) == flat(locked_tally())
    assert receiver.counters.damaged == 0
    assert receiver.counters.resyncs == 0


def locked_tally() -> list[Item]:
    """The tally that `TALLY` carries."""
    return [Tallies.of(1, 1000, 2714, 12)]


# Grouping and order


def test_tallies_between_rare_frames_come_in_order_and_grouped() -> None:
    """Tallies that follow each other come as one block, a rare frame parts them."""
    remark = Remark(2, 25, 0, 0, "hello")
    items = locked().feed(
        pack(Tallies.of([0, 1], [10, 20], 5, 5)) + pack(remark) + pack(Tallies.of([3, 4, 5], [30, 40, 50], 5, 5))
    )
    assert [len(item) if isinstance(item, Tallies) else item for item in items] == [2, remark, 3]


def test_tallies_narrow_wide_and_plain_are_never_mixed() -> None:
    """Each kind of tally has its own block with its own marks."""
    receiver = Receiver(from_start=True)
    narrow, wide = Tallies.of(0, 0, 1, 2), Tallies.of(1, 10, 3, 4, wide=True)
    items = receiver.feed(b"7.5 8\n" + pack_text(narrow) + pack_text(wide))
    assert [(t.checked, t.has_ms, t.wide) for t in items if isinstance(t, Tallies)] == [
        (False, False, False),
        (True, True, False),
        (True, True, True),
    ]
    assert flat(items)[0][2:4] == (7.5, 8.0)


def test_tallies_have_the_types_they_promise() -> None:
    """uint8, uint32 and float64, whichever path decoded them."""
    many = pack(Tallies.of(np.arange(100), np.arange(100), 1, 2))
    for items in (locked().feed(TALLY), locked().feed(many), Receiver(from_start=True).feed(b"1 2\n")):
        (tallies,) = items
        assert isinstance(tallies, Tallies)
        columns = (tallies.seq, tallies.ms, tallies.forward, tallies.reflected, tallies.flags)
        assert [c.dtype for c in columns] == [np.uint8, np.uint32, np.float64, np.float64, np.uint8]
        assert all(c.flags.c_contiguous and c.flags.aligned for c in columns)


# Telling the forms apart


def test_lines_are_tried_until_the_first_good_frame() -> None:
    """After a good binary frame a line is only a stretch without a delimiter."""
    receiver = Receiver(from_start=True)
    assert len(receiver.feed(b"10 20\n")) == 1
    assert len(receiver.feed(b"\0" + TALLY)) == 1
    assert receiver.feed(b"10 20\n" + pack_text(Tallies.of(2, 1010, 1, 1))) == []
    assert receiver.counters.bad_lines == 0
    receiver.feed(b"\0")
    assert receiver.counters.malformed == 1


def test_frame_with_line_ends_inside_is_a_frame_only() -> None:
    """Line feeds inside a frame before the first good one count as nothing."""
    wire = pack(Tallies.of(10, 0x0A0A0A0A, 0x0A0A, 0x0A0A, 0x0A))
    receiver = Receiver(from_start=True)
    assert flat(receiver.feed(wire)) == [(10, 0x0A0A0A0A, 0x0A0A, 0x0A0A, 0x0A, True, True, False)]
    assert receiver.counters.damaged == 0


def test_wire_text_never_tries_a_frame() -> None:
    """With wire text a binary frame is a bad line, and lines go on."""
    receiver = Receiver("text", from_start=True)
    assert receiver.feed(pack(Tallies.of(1, 1000, 100, 200))) == []
    assert flat(receiver.feed(b"5 6\n")) == [(0, 0, 5.0, 6.0, 0, False, False, False)]
    assert receiver.counters.bad_lines == 1
    assert receiver.counters.malformed == 0


def test_wire_of_another_name_is_refused() -> None:
    """A form that does not exist is the caller's mistake."""
    with pytest.raises(ValueError, match="auto or text, got 'morse'"):
        Receiver("morse")


def test_plain_line_first_after_opening_is_not_believed() -> None:
    """A plain line cannot show that it is whole, so the first is dropped and not counted."""
    receiver = Receiver()
    assert receiver.feed(b"4 12\n") == []
    assert len(receiver.feed(b"2714 12\n")) == 1
    assert (receiver.counters.lines, receiver.counters.bad_lines) == (1, 0)


def test_twin_first_after_opening_is_believed() -> None:
    """A twin shows by its check that it is whole."""
    receiver = Receiver()
    assert len(receiver.feed(pack_text(Tallies.of(1, 2, 3, 4)))) == 1
    assert receiver.counters.twins == 1


def test_file_is_whole_from_its_first_byte() -> None:
    """With from_start the first line counts like any other."""
    receiver = Receiver(from_start=True)
    assert len(receiver.feed(b"1 2\r\nno line\r\n\r\n")) == 1
    receiver.feed(b"3 4\n")
    assert (receiver.counters.lines, receiver.counters.bad_lines) == (2, 1)


def test_pattern_takes_the_place_of_two_decimals() -> None:
    """With a pattern its lines are read, two decimals are not, and twins still come first."""
    receiver = Receiver(pattern=r"F(?P<forward>\d+) R(?P<reflected>\d+) at (?P<ms>\d+)", from_start=True)
    items = receiver.feed(b"F10 R2 at 500\n1 2\n" + pack_text(Tallies.of(1, 2, 3, 4)))
    assert flat(items) == [(0, 500, 10.0, 2.0, 0, False, True, False), (1, 2, 3.0, 4.0, 0, True, True, False)]
    assert receiver.counters.bad_lines == 1


def test_plain_lines_come_back_from_the_encoder() -> None:
    """Plain lines with fractions are read as written, unchecked and without time."""
    sent = Tallies.of(0, 0, [1, 2714.25, 65535], [0, 11.9, 7])
    (got,) = Receiver(from_start=True).feed(pack_plain(sent))
    assert isinstance(got, Tallies)
    assert not got.checked
    assert not got.has_ms
    assert got.forward.tolist() == sent.forward.tolist()
    assert got.reflected.tolist() == sent.reflected.tolist()


def test_reopened_port_may_speak_another_form() -> None:
    """After reopening lines are tried again, and half of something may come first."""
    receiver = locked()
    receiver.feed(TALLY[:7])
    receiver.reopened()
    assert receiver.feed(b"14 12\n") == []
    assert len(receiver.feed(b"2714 12\n")) == 1
    assert receiver.counters.damaged == 0


# Strange but sound


def test_lone_delimiter_is_no_damage() -> None:
    """The byte after a start of the bridge is counted apart and costs nothing."""
    receiver = Receiver()
    assert len(receiver.feed(b"\0" + TALLY + b"\0" + TALLY)) == 1
    assert (receiver.counters.lone_zeros, receiver.counters.damaged) == (2, 0)


def test_lone_delimiter_saves_the_frame_after_a_restart() -> None:
    """A frame cut in two by a restart is one damage, and the next frame is whole."""
    receiver = locked()
    assert flat(receiver.feed(TALLY[:9] + b"\0" + TALLY)) == flat(locked_tally())
    assert receiver.counters.damaged == 1


@pytest.mark.parametrize("number", [0x10, 0x18, RESERVED_KIND])
def test_unknown_kind_is_kept_as_bytes_and_its_seq_counts(number: int) -> None:
    """A sound frame of an unknown kind, the reserved one among them, is handed over and no loss."""
    payload = bytes([number, 2]) + (1010).to_bytes(4, "little") + b"anything"
    receiver = locked()
    assert receiver.feed(wrap(payload) + pack(Tallies.of(3, 1020, 1, 1)))[0] == Unknown(number, payload)
    assert (receiver.counters.unknown, receiver.counters.lost, receiver.counters.damaged) == (1, 0, 0)


def test_unknown_kind_as_twin_keeps_the_order_of_its_bytes() -> None:
    """From text the payload of an unknown kind is big-endian, and says so."""
    payload = bytes([0x18, 9]) + (1010).to_bytes(4, "big") + b"\x12\x34"
    (item,) = Receiver().feed(twin(payload))
    assert item == Unknown(0x18, payload, text=True)
    assert (item.seq, item.ms) == (9, 1010)


def test_newer_major_version_is_counted_and_gives_nothing() -> None:
    """A sound frame of a later major version is a newer bridge, and ends the trying of lines."""
    receiver = Receiver(from_start=True)
    assert receiver.feed(wrap(b"\x21" + bytes(10)) + wrap(b"\xf1" + bytes(10))) == []
    assert (receiver.counters.newer, receiver.counters.damaged) == (2, 0)
    assert receiver.feed(b"1 2\n") == []


def test_major_version_zero_is_damage() -> None:
    """There was never a version 0."""
    receiver = locked()
    assert receiver.feed(wrap(b"\x01" + bytes(10))) == []
    assert receiver.counters.malformed == 1


@pytest.mark.parametrize("length", [25, 9])
def test_remark_with_a_length_it_cannot_have_is_damage(length: int) -> None:
    """A text longer than allowed, or than the payload holds, is damage."""
    head = bytes.fromhex("14 02 00 00 00 00 00 00 00 00 00") + bytes([length])
    receiver = locked()
    assert receiver.feed(wrap(head + b"8 bytes." + bytes(length == 25 and 20))) == []
    assert receiver.counters.malformed == 1


def test_text_that_is_no_utf8_is_read_all_the_same() -> None:
    """Bytes that are no UTF-8 become the replacement character; nothing raises."""
    receiver = locked()
    plate = Nameplate(2, 1010, 0, 1, 2, 10, 16, 65520, 0, 0, 0, 1, "x")
    (payload,) = payloads(plate)
    (item,) = receiver.feed(wrap(payload[:27] + b"\xff\xfe" + b"ok".ljust(10, b"\0")))
    assert isinstance(item, Nameplate)
    assert item.name == "\ufffd\ufffdok"


def test_dropped_flag_is_counted_by_either_path() -> None:
    """Frames that say the bridge dropped some before them are counted, one by one and in bulk."""
    some = Tallies.of(np.arange(100), np.arange(100), 1, 2, np.where(np.arange(100) % 10 == 0, 0x80, 0))
    for size in (15, 1500):
        receiver = locked()
        wire = pack(some)
        for at in range(0, len(wire), size):
            receiver.feed(wire[at : at + size])
        assert receiver.counters.dropped_flag == 10
