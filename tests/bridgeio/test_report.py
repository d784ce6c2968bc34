"""A journal's report: it opens with what is missing, and one frame alone never decides."""

import sqlite3
from dataclasses import replace

import numpy as np
import pytest

from bridgeio.frames import Conditions
from bridgeio.journal import Journal, Mark
from bridgeio.log.replay import Replay
from bridgeio.log.report import report_lines
from bridgeio.log.summary import confirmed_place, hours, median_place, spans_s, swr_order
from bridgeio.log.words import bad_blocks, frame_kinds, lasting, other_frames, utc
from calibration.flags import bit
from tests import journals

FILE = journals.FILE
SECONDS_US = np.arange(20) * 1_000_000


def report(path, files=(FILE,)):
    """The report's lines."""
    with Journal(path) as journal:
        return report_lines(journal, list(files))


def line_of(lines, name):
    """What stands behind a name at the start of a line."""
    (found,) = [line.strip() for line in lines if line.strip().split(" ")[0] == name]
    return found.removeprefix(name).strip()


@pytest.fixture
def contest(tmp_path):
    """Ten seconds over the turn of an hour, with a frequency."""
    start_us = journals.START_US + (48 * 60 - 5) * 1_000_000
    blocks = [journals.block(journals.tallies(k, start_us=start_us)) for k in range(10)]
    return journals.write(tmp_path / "contest.journal", journals.STRETCH, journals.told(), *blocks)


# Arithmetic


def test_highest_is_one_that_a_second_frame_confirms():
    """A lone frame is passed over, however high, and named; its neighbour within a fifth makes a value count."""
    values = np.full(20, 10.0)
    values[5], values[11], values[12] = 900.0, 50.0, 41.0
    assert confirmed_place(values, SECONDS_US) == (11, 5)
    values[12] = 39.0
    assert confirmed_place(values, SECONDS_US) == (0, 5)


def test_second_frame_must_be_near_in_time():
    """What comes a minute later is another transmission."""
    values, utc_us = np.array([50.0, 50.0, 10.0, 10.0]), np.array([0, 60, 61, 62]) * 1_000_000
    assert confirmed_place(values, utc_us) == (2, 0)


def test_nothing_is_confirmed_among_nothing():
    """No values, only unknown ones, or a single one give no place."""
    assert confirmed_place(np.empty(0), SECONDS_US[:0]) == (None, None)
    assert confirmed_place(np.full(3, np.nan), SECONDS_US[:3]) == (None, None)
    assert confirmed_place(np.array([7.0]), SECONDS_US[:1]) == (None, 0)


def test_infinite_swr_is_confirmed_by_another_only():
    """An open load is worst, but one frame of it is none."""
    values = np.array([2.0, 2.0, np.inf, 2.0, 2.0])
    assert confirmed_place(values, SECONDS_US[:5]) == (0, 2)
    values[3] = np.inf
    assert confirmed_place(values, SECONDS_US[:5]) == (2, None)


def test_swr_is_ordered_from_below_reading_to_open():
    """Below what can be read comes first, above 1 in rho last, and what is not known nowhere."""
    rho = np.array([np.nan, 0.5, 1.2, np.nan])
    swr = np.array([np.nan, 3.0, np.nan, np.nan])
    flags = np.array([bit("below-reading"), 0, bit("over-unity"), bit("clipped")], dtype=np.uint32)
    np.testing.assert_array_equal(swr_order(swr, rho, flags), [1.0, 3.0, np.inf, np.nan])


@pytest.mark.parametrize(
    ("values", "place"),
    [([3.0, 1.0, 2.0], 2), ([np.nan, 4.0, np.inf, 1.0], 1), ([np.nan], None), ([], None), ([2.0, 1.0], 1)],
)
def test_median_is_one_of_the_values(values, place):
    """The median is a place, so that its counts can be read again with the interval."""
    assert median_place(np.array(values)) == place


def test_tally_stands_for_its_spacing_and_not_for_a_gap():
    """Fifty a second are a second; a pause of an hour is two spacings; a clock set back takes no time away."""
    steady = np.arange(50) * 20_000
    assert spans_s(steady).sum() == pytest.approx(1.0)
    assert spans_s(np.concatenate([steady, steady + 3_600_000_000])).sum() == pytest.approx(2.02)
    assert spans_s(np.concatenate([steady, steady - 3_600_000_000])).sum() == pytest.approx(1.98)
    assert spans_s(np.array([5])).tolist() == [0.0]


def test_hours_add_up_to_what_was_on_the_air(contest):
    """Time on air, energy and the highest power of each hour are those of its own tallies."""
    with Journal(contest) as journal:
        first, second = hours(Replay(journal, [FILE]).columns())
    with Journal(contest) as journal:
        ((_, block),) = Replay(journal, [FILE]).columns()
    assert second.start_us - first.start_us == 3_600_000_000
    assert (first.on_air_s, second.on_air_s) == (pytest.approx(5.0), pytest.approx(5.0))
    assert first.energy_j + second.energy_j == pytest.approx(float(block.net_w.sum()) * 0.02, rel=1e-5)
    assert first.crest.forward_w == block.forward_w[:250].max()
    assert second.worst.swr[0] == pytest.approx(np.nanmax(block.swr[250:]), rel=1e-3)
    assert first.median.swr[0] == pytest.approx(np.nanmedian(block.swr[:250]), rel=1e-2)
    assert first.median.swr_low[0] < first.median.swr[0] < first.median.swr_high[0]


# Words


def test_report_opens_with_its_completeness(tmp_path, contest):
    """The first line says whether it is all there, and what is missing with its time."""
    assert report(contest)[0] == "complete"
    path = journals.write(tmp_path / "log", journals.STRETCH, journals.block(journals.tallies(7), missing=3))
    lines = report(path, [])
    assert lines[0] == "complete but for 3 frames, 04:12:07"
    at = lines.index("Seconds with missing frames (UTC)")
    assert lines[at + 1].strip() == "2026-09-23 04:12:07"


def test_report_says_what_was_recorded_and_how_it_was_read(contest):
    """Span, frames, source, board, bridge file with its fit, power and the table of hours stand in it."""
    lines = report(contest)
    assert line_of(lines, "span").startswith("2026-09-23 04:59:55 to 2026-09-23 05:00:04 UTC, 10.0 s")
    assert line_of(lines, "frames") == "500 tallies"
    assert line_of(lines, "source") == f'/dev/ttyUSB0, board {FILE.device_id:08X} "shed"'
    assert line_of(lines, "read") == f"by      {FILE.name} ({FILE.source}, fit {FILE.fit_id:04X}): 500 tallies"
    assert line_of(lines, "recorded") == "10.0 s, with carrier 10.0 s"
    assert "in two frames or more" in line_of(lines, "highest")
    assert [line.split()[1] for line in lines if line.startswith("  2026-09-23 0") and "W" in line] == [
        "04:00",
        "05:00",
    ]
    assert not any("simulated" in line for line in lines)


def test_simulated_and_unchecked_are_said(tmp_path):
    """What came from sim: or from plain lines says so."""
    plain = journals.block(journals.tallies(0, checked=False))
    path = journals.write(tmp_path / "log", replace(journals.STRETCH, simulated=True), journals.told(), plain)
    lines = report(path, [])
    assert line_of(lines, "simulated") == line_of(lines, "unchecked") == "50 tallies"
    assert line_of(lines, "source").endswith(", simulated")


def test_lone_frame_is_no_highest_power(tmp_path):
    """One damaged frame that passed its check is told as unconfirmed, and makes neither highest nor worst."""
    forward, reflected = journals.counts(0)
    forward[20], reflected[30] = 60_000, 33_000
    path = journals.write(tmp_path / "log", journals.STRETCH, journals.told())
    journals.write(path, journals.block(journals.tallies(0, pair=(forward, reflected))))
    lines = report(path)
    watts = float(line_of(lines, "highest").split(" ")[0])
    assert float(line_of(lines, "unconfirmed").split(" ")[0]) > 2.5 * watts
    (row,) = [line for line in lines if line.startswith("  2026-09-23 04:00")]
    assert f" {watts:g} W" in row
    assert "open" not in row


def test_marks_are_told_in_order_with_how_long_the_link_was_away(tmp_path):
    """Losses have their length when the link is found; frequencies are in megahertz; the rest as it was noted."""
    us = journals.START_US
    marks = [
        Mark("link open", us, "open"),
        Mark("frequency", us, "told by the bridge", 14.025e6),
        Mark("link looking", us + 5_000_000, "gone"),
        Mark("link found", us + 80_000_000, "is back"),
        Mark("clock", us + 90_000_000, "the clock went +3.000 s", 3.0),
        Mark("gap", us + 95_000_000, "120 frames not kept in 1.2 s: the disk was behind", 1.2),
    ]
    lines = report(journals.write(tmp_path / "log", journals.STRETCH, *marks, journals.block(journals.tallies(0))), [])
    at = lines.index("What happened (UTC)")
    told = [line.strip().split("  ", 1)[1].split(None) for line in lines[at + 1 : at + 7]]
    assert [" ".join(words) for words in told] == [
        "link open open",
        "frequency 14.025 MHz, told by the bridge",
        "link looking gone",
        "link found is back, after 0:01:15",
        "clock the clock went +3.000 s",
        "gap 120 frames not kept in 1.2 s: the disk was behind",
    ]


def test_thousands_of_marks_are_cut_and_counted(tmp_path):
    """A bridge that tells another frequency all the time fills no report."""
    marks = [journals.told(14_000_000 + k, text="told by the bridge") for k in range(1000)]
    lines = report(journals.write(tmp_path / "log", journals.STRETCH, *marks, journals.block(journals.tallies(0))), [])
    assert len(lines) < 250
    assert "  and 800 more marks" in lines


def test_digest_is_the_last_block_s(contest):
    """What may be noted on paper is what the last block holds."""
    with sqlite3.connect(contest) as link:
        (digest,) = link.execute("SELECT digest FROM block ORDER BY id DESC LIMIT 1").fetchone()
    link.close()
    assert report(contest, [])[-1].strip() == digest.hex()


def test_damage_is_named_by_its_time(contest):
    """A block that cannot be read stands in the first line and by itself, and the rest is reported."""
    with sqlite3.connect(contest) as link:
        link.execute("UPDATE block SET missing = 7 WHERE id = 4")
    link.close()
    lines = report(contest)
    assert lines[0] == "complete but for 1 block that cannot be read, 04:59:57"
    at = lines.index("Cannot be read")
    assert lines[at + 1] == "  block 4, about 2026-09-23 04:59:57 UTC: does not agree with its CRC-32"
    assert line_of(lines, "frames") == "450 tallies"


def test_journal_without_tallies_is_reported(tmp_path):
    """An empty journal, and one of conditions only, give a report and no table."""
    path = journals.write(tmp_path / "log", journals.STRETCH)
    assert report(path, [])[0] == "complete"
    journals.write(path, journals.block(journals.timed(Conditions(0, 0, 1, 2, 3), 0)))
    lines = report(path, [])
    assert line_of(lines, "frames") == "1 conditions"
    assert not any(line.startswith("Hour by hour") for line in lines)


def test_counts_only_are_told_as_time(tmp_path):
    """Without a bridge file there is no power, and the report says for how long and why."""
    lines = report(journals.write(tmp_path / "log", journals.STRETCH, journals.block(journals.tallies(0))), [])
    assert "counts only  1.0 s" in "\n".join(lines)
    assert any("no bridge file" in line for line in lines)


def test_words_for_times_and_kinds():
    """Durations, times beyond the calendar, kinds of frames and runs of bad blocks have their words."""
    assert [lasting(s) for s in (0.0, 59.94, 60.0, 172_800.0)] == ["0.0 s", "59.9 s", "0:01:00", "48:00:00"]
    assert utc(1 << 62) == "time out of range"
    assert frame_kinds({-1: 1, 0: 2}) == [(1, "tally"), (2, "frames of a kind not known")]
    assert other_frames({-1: 5, 0x13: 2, 0x16: 1, 0x14: 1}) == "2 crests, 1 remark, 1 conditions"
    assert bad_blocks([]) == []
