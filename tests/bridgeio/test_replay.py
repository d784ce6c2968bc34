"""A journal read again, by its own bridge file or another: what a live reading would have said, in rows and columns."""

import json
import sqlite3
import time
from dataclasses import replace

import numpy as np
import pytest

from bridgeio.desk import Desk, Reading
from bridgeio.journal import Journal, Mark, Stretch, Writer
from bridgeio.log.replay import Replay
from bridgeio.ports import EndOfSource, open_source
from bridgeio.receiver import Receiver
from bridgeio.rows import json_rows
from bridgeio.simulator import BRIDGE_FILE
from calibration import flags as flag
from tests import fitted, journals

FILE = journals.FILE


def louder(file=FILE, device_id=FILE.device_id, by=1.1):
    """The same bridge file with other gains: every power is less by the square."""
    bands = tuple(
        replace(b, gain_forward=b.gain_forward * by, gain_reflected=b.gain_reflected * by) for b in file.bridge.bands
    )
    return replace(file, source="louder", device_id=device_id, bridge=replace(file.bridge, bands=bands))


def rows(path, files=(), **how):
    """All readings of a journal as dictionaries."""
    with Journal(path) as journal:
        found = Replay(journal, files, **how).readings()
        return [json.loads(row) for batch, bridge in found for row in json_rows(batch, bridge)]


def columns(path, files=(), **how):
    """The columns of a journal joined, by name, and the notes."""
    with Journal(path) as journal:
        replay = Replay(journal, files, **how)
        blocks = [block for _, block in replay.columns()]
    names = ("forward_w", "reflected_w", "net_w", "rho", "swr", "flags")
    return {name: np.concatenate([getattr(block, name) for block in blocks]) for name in names}, replay.notes


def agree(path, files=(FILE,)):
    """Rows and columns say the same of every tally; returns the flags that occur."""
    wanted, (found, _) = rows(path, files), columns(path, files)
    assert len(wanted) == len(found["rho"]) > 0
    for name in ("forward_w", "reflected_w", "net_w", "rho", "swr"):
        truth = np.array([np.nan if row[name] is None else row[name] for row in wanted])
        # A net power is a difference: it is as good as the powers that it is one of.
        atol = 2e-4 * (np.nanmax(found["forward_w"], initial=1.0) if name == "net_w" else 1.0)
        # So is SWR near an open load, where it says no more than rho.
        told = ~(found[name] > 10.0) if name == "swr" else slice(None)
        np.testing.assert_allclose(found[name][told], truth[told], rtol=5e-4, atol=atol, err_msg=name)
    said = [set(flag.names(bits)) for bits in found["flags"]]
    assert said == [set(row["flags"]) - {"dark-moved", "swapped"} for row in wanted]
    return set().union(*said)


# As live


@pytest.mark.parametrize(
    "options", ["mode=key&knob=turning", "mode=ssb&crest=on", "mode=sweep", "temperature=33", "wire=plain"]
)
def test_journal_reads_as_the_wire_did(tmp_path, options):
    """What the desk made of the items that a source sent is made of the journal again, value by value."""
    source = open_source(f"sim:pace=fast&duration=8&seed=3&{options}")
    receiver, desk = Receiver(from_start=True), Desk([FILE], Reading(frequency_hz=14.1e6), simulated=True, live=False)
    writer = Writer(tmp_path / "log", Stretch(source.name, journals.START_US, True))
    writer.mark("frequency", "as told at the start", 14.1e6, journals.START_US / 1e6)
    wanted, arrival_s = [], journals.START_US / 1e6
    source.open()
    try:
        while True:
            items = receiver.feed(source.read())
            arrival_s += 0.05
            writer.put(items, arrival_s)
            for batch in desk.take(items, arrival_s):
                wanted += [json.loads(row) for row in json_rows(batch, desk.bridge_name)]
    except EndOfSource:
        source.close()
    assert writer.stop()
    found = rows(tmp_path / "log")
    assert all(row.pop("time") for row in found)
    assert [row.pop("time") for row in wanted] == [None] * len(wanted)
    assert len(found) > 100
    # The last digits depend on how many are worked at once.
    for mine, live in zip(found, wanted, strict=True):
        assert mine == {k: pytest.approx(v, rel=1e-9) if type(v) is float else v for k, v in live.items()}


def test_time_of_a_row_is_the_tally_s_own(tmp_path):
    """Time is UTC by the device's clock, to the millisecond."""
    path = journals.write(tmp_path / "log", journals.STRETCH, journals.block(journals.tallies(0, 50)))
    assert [row["time"] for row in rows(path)[:3]] == [f"2026-09-23T04:12:00.{ms:03d}Z" for ms in (0, 20, 40)]


def test_another_bridge_file_reads_the_same_counts_anew(tmp_path):
    """Counts stay, powers follow the file given, and SWR does not change where both gains change alike."""
    blocks = [journals.block(journals.tallies(k)) for k in range(3)]
    path = journals.write(tmp_path / "log", journals.STRETCH, journals.told(), *blocks)
    first, other = rows(path, [FILE]), rows(path, [louder()])
    assert [row["forward_counts"] for row in first] == [row["forward_counts"] for row in other]
    assert [row["forward_w"] / 1.21 for row in first] == pytest.approx([row["forward_w"] for row in other])
    assert [row["swr"] for row in first] == pytest.approx([row["swr"] for row in other])


def test_stored_bridge_file_is_used_unless_another_is_given(tmp_path):
    """Each stretch is read by the file stored with it; without one there are counts only, and the note says so."""
    text = BRIDGE_FILE.read_text(encoding="utf-8")
    own = replace(journals.STRETCH, bridge_file=text)
    path = journals.write(tmp_path / "log", own, journals.told(), journals.block(journals.tallies(0)))
    journals.write(path, replace(own, bridge_file=""), journals.block(journals.tallies(1)))
    assert [row["forward_w"] is not None for row in rows(path)] == [True] * 50 + [False] * 50
    assert rows(path)[0]["bridge"] == FILE.name
    assert rows(path)[50]["bridge"] == "shed"
    assert "no bridge file" in columns(path)[1][0]


def test_stored_bridge_file_that_cannot_be_used_costs_the_readings_only(tmp_path):
    """A stored sheet without a fit, or a torn one, leaves counts and says why."""
    for text in ("schema = 1\n[bridge]\n", (fitted.SHEET).read_text(encoding="utf-8"), "\0"):
        path = tmp_path / f"log{len(text)}"
        journals.write(path, replace(journals.STRETCH, bridge_file=text), journals.block(journals.tallies(0)))
        found, notes = columns(path)
        assert {flag.names(bits) for bits in found["flags"]} == {("uncalibrated",)}
        assert f"cannot be used: stored in {path.name}" in notes[0]


def test_simulated_stretch_brings_its_own_file_and_says_so(tmp_path):
    """What was recorded from sim: is read as stream reads it, and every row is flagged."""
    path = journals.write(
        tmp_path / "log", replace(journals.STRETCH, simulated=True), journals.block(journals.tallies(0))
    )
    found = rows(path)
    assert found[0]["forward_w"] > 1.0
    assert all("simulated" in row["flags"] for row in found)


# Which board


def test_two_boards_are_read_each_by_its_own_file(tmp_path):
    """A board with another id never uses the first one's calibration; with both files each has its own."""
    other = replace(journals.PLATE, device_id=0xEEEE, boot=9, name="two")
    path = journals.write(tmp_path / "log", journals.STRETCH, journals.told(), journals.block(journals.tallies(0)))
    journals.write(
        path, replace(journals.STRETCH, nameplate=other), journals.block(journals.plate(5, other), journals.tallies(5))
    )
    alone, notes = columns(path, [FILE])
    assert np.isfinite(alone["forward_w"]).tolist() == [True] * 50 + [False] * 50
    assert "board 0000EEEE has no bridge file among those given" in notes[0]
    both = rows(path, [FILE, replace(louder(device_id=0xEEEE), name="two")])
    assert all(row["forward_w"] for row in both)


def test_after_a_loss_there_are_counts_only_until_a_nameplate(tmp_path):
    """Between a loss of the link and the next nameplate another board may be talking."""
    lost = Mark("link looking", journals.START_US + 1_990_000, "gone")
    blocks = [journals.block(*([journals.plate(k)] if k == 4 else []), journals.tallies(k)) for k in range(6)]
    path = journals.write(tmp_path / "log", journals.STRETCH, journals.told(), *blocks[:2], lost, *blocks[2:])
    found, notes = columns(path, [FILE])
    assert np.isfinite(found["forward_w"]).reshape(6, 50).all(axis=1).tolist() == [True, True, False, False, True, True]
    assert not np.isfinite(found["forward_w"][100:200]).any()
    assert "waiting for the bridge's nameplate" in notes[0]
    agree(path)


def test_board_without_a_nameplate_is_waited_for_and_then_believed(tmp_path):
    """4.5 s of frames without a nameplate are a board that sends none: one file without an id is taken for it."""
    nameless = replace(journals.STRETCH, nameplate=None)
    path = journals.write(
        tmp_path / "log", nameless, journals.told(), *(journals.block(journals.tallies(k)) for k in range(8))
    )
    shared = replace(louder(device_id=None), device_id=None)
    for file in (shared, FILE):
        found = np.isfinite(columns(path, [file])[0]["forward_w"])
        assert found.tolist() == [False] * 226 + [file is shared] * 174


def test_damaged_stretch_is_counts_only(tmp_path):
    """Where the row that says which board it was is damaged, no calibration is used."""
    path = journals.write(tmp_path / "log", journals.STRETCH, journals.told(), journals.block(journals.tallies(0, 500)))
    with sqlite3.connect(path) as link:
        link.execute("UPDATE stretch SET source = 'x'")
    link.close()
    found, notes = columns(path, [FILE])
    assert not np.isfinite(found["forward_w"]).any()
    assert "is damaged" in notes[0]


# Frequency and temperature


def test_frequency_is_the_bridge_s_own_word_while_fresh_then_the_one_told(tmp_path):
    """A conditions frame holds for 10 s; after that what somebody told holds again."""
    blocks = [
        journals.block(*([journals.conditions(2, 7_050_000)] if k == 2 else []), journals.tallies(k)) for k in range(15)
    ]
    path = journals.write(tmp_path / "log", journals.STRETCH, journals.told(), *blocks)
    hz = np.array([row["frequency_hz"] for row in rows(path, [FILE])]).reshape(15, 50)
    assert hz[:, 10].tolist() == [14.1e6] * 2 + [7.05e6] * 10 + [14.1e6] * 3
    agree(path)


def test_mark_that_repeats_the_bridge_does_not_outlive_it(tmp_path):
    """What the bridge told is no option: once it is stale the frequency is not known."""
    mark = journals.told(7_050_000, text="told by the bridge")
    blocks = [
        journals.block(*([journals.conditions(0, 7_050_000)] if k == 0 else []), journals.tallies(k)) for k in range(12)
    ]
    path = journals.write(tmp_path / "log", journals.STRETCH, mark, *blocks)
    found = rows(path, [FILE])
    assert found[0]["frequency_hz"] == 7.05e6
    assert found[-1]["frequency_hz"] is None
    assert "band-unknown" in found[-1]["flags"]


def test_frequency_told_in_one_session_does_not_reach_the_next(tmp_path):
    """A journal continued without a frequency has none; a change told later holds from then on."""
    fresh = replace(journals.STRETCH, nameplate=None)
    later = journals.told(7_050_000, journals.START_US + 1_500_000, "typed")
    path = journals.write(
        tmp_path / "log", fresh, journals.STRETCH, journals.told(), journals.block(journals.tallies(0))
    )
    journals.write(path, journals.block(journals.tallies(1)), later)
    next_day = journals.START_US + 86_400_000_000
    journals.write(path, replace(fresh, started_us=next_day), replace(journals.STRETCH, started_us=next_day))
    journals.write(path, journals.block(journals.tallies(0, start_us=next_day)))
    hz = [row["frequency_hz"] for row in rows(path, [FILE])]
    assert hz == [14.1e6] * 75 + [7.05e6] * 25 + [None] * 50


def test_warm_box_is_read_warm_by_rows_and_columns(tmp_path):
    """Temperature goes up by 5 degrees a second: both ways of reading follow it."""
    warm = [journals.block(journals.conditions(k, c=25.0 + 5 * k), journals.tallies(k)) for k in range(3)]
    path = journals.write(tmp_path / "log", journals.STRETCH, *warm)
    agree(path)
    bench = [journals.block(journals.conditions(k), journals.tallies(k)) for k in range(3)]
    other = journals.write(tmp_path / "bench", journals.STRETCH, *bench)
    watts = [columns(one, [FILE])[0]["forward_w"].reshape(3, 50) for one in (path, other)]
    away = np.abs(watts[0] / watts[1] - 1.0)
    assert away[0].max() == 0.0
    assert away[2].min() > 1e-3


# Rows and columns


CASES = [
    {"pair": (np.arange(50) + 20_000.5, np.arange(50) * 30.0)},
    {"wide": True},
    {"flags": 1},
    {"flags": 2},
    {"checked": False},
    {"pair": (np.full(50, 20_000), np.linspace(0, 24_000, 50).astype(int))},
    {"pair": (np.linspace(0, 65_535, 50).astype(int), np.full(50, 900))},
]
USUAL = {"no-carrier", "below-reading", "over-unity", "clipped", "unchecked"}


@pytest.mark.parametrize(
    ("hz", "said"),
    [
        (journals.HZ, USUAL),
        (12_000_000, USUAL | {"interpolated"}),
        (90_000_000, {"uncalibrated", "unchecked"}),
        (None, USUAL | {"band-unknown"}),
    ],
)
def test_columns_say_what_rows_say(tmp_path, hz, said):
    """Every kind of tally at a calibrated, a between, a far and an unknown frequency: same values, same flags."""
    path = journals.write(tmp_path / "log", journals.STRETCH, *([] if hz is None else [journals.told(hz)]))
    for second, case in enumerate(CASES):
        # A stretch each, so that no tally is taken out of order.
        journals.write(path, journals.STRETCH, journals.block(journals.tallies(second, **case)))
    few = [band for band in FILE.bridge.bands if 10e6 < band.frequency_hz < 19e6]
    assert agree(path, [replace(FILE, bridge=replace(FILE.bridge, bands=tuple(few)))]) == said


def test_only_the_time_asked_for_is_read(tmp_path):
    """From is included, to is not, and what was told a little before still holds."""
    blocks = [journals.block(*([journals.conditions(0)] if k == 0 else []), journals.tallies(k)) for k in range(8)]
    path = journals.write(tmp_path / "log", journals.STRETCH, *blocks)
    span = {"from_us": journals.START_US + 2_500_000, "to_us": journals.START_US + 5_000_000}
    found = rows(path, [FILE], **span)
    assert [found[k]["time"] for k in (0, -1)] == ["2026-09-23T04:12:02.500Z", "2026-09-23T04:12:04.980Z"]
    assert found == [row for row in rows(path, [FILE]) if "02.5" <= row["time"][17:] < "05"]
    assert len(columns(path, [FILE], **span)[0]["rho"]) == len(found) == 125


def test_journal_is_read_while_it_grows(tmp_path):
    """A stretch begun after the reader has looked is known when its blocks come."""
    path = journals.write(tmp_path / "log", journals.STRETCH, journals.told(), journals.block(journals.tallies(0)))
    with Journal(path) as journal:
        replay = Replay(journal, [FILE])
        journals.write(path, replace(journals.STRETCH, source="two"), journals.block(journals.tallies(1)))
        assert [(passage.stretch.source, len(block.rho)) for passage, block in replay.columns()] == [
            ("/dev/ttyUSB0", 50),
            ("two", 50),
        ]


# Speed


def spent_reading(path, wanted):
    """CPU to read a whole journal by another bridge file [s], and that it was read."""
    began_s, read, sums = time.process_time(), 0, np.zeros(5)
    with Journal(path) as journal:
        for _, block in Replay(journal, [louder()]).columns():
            read += len(block.rho)
            for place, name in enumerate(("rho", "swr", "forward_w", "reflected_w", "net_w")):
                sums[place] += np.isfinite(getattr(block, name)).sum()
        assert (read, journal.walked.words) == (wanted, "complete")
    spent_s = time.process_time() - began_s
    assert sums[0] == sums[1] == pytest.approx(read / 2, rel=0.1)
    assert sums[2] == read
    return spent_s


def speed(folder, seconds, tries=1):
    """Make and read a journal: tallies a CPU second written, megabytes, CPU to read [s]; the best of several tries."""
    path = folder / "contest.journal"
    written, writing_s = journals.long_journal(path, seconds)
    reading_s = min(spent_reading(path, written) for _ in range(tries))
    rate, megabytes = written / writing_s, path.stat().st_size / 1e6
    print(f"{written} tallies: {rate / 1e6:.2f} M/s written, {megabytes:.1f} MB, read in {reading_s:.2f} s of CPU")
    return rate, megabytes, reading_s


def test_twentieth_of_a_contest_is_written_and_read_in_time(tmp_path):
    """2.4 h in a twentieth of what 48 h may take; the tables of codes are made once for both, so they count once."""
    rate, megabytes, reading_s = speed(tmp_path, 8640, tries=3)
    minute = tmp_path / "minute"
    tallies, _ = journals.long_journal(minute, 60)
    once_s = min(spent_reading(minute, tallies) for _ in range(3))
    whole_s = once_s + 20 * (reading_s - once_s)
    print(f"of it {once_s:.2f} s once: 48 h would take {whole_s:.2f} s")
    assert rate > 0.4e6
    assert megabytes < 60.0 / 20
    assert whole_s < 3.0


@pytest.mark.long
def test_whole_contest_is_written_and_read_in_time(tmp_path):
    """48 h, 8.64 million tallies: at most 60 MB, read by another bridge file in at most 3 s of CPU."""
    rate, megabytes, reading_s = speed(tmp_path, 172_800)
    assert rate > 0.4e6
    assert megabytes < 60.0
    assert reading_s < 3.0
