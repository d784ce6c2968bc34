"""What is known of line, bridge and counts: gathered from what comes, handed out frozen."""

import pytest

from bridgeio.bridge_file import load_bridge_file
from bridgeio.desk import Desk
from bridgeio.frames import Conditions, Nameplate, Remark, Tallies
from bridgeio.framing import pack
from bridgeio.line_watch import LineWatch
from bridgeio.receiver import Receiver
from bridgeio.simulator import BRIDGE_FILE


class Port:
    """A source that is only named."""

    name, simulated, live, baud = "/dev/ttyUSB7", False, True, 57600


def plate(fit_id=0, full_scale=65520):
    """A nameplate of a board that the simulated bridge's file may read."""
    return Nameplate(0, 0, 0, 9, 0x51B0B41D, 10, 16, full_scale, 2500, 2, fit_id, 0x0102, "board")


def watched(*items, files=(), at_s=10.0):
    """Watch and desk after these items came together."""
    receiver, desk = Receiver(from_start=True), Desk(files)
    watch = LineWatch(Port(), receiver, desk)
    found = receiver.feed(b"".join(pack(item) for item in items))
    watch.take(found, at_s)
    list(desk.take(found, 0.0))
    return watch


def test_facts_before_anything_came():
    """The port is named, all else is None and not an error."""
    facts = LineWatch(Port(), Receiver(), Desk()).facts(1.0)
    assert (facts.port, facts.baud) == ("/dev/ttyUSB7", 57600)
    assert facts.heard_s is facts.nameplate is facts.counts is facts.calibration is facts.clock_ppm is None
    assert facts.frames_hz == 0.0


def test_facts_hold_what_the_bridge_said():
    """Nameplate, conditions and remarks as they came, the newest remark first, and when."""
    remarks = [Remark(n, 0, n, 0, f"no {n}") for n in range(6)]
    facts = watched(plate(), Conditions(1, 0, 2510, 4980, 0), *remarks).facts(11.0)
    assert facts.nameplate.name == "board"
    assert facts.conditions.supply_mv == 4980
    assert [(at_s, remark.text) for at_s, remark in facts.remarks] == [(10.0, f"no {n}") for n in (5, 4, 3, 2)]
    assert facts.heard_s == 10.0


def test_facts_are_frozen_though_counting_goes_on():
    """Counters handed out do not change any more."""
    watch = watched(plate())
    before = watch.facts(11.0)
    watch._receiver.feed(b"\x05junk\0")
    assert before.counters.damaged == 0
    assert watch.facts(11.5).counters.damaged == 1


def test_calibration_is_told_with_its_zero_and_noise():
    """The file in force, its zero, and the dark count that is the zero until another is known."""
    file = load_bridge_file(BRIDGE_FILE)
    counts = Tallies.of([1], [10], [30_000], [3000])
    told = watched(plate(), counts, files=[file]).facts(11.0).calibration
    assert (told.source, told.fit_id) == (file.source, file.fit_id)
    assert told.dark == told.zero == (file.bridge.forward_law.offset, file.bridge.reflected_law.offset)
    assert told.noise_sd == (file.bridge.forward_sd, file.bridge.reflected_sd)


def test_running_dark_count_is_told():
    """After fifty readings without carrier the running mean stands beside the file's zero."""
    file = load_bridge_file(BRIDGE_FILE)
    zero = round(file.bridge.forward_law.offset) + 4
    dark = [Tallies.of([n], [10 * n], [zero], [70]) for n in range(60)]
    told = watched(plate(), *dark, files=[file]).facts(11.0).calibration
    assert told.dark[0] == zero
    assert told.dark[0] != told.zero[0]


def test_calibration_that_does_not_fit_is_none():
    """Another full scale: counts only."""
    file = load_bridge_file(BRIDGE_FILE)
    assert watched(plate(full_scale=4095), files=[file]).facts(11.0).calibration is None


def test_rate_is_of_all_frames_over_the_last_seconds():
    """Ten frames between two looks a second apart are ten a second, and none after four quiet seconds."""
    receiver, desk = Receiver(from_start=True), Desk()
    watch = LineWatch(Port(), receiver, desk)
    watch.facts(0.0)
    receiver.feed(b"".join(pack(Tallies.of([n], [n], [1], [1])) for n in range(10)))
    assert watch.facts(1.0).frames_hz == pytest.approx(10.0)
    for second in range(2, 8):
        quiet = watch.facts(float(second))
    assert quiet.frames_hz == 0.0


def test_due_only_every_quarter_of_a_second():
    """Whoever asks before making facts makes four a second at most."""
    watch = LineWatch(Port(), Receiver(), Desk())
    assert watch.due(0.0)
    watch.facts(0.0)
    assert not watch.due(0.24)
    assert watch.due(0.25)


def test_reopened_forgets_the_counts_but_not_the_remarks():
    """Another board may have been plugged in; what was said stays said."""
    watch = watched(plate(), Tallies.of([1], [1], [5], [5]), Remark(2, 0, 2, 0, ""), Conditions(3, 0, 2500, 1, 0))
    watch.reopened()
    facts = watch.facts(12.0)
    assert facts.counts is facts.conditions is None
    assert len(facts.remarks) == 1
