"""`keep`: what came is in the journal, whoever ends it, and one journal has one writer."""

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

from bridgeio.journal import Journal
from bridgeio.simulator import BRIDGE_FILE

ROOT = Path(__file__).parents[2]


def keep(*words, before=()):
    """The command as a child; `before`: what starts it."""
    return subprocess.Popen(
        [*before, sys.executable, "-m", "tui", "keep", *map(str, words)],
        cwd=ROOT,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )


def until(condition, timeout_s=20.0):
    """Wait for a condition."""
    end_s = time.monotonic() + timeout_s
    while not condition():
        assert time.monotonic() < end_s
        time.sleep(0.02)


def blocks(path):
    """How many blocks a reader finds; 0 while there is no journal yet."""
    if not path.exists() or not path.stat().st_size:
        return 0
    with Journal(path) as journal:
        return sum(1 for _ in journal.blocks())


def test_keep_records_all_that_a_source_sends(tmp_path):
    """A simulation of 30 s, as fast as it goes: every tally is in the journal, with bridge file and frequency."""
    path = tmp_path / "log"
    child = keep("sim:pace=fast&duration=30", path, "--bridge", BRIDGE_FILE)
    told, words = child.communicate(timeout=60)
    assert child.returncode == 0, words
    assert "complete" in told
    with Journal(path) as journal:
        tallies = sum(len(timed.item) for timed in journal.tallies())
        (stretch, *_) = list(journal.stretches.values())[-1:]
        marks = {mark.kind: mark.value for mark in journal.marks}
        assert journal.account().missing == 0
    assert tallies == 3000
    assert stretch.simulated
    assert stretch.bridge_file == BRIDGE_FILE.read_text(encoding="utf-8")
    assert stretch.nameplate.name == "sim bridge"
    assert marks["frequency"] == 14.1e6


def test_keep_ends_whole_at_a_signal_and_goes_on_in_the_same_journal(tmp_path):
    """SIGTERM, SIGINT and SIGHUP end it with exit code 0 and a complete journal; the next run continues the file."""
    path = tmp_path / "log"
    for number in (signal.SIGTERM, signal.SIGINT, signal.SIGHUP):
        before = blocks(path)
        child = keep("sim:", path)
        until(lambda before=before: blocks(path) > before)
        child.send_signal(number)
        told, words = child.communicate(timeout=20)
        assert child.returncode == 0, words
        assert "complete" in told
    assert not path.with_name("log-lock").exists()
    with Journal(path) as journal:
        assert not journal.bad


def test_keep_survives_being_killed(tmp_path):
    """kill -9 in the middle: what was committed is there, and the next run goes on."""
    path = tmp_path / "log"
    child = keep("sim:", path)
    until(lambda: blocks(path) >= 2)
    found = blocks(path)
    child.kill()
    child.communicate(timeout=20)
    assert blocks(path) >= found
    again = keep("sim:pace=fast&duration=3", path)
    assert again.communicate(timeout=30)[0]
    assert again.returncode == 0
    assert blocks(path) > found


def test_keep_has_one_writer_a_journal(tmp_path):
    """A second one leaves with exit code 6 and names the first one's process."""
    path = tmp_path / "log"
    first = keep("sim:", path)
    until(lambda: blocks(path) > 0)
    second = keep("sim:", path)
    words = second.communicate(timeout=20)[1]
    first.terminate()
    first.communicate(timeout=20)
    assert second.returncode == 6
    assert str(first.pid) in words


def test_keep_must_be_told_its_source(tmp_path):
    """Without a source, or with one that cannot be opened, nothing is simulated in its place."""
    child = keep(tmp_path / "log")
    assert "SOURCE" in child.communicate(timeout=20)[1] or child.returncode == 2
    assert child.returncode == 2
    child = keep("/dev/nothing-here", tmp_path / "log")
    words = child.communicate(timeout=20)[1]
    assert child.returncode == 4
    assert "/dev/nothing-here" in words
    assert os.listdir(tmp_path)


def test_keep_outlives_its_terminal_where_that_was_asked_for(tmp_path):
    """Under nohup SIGHUP stops nothing: blocks go on coming after it."""
    path = tmp_path / "log"
    child = keep("sim:", path, before=("nohup",))
    try:
        until(lambda: blocks(path) > 0)
        child.send_signal(signal.SIGHUP)
        seen = blocks(path)
        until(lambda: blocks(path) > seen + 1)
        child.send_signal(signal.SIGTERM)
        _, words = child.communicate(timeout=20)
        assert child.returncode == 0, words
    finally:
        child.kill()
