"""`export` and `report`: what `stream` would have written, from a journal, and words for what is not there."""

import csv
import io
import json
import os
import sqlite3
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import pytest

from bridgeio.journal import Journal, Mark
from bridgeio.journal.book import Book
from bridgeio.rows import COLUMNS
from bridgeio.simulator import BRIDGE_FILE
from tests import journals
from tui.__main__ import main

ROOT = Path(__file__).parents[2]
EVIL = '=evil\x1b[2J\x9b31m\u202e\x07\n,"'
#: A board's name takes twelve bytes on the wire, but a journal may hold what it likes.
HOSTILE = replace(journals.PLATE, name=EVIL)


@pytest.fixture
def run(capsys):
    """Run the command line; gives exit code, standard output and standard error."""

    def command(*words):
        capsys.readouterr()
        code = main([str(word) for word in words])
        return (code, *capsys.readouterr())

    return command


@pytest.fixture
def contest(tmp_path):
    """A journal of four seconds with a frequency."""
    blocks = [journals.block(journals.conditions(k), journals.tallies(k)) for k in range(4)]
    return journals.write(tmp_path / "contest.journal", journals.STRETCH, *blocks)


def without_time(text):
    """JSON lines as dictionaries, times apart."""
    found = [json.loads(line) for line in text.splitlines()]
    return [row.pop("time") for row in found], found


def test_export_is_what_stream_gives_for_the_same_bytes(tmp_path, run):
    """The bytes of a stream, kept and streamed again: the same rows, now with a time."""
    raw, log = tmp_path / "raw", tmp_path / "log"
    source = f"file:{raw}"
    words = ["--bridge", BRIDGE_FILE]
    assert run("stream", "sim:pace=fast&duration=5&mode=key&crest=on", "--raw", raw)[0] == 0
    assert run("keep", source, log)[0] == 0
    streamed, exported = run("stream", source, *words), run("export", log, *words)
    assert (streamed[0], exported[0]) == (0, 0)
    (before, wanted), (times, found) = without_time(streamed[1]), without_time(exported[1])
    assert set(before) == {None}
    assert None not in times
    assert len(found) == len(wanted) == 500
    for mine, live in zip(found, wanted, strict=True):
        assert mine == {k: pytest.approx(v, rel=1e-9) if type(v) is float else v for k, v in live.items()}
    assert "not exported, being no tallies" in exported[2]
    assert "500 readings; the log is complete" in exported[2]


def test_csv_has_stream_s_columns_in_a_new_file(tmp_path, contest, run):
    """Header and rows go into the file named, nothing to standard output, and the same twice is refused."""
    path = tmp_path / "out.csv"
    words = ["export", contest, "--bridge", BRIDGE_FILE, "--format", "csv", "-o", path]
    code, out, _ = run(*words)
    assert (code, out) == (0, "")
    with open(path, newline="", encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    assert list(rows[0]) == list(COLUMNS)
    assert len(rows) == 200
    before = path.read_bytes()
    code, out, err = run(*words)
    assert (code, out, path.read_bytes()) == (3, "", before)
    assert err == f"bridgewright: {path}: cannot be made: File exists; -o wants the name of a new file\n"


def test_hostile_names_are_inert(tmp_path, run):
    """A name from a nameplate is text in a cell, runs no formula and drives no terminal; notes and marks neither."""
    stretch = replace(journals.STRETCH, nameplate=HOSTILE, source=EVIL)
    marks = [Mark(EVIL, journals.START_US, EVIL), Mark("note", journals.START_US, EVIL * 3)]
    path = journals.write(tmp_path / "log", stretch, *marks, journals.block(journals.tallies(0)))
    for words in (["export", path], ["export", path, "--format", "csv"], ["report", path]):
        code, out, err = run(*words)
        assert code == 0
        assert all(char.isprintable() or char == "\n" for char in out + err)
        assert "\u202e" not in out + err
        assert "evil" in out
    rows = list(csv.DictReader(io.StringIO(run("export", path, "--format", "csv")[1])))
    assert rows[0]["bridge"].startswith("'=evil\\x1b[2J")
    assert json.loads(run("export", path)[1].splitlines()[0])["bridge"] == EVIL


def test_only_a_span_is_exported(contest, run):
    """--from and --to take UTC, with or without saying so; what is no time is usage."""
    code, out, _ = run("export", contest, "--from", "2026-09-23T04:12:01", "--to", "2026-09-23T06:12:02+02:00")
    times, _ = without_time(out)
    assert (code, times[0], times[-1]) == (0, "2026-09-23T04:12:01.000Z", "2026-09-23T04:12:01.980Z")
    for wrong in ("yesterday", "\x1b[2J", "9" * 40):
        code, out, err = run("export", contest, "--from", wrong)
        assert (code, out) == (2, "")
        assert "is no time; wanted a date and a time in UTC such as" in err
        assert "\x1b" not in err


def damage(path, sql):
    """Another hand at the journal."""
    with sqlite3.connect(path) as link:
        link.execute(sql)
    link.close()


def test_damaged_block_costs_itself_and_the_exit_code(contest, run):
    """What is sound comes out, the rest is named by its time, and the exit code is 3."""
    damage(contest, "UPDATE block SET missing = 9 WHERE id = 2")
    code, out, err = run("export", contest)
    assert (code, len(out.splitlines())) == (3, 150)
    assert "block 2, about 2026-09-23 04:12:00 UTC: does not agree with its CRC-32" in err
    code, out, err = run("report", contest)
    assert (code, err) == (3, "")
    assert out.startswith("complete but for 1 block that cannot be read, 04:12:00\n")


def test_journal_of_which_nothing_can_be_read(contest, run):
    """With every block damaged there are no rows, and words instead of a traceback."""
    damage(contest, "UPDATE block SET packed = x'00'")
    code, out, err = run("export", contest)
    assert (code, out) == (3, "")
    assert "0 readings; the log is complete but for 4 blocks that cannot be read" in err


@pytest.mark.parametrize("command", ["export", "report"])
def test_what_is_no_journal_is_refused_in_words(tmp_path, run, command):
    """A missing file, a folder, a text, an empty file and another program's database leave with 3 and one line."""
    text, empty, other = (tmp_path / name for name in ("notes.txt", "empty", f"other{EVIL[1:9]}"))
    text.write_text("words " * 200)
    empty.touch()
    damage(other, "CREATE TABLE t (x)")
    for path in (tmp_path / "none", tmp_path, text, empty, other):
        code, out, err = run(command, path)
        assert (code, out) == (3, "")
        assert err.startswith("bridgewright: ")
        assert len(err.splitlines()) == 1
        assert "\x1b" not in err


def test_report_tells_a_bridge_file_from_a_journal(contest, run):
    """By content, whatever the name."""
    disguised = contest.rename(contest.with_name("x.bridge.toml"))
    assert run("report", disguised)[0] == 0
    code, out, err = run("report", BRIDGE_FILE)
    assert (code, "Traceback" in out + err) in ((0, False), (3, False))
    assert out or f"{BRIDGE_FILE}: is a bridge file" in err


def test_both_work_while_another_writes(contest, run):
    """A journal that is open for writing is exported and reported as far as it is."""
    book = Book(contest)
    book.write([journals.STRETCH, journals.block(journals.tallies(9))])
    try:
        code, out, _ = run("export", contest)
        assert (code, len(out.splitlines())) == (0, 250)
        assert run("report", contest)[1].startswith("complete\n")
        book.write([journals.block(journals.tallies(10))])
    finally:
        book.close()
    with Journal(contest) as journal:
        assert journal.account().words == "complete"


def test_rows_are_written_as_they_are_read(tmp_path):
    """A reader that leaves after ten rows of an hour ends the export at once and without a word."""
    path = tmp_path / "log"
    journals.long_journal(path, 3600)
    reading, writing = os.pipe()
    child = subprocess.Popen(
        [sys.executable, "-m", "tui", "export", str(path)], cwd=ROOT, stdout=writing, stderr=subprocess.PIPE
    )
    os.close(writing)
    with open(reading, "rb") as rows:
        assert [json.loads(rows.readline())["averaged"] for _ in range(10)] == [1] * 10
    assert child.communicate(timeout=60) == (None, b"")
    assert child.returncode == 0
