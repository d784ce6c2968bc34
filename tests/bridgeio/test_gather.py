"""Blocks as columns: the same tallies as item by item, and what came before what."""

import contextlib

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bridgeio.frames import Conditions, Remark, Tallies, Unknown
from bridgeio.journal import Journal
from bridgeio.journal.columns import PackError
from bridgeio.journal.gather import gather
from bridgeio.journal.pack import Timed, contents_of
from tests import journals

MIXED = [
    journals.plate(0),
    journals.tallies(0, 5),
    journals.conditions(1, c=-3.25),
    journals.tallies(1, 5, pair=(np.arange(5) + 0.5, np.arange(5.0))),
    journals.timed(Remark(0, 1500, 1, 2, "hot"), 1500),
    journals.conditions(2, hz=0),
    journals.tallies(2, 5),
    journals.timed(Unknown(0x1A, b"\x1a\1\0\0\0\0!"), 0),
    journals.tallies(3, 5, wide=True),
]


def test_gathered_tallies_are_those_of_the_items(tmp_path):
    """Counts, times and flags come in order, whatever was packed apart: fractions, wide counts, rare frames between."""
    path = journals.write(tmp_path / "log", journals.STRETCH, journals.block(*MIXED[:5]), journals.block(*MIXED[5:]))
    with Journal(path) as journal:
        (found,) = journal.gathered()
        items = list(journal.tallies())
    (counts,) = found.counts
    for name in ("forward", "reflected", "flags"):
        assert getattr(counts, name).tolist() == np.concatenate([getattr(one.item, name) for one in items]).tolist()
    assert counts.utc_us.tolist() == np.concatenate([one.utc_us for one in items]).tolist()
    assert found.frames == {-1: 20, 0x12: 1, 0x14: 1, 0x16: 2, 0: 1}


def test_places_tell_what_came_before_what():
    """A conditions frame has a place after the tallies before it and before those after it; so has a nameplate."""
    found = gather(1, [contents_of(MIXED[:4]), contents_of(MIXED[4:])])
    place = found.counts[0].place
    assert found.plates_place[0] < place[0]
    assert place[4] < found.conditions_place[0] < place[5]
    assert place[9] < found.conditions_place[1] < place[10]
    assert found.temperature_c100.tolist() == [-325, 2500]
    assert found.frequency_hz.tolist() == [journals.HZ, 0]
    assert found.conditions_us.tolist() == [journals.START_US + k * 1_000_000 for k in (1, 2)]


def test_plain_lines_are_kept_apart():
    """Tallies that carry no check are never among those that do."""
    plain = journals.tallies(1, 4, checked=False, has_ms=False)
    found = gather(1, [contents_of([journals.tallies(0, 5), plain])])
    assert [(len(one), one.checked, one.has_ms) for one in found.counts] == [(5, True, True), (4, False, False)]
    assert found.counts[1].utc_us.tolist() == plain.utc_us.tolist()


def test_times_hold_across_a_wrap_of_the_device_clock():
    """UTC goes on by the device's milliseconds where they wrap."""
    ms = np.arange(2**32 - 3, 2**32 + 3)
    made = Timed(Tallies.of(0, ms, 1, 1), ms * 1000)
    (counts,) = gather(1, [contents_of([made])]).counts
    assert counts.utc_us.tolist() == (ms * 1000).tolist()


@settings(max_examples=150, deadline=None)
@given(st.data())
def test_damaged_content_gives_columns_or_a_pack_error(data):
    """Bytes changed, dropped or added never raise anything but PackError."""
    content = bytearray(contents_of(MIXED))
    at = data.draw(st.integers(0, len(content)))
    content[at : at + data.draw(st.integers(0, 4))] = data.draw(st.binary(max_size=4))
    with contextlib.suppress(PackError):
        assert all(len(one.forward) == len(one) for one in gather(1, [bytes(content)]).counts)


@pytest.mark.parametrize("noise", [b"", b"\1", b"\1\0" + bytes(13), b"\xff" * 40])
def test_what_is_no_content_is_refused(noise):
    """What no writer wrote raises PackError."""
    with pytest.raises(PackError):
        gather(1, [noise])


def test_conditions_without_tallies_are_gathered():
    """A block of rare frames only gives no counts."""
    found = gather(1, [contents_of([journals.timed(Conditions(0, 0, 1, 2, 3), 0)])])
    assert (found.counts, found.frequency_hz.tolist()) == ((), [3])
