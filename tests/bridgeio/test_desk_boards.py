"""The desk: several files and boards, the frequency that is believed, and when readings were taken."""

from dataclasses import replace

import numpy as np
import pytest

from bridgeio.bridge_file import parse_bridge_file
from bridgeio.desk import Desk, Reading
from bridgeio.errors import FileError
from bridgeio.frames import Conditions, Nameplate, Remark, Tallies
from tests import fitted

A, B = 0x1A2B3C4D, 0x99


def bridge_file(source="shed.toml", device_id=None, name="garden shed bridge (12 bit)", reference_mv=None):
    """The shed bridge's file, for any board unless told."""
    head = f'name = "{name}"'
    head += f'\ndevice_id = "{device_id:X}"' if device_id else ""
    head += f"\nreference_mv = {reference_mv}" if reference_mv else ""
    return parse_bridge_file(fitted.bridge_text(12).replace('name = "garden shed bridge (12 bit)"', head), source)


def nameplate(device_id=A, full_scale=4095, boot=1, fit_id=0, reference_mv=0):
    """Who the board is."""
    return Nameplate(0, 10, 0, boot, device_id, 10, 1, full_scale, reference_mv, 0, fit_id, 1, "board")


def tallies(ms=(1000,), **marks):
    """Counts of some 15 W into some SWR."""
    return Tallies.of(0, np.array(ms), 1100.0, 300.0, **marks)


def conditions(hz, ms=1000):
    """What the bridge says of its surroundings."""
    return Conditions(0, ms, 2500, 5000, hz)


def read(desk, *items, arrival_s=0.0):
    """The readings of the last block of tallies among the items."""
    return list(desk.take(items, arrival_s))[-1].readings


class Clock:
    """A clock that stands until it is set."""

    def __init__(self):
        self.s = 1000.0

    def __call__(self):
        return self.s


def test_files_are_matched_by_device_id():
    """Of two files the one made for the board is used, whichever comes first, and another board gets the other."""
    for order in (1, -1):
        files = [bridge_file("a.toml", A, "bridge a"), bridge_file("b.toml", B, "bridge b")][::order]
        desk = Desk(files, Reading(frequency_hz=14.2e6))
        assert not read(desk, nameplate(A), tallies()).has("uncalibrated").any()
        assert desk.bridge_name == "bridge a"
        assert not read(desk, nameplate(B), tallies()).has("uncalibrated").any()
        assert desk.bridge_name == "bridge b"


def test_file_for_the_board_goes_before_one_for_any():
    """A file that names no board serves the others only."""
    desk = Desk(
        [bridge_file("any.toml", None, "any"), bridge_file("a.toml", A, "bridge a")], Reading(frequency_hz=14.2e6)
    )
    read(desk, nameplate(A), tallies())
    assert desk.bridge_name == "bridge a"
    read(desk, nameplate(B), tallies())
    assert desk.bridge_name == "any"


def test_strange_board_is_counts_only_and_named():
    """A board that no file is for keeps its own name, no watts, and the sentence names both sides."""
    desk = Desk([bridge_file("a.toml", A)], Reading(frequency_hz=14.2e6))
    readings = read(desk, nameplate(B), tallies())
    assert readings.has("uncalibrated").all()
    assert np.isnan(readings.forward_w).all()
    assert readings.forward_counts == 1100.0
    assert desk.bridge_name == "board"
    assert desk.note == (
        "counts only: board 00000099 has no bridge file among those given (a.toml is for 1A2B3C4D)"
    )  # fmt: skip
    read(desk, nameplate(0), tallies())
    assert desk.note == (
        "counts only: a board that tells no device id has no bridge file among those given "
        "(a.toml is for 1A2B3C4D)"
    )  # fmt: skip


@pytest.mark.parametrize(
    ("device_id", "words"),
    [(None, "one.toml and two.toml both name no device_id"), (A, "one.toml and two.toml both are for board 1A2B3C4D")],
)
def test_two_files_for_one_board_are_refused(device_id, words):
    """Which of two files holds cannot be guessed."""
    with pytest.raises(FileError, match=f"{words}; wanted one bridge file a board"):
        Desk([bridge_file("one.toml", device_id), bridge_file("two.toml", device_id)])


def test_plain_lines_with_several_files_are_counts_only():
    """Lines do not say whose they are: with two files neither is guessed."""
    desk = Desk([bridge_file("a.toml", A), bridge_file("b.toml", B)], Reading(frequency_hz=14.2e6))
    readings = read(desk, tallies(checked=False, has_ms=False))
    assert readings.has("uncalibrated").all()
    assert readings.has("unchecked").all()
    assert "plain lines do not say which of the bridge files is theirs" in desk.note


def test_no_file_is_counts_only_and_says_how_to_get_one():
    """Without a bridge file there are counts, and the sentence names the option and the command."""
    desk = Desk()
    assert read(desk, tallies()).has("uncalibrated").all()
    assert desk.note == "no bridge file: counts only (give one with --bridge, made by `bridgewright fit`)"
    assert desk.bridge_name is None


def test_sheet_is_no_bridge_file():
    """A bench sheet without a fit is refused at once."""
    with pytest.raises(FileError, match=r"is a bench sheet without \[fit\]"):
        Desk([replace(bridge_file(), bridge=None)])


def test_board_with_another_fit_is_told():
    """A board that carries the id of another fit, or converts against another reference, is read with a caution."""
    file = bridge_file(reference_mv=2500)
    desk = Desk([file], Reading(frequency_hz=14.2e6))
    read(desk, nameplate(fit_id=file.fit_id, reference_mv=2500), tallies())
    assert desk.caution is None
    read(desk, nameplate(fit_id=file.fit_id ^ 1), tallies())
    assert f"was given fit {file.fit_id ^ 1:04X}, bridge file shed.toml holds fit {file.fit_id:04X}" in desk.caution
    read(desk, nameplate(reference_mv=1100), tallies())
    assert "converts against 1100 mV, bridge file shed.toml was made with 2500 mV" in desk.caution
    assert Desk().caution is None


# Frequency


def test_bridges_word_beats_the_option_while_fresh():
    """A frequency told by the bridge holds for 10 s of our clock, then the option does."""
    clock = Clock()
    desk = Desk([bridge_file()], Reading(frequency_hz=14.2e6), clock=clock)
    desk_reads = lambda *items: read(desk, *items).frequency_hz[0]  # noqa: E731
    assert desk_reads(nameplate(), tallies()) == 14.2e6
    assert desk_reads(conditions(7_100_000), tallies()) == 7.1e6
    clock.s += 10.0
    assert desk_reads(tallies()) == 7.1e6
    clock.s += 0.1
    assert desk_reads(tallies()) == 14.2e6


def test_bridge_that_does_not_know_its_frequency_says_nothing():
    """Conditions with frequency 0 change nothing."""
    desk = Desk([bridge_file()], Reading(frequency_hz=14.2e6), clock=Clock())
    assert read(desk, nameplate(), conditions(0), tallies()).frequency_hz == 14.2e6
    assert read(desk, conditions(7_100_000), conditions(0), tallies()).frequency_hz == 7.1e6


def test_frequency_of_a_recording_is_fresh_by_the_bridges_clock():
    """In a file, where our clock says nothing, the bridge's own milliseconds decide."""
    desk = Desk([bridge_file()], Reading(frequency_hz=14.2e6), live=False, clock=Clock())
    assert read(desk, nameplate(), conditions(7_100_000, ms=1000), tallies([11_000])).frequency_hz == 7.1e6
    assert read(desk, tallies([11_100])).frequency_hz == 14.2e6


def test_frequency_not_known_reads_over_all_bands():
    """With nobody to tell it, readings carry the flag and the frequency is unknown."""
    readings = read(Desk([bridge_file()]), nameplate(), tallies())
    assert readings.has("band-unknown").all()
    assert np.isnan(readings.frequency_hz).all()


def test_other_board_has_another_transmitter():
    """What the last board said of its frequency is not believed of the next one."""
    desk = Desk([bridge_file()], Reading(frequency_hz=14.2e6), clock=Clock())
    read(desk, nameplate(A), conditions(7_100_000), tallies())
    assert read(desk, nameplate(B), tallies()).frequency_hz == 14.2e6


# Times


def times(desk, *items, arrival_s):
    """When the readings of the last block were taken [s]."""
    return list(desk.take(items, arrival_s))[-1].time_s


def test_live_times_follow_the_bridges_clock():
    """Live, readings are as far apart as the bridge says, and a delayed arrival does not move them."""
    desk = Desk()
    assert times(desk, tallies([1000, 1010]), arrival_s=50.0) == pytest.approx([49.99, 50.0])
    assert times(desk, tallies([1020, 1030]), arrival_s=50.3) == pytest.approx([50.01, 50.02])


def test_live_times_without_milliseconds_are_arrivals():
    """Plain lines are dated when they came."""
    assert times(Desk(), tallies([0, 0], has_ms=False, checked=False), arrival_s=50.0).tolist() == [50.0, 50.0]


def test_recorded_readings_have_no_time():
    """When a file is read says nothing of when it was written."""
    assert np.isnan(times(Desk(live=False), tallies([1000, 1010]), arrival_s=50.0)).all()


def test_board_that_starts_again_starts_a_new_time():
    """A nameplate with another boot number restarts the clock, even where milliseconds do not fall."""
    desk = Desk()
    times(desk, nameplate(boot=1), tallies([1000]), arrival_s=50.0)
    assert times(desk, nameplate(boot=1), tallies([1010]), arrival_s=50.5) == pytest.approx([50.01])
    assert times(desk, nameplate(boot=2), tallies([1020]), arrival_s=60.0) == pytest.approx([60.0])


def test_batches_are_given_one_at_a_time():
    """Between two batches the desk's word holds for the one just given: before and after a nameplate."""
    desk = Desk([bridge_file()], Reading(frequency_hz=14.2e6))
    said = [desk.note is None for _ in desk.take([tallies(), nameplate(), tallies()], 0.0)]
    assert said == [False, True]


def test_other_items_are_passed_over():
    """Remarks change nothing and give no readings."""
    assert not list(Desk().take([Remark(0, 0, 1, 0, "\x1b[2J")], 0.0))


@pytest.mark.parametrize("device_id", [None, A])
def test_after_a_loss_counts_only_until_a_nameplate_has_come(device_id):
    """A board that has sent nameplates, even late ones, is not believed to be the same until it says so again."""
    desk = Desk([bridge_file("a.toml", device_id)], Reading(frequency_hz=14.2e6))
    read(desk, tallies([0]), tallies([5000]))  # so long without one that it seemed to send none
    assert not read(desk, nameplate(A), tallies([5010])).has("uncalibrated").any()
    desk.reopened()
    assert read(desk, tallies([5020])).has("uncalibrated").all()
    assert "waiting for the bridge's nameplate" in desk.note
    assert read(desk, tallies([20_000])).has("uncalibrated").all()
    assert not read(desk, nameplate(A), tallies([20_010])).has("uncalibrated").any()


def test_other_board_after_a_loss_never_gets_the_old_calibration():
    """A board of another device id that comes back is counts only, and named."""
    desk = Desk([bridge_file("a.toml", A)], Reading(frequency_hz=14.2e6))
    read(desk, nameplate(A), tallies([10]))
    desk.reopened()
    assert read(desk, tallies([20]), nameplate(B), tallies([30])).has("uncalibrated").all()
    assert "board 00000099" in desk.note


def test_bridge_without_nameplates_goes_on_at_once_after_a_loss():
    """A bridge that never sent a nameplate, and one of plain lines, is read by its file right after a loss."""
    desk = Desk([bridge_file()], Reading(frequency_hz=14.2e6))
    read(desk, tallies([0]), tallies([5000]))
    assert not read(desk, tallies([5010])).has("uncalibrated").any()
    desk.reopened()
    assert not read(desk, tallies([7])).has("uncalibrated").any()


def test_no_average_spans_a_loss():
    """What waited for an average before a loss is left out: it may be of another board."""
    desk = Desk([bridge_file()], Reading(frequency_hz=14.2e6, average=2))
    list(desk.take([Tallies.of(0, [0], 1100.0, 300.0)], 0.0))
    desk.reopened()
    batches = list(desk.take([Tallies.of([1, 2, 3], [10, 20, 30], 2200.0, 600.0)], 0.0))
    assert [batch.readings.forward_counts.tolist() for batch in batches] == [[2200.0]]


def test_frequency_told_before_a_loss_is_forgotten():
    """What the board said of its frequency no longer holds after a loss."""
    desk = Desk([bridge_file()], Reading(frequency_hz=14.2e6))
    list(desk.take([conditions(7_050_000)], 0.0))
    assert desk.frequency_hz == 7_050_000
    desk.reopened()
    assert desk.frequency_hz == 14.2e6
