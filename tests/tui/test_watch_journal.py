"""`watch --journal`: what comes is kept before it is read; trouble with the file is told before a port is opened."""

import re
import subprocess
import sys
import threading
from pathlib import Path

import pytest

from bridgeio.bridge_file import parse_bridge_file
from bridgeio.desk import Desk
from bridgeio.errors import FileError, JournalHeld
from bridgeio.frames import Nameplate, Tallies
from bridgeio.framing import pack
from bridgeio.journal import Journal, Stretch, Writer
from bridgeio.ports import EndOfSource
from bridgeio.receiver import Receiver
from bridgeio.simulator import BRIDGE_FILE
from tui.__main__ import main
from tui.live_feed import Keeping, LiveFeed

ROOT = Path(__file__).parents[2]
FAST = "sim:pace=fast&duration=5"
SIM_TEXT = BRIDGE_FILE.read_text(encoding="utf-8")


class Pieces:
    """A source that gives prepared pieces."""

    name, simulated, live = "pieces", False, True

    def __init__(self, *pieces):
        self._pieces, self.opened, self.ended = list(pieces), False, threading.Event()

    def open(self):
        self.opened = True

    def read(self):
        if self._pieces:
            return self._pieces.pop(0)
        self.ended.set()
        raise EndOfSource("no more")

    def close(self):
        """Nothing to close."""


def tallies(first=0, count=20):
    """Frames on the wire."""
    numbers = range(first, first + count)
    return pack(Tallies.of(numbers, [10 * n for n in numbers], [1000 + n for n in numbers], 50))


def plate(device_id):
    """A board that the simulated bridge's file may read."""
    return pack(Nameplate(0, 0, 0, 9, device_id, 10, 16, 65520, 2500, 2, 0, 1, "board"))


def kept(path, source, desk=None, files=None, act=lambda feed: None):
    """What a feed posts that keeps a journal, up to the end of its source."""
    posted = []
    feed = LiveFeed(lambda: (source, Receiver(), desk or Desk()), lambda _: Keeping(str(path), files or {}))
    feed.start(posted.append)
    assert source.ended.wait(10.0)
    act(feed)
    feed.stop()
    return posted


def test_feed_keeps_every_frame_and_tells_how_recording_stands(tmp_path):
    """All tallies are in the journal; each snapshot carries its state."""
    posted = kept(tmp_path / "log", Pieces(b"\0", tallies(), tallies(20)))
    with Journal(tmp_path / "log") as journal:
        assert [count for timed in journal.tallies() for count in timed.item.forward] == [1000.0 + n for n in range(40)]
        assert not journal.bad
    assert [posted[0].journal.phase, posted[-1].journal.phase] == ["recording", "closed"]


def test_feed_keeps_what_it_fails_to_read(tmp_path):
    """The journal has the frames before anything is made of them: a fault in the reading takes none of it."""

    class Broken(Desk):
        def take(self, items, arrival_s):
            source.ended.set()
            raise ZeroDivisionError("a fault of ours")

    source = Pieces(b"\0", tallies())
    with pytest.raises(ZeroDivisionError):
        kept(tmp_path / "log", source, Broken())
    with Journal(tmp_path / "log") as journal:
        assert sum(len(timed.item) for timed in journal.tallies()) == 20


def test_frequency_typed_becomes_a_mark(tmp_path):
    """With its value and by whom it was told."""
    kept(tmp_path / "log", Pieces(b"\0", tallies()), act=lambda feed: feed.set_frequency(7.1e6))
    with Journal(tmp_path / "log") as journal:
        marks = [(mark.kind, mark.value, mark.text) for mark in journal.marks]
    assert ("frequency", 7.1e6, "typed by the operator") in marks


def test_bridge_file_in_force_is_stored_with_the_stretch(tmp_path):
    """Of two files the one made for the board that talks, once it has named itself."""
    texts = {name: SIM_TEXT.replace("51B0B41D", device) for name, device in (("a.toml", "A"), ("b.toml", "B"))}
    desk = Desk([parse_bridge_file(text, name) for name, text in texts.items()])
    kept(tmp_path / "log", Pieces(b"\0", plate(0xB), tallies(), tallies(20)), desk, texts)
    with Journal(tmp_path / "log") as journal:
        files = [stretch.bridge_file for stretch in journal.stretches.values()]
    assert files[0] == ""
    assert files[-1] == texts["b.toml"]
    assert texts["a.toml"] not in files


@pytest.mark.parametrize("trouble", ["held", "no journal"])
def test_journal_that_cannot_be_written_leaves_the_port_alone(tmp_path, trouble):
    """Held by another, or no journal: told before the source is opened."""
    path, source = tmp_path / "log", Pieces(b"\0")
    if trouble == "held":
        writer = Writer(path, Stretch("other", 0))
    else:
        path.write_text("dear diary", encoding="utf-8")
    feed = LiveFeed(lambda: (source, Receiver(), Desk()), lambda _: Keeping(str(path)))
    with pytest.raises(JournalHeld if trouble == "held" else FileError):
        feed.start(lambda snapshot: None)
    feed.stop()
    assert not source.opened
    if trouble == "held":
        writer.stop()


def test_watch_plain_keeps_a_journal_and_says_so(tmp_path, capsys):
    """All of the simulation, read by the simulated bridge's own file, which is stored with it."""
    path = tmp_path / "log"
    assert main(["watch", FAST, "--plain", "--journal", str(path)]) == 0
    assert f"recording to {path}" in capsys.readouterr().err
    with Journal(path) as journal:
        assert sum(len(timed.item) for timed in journal.tallies()) == 500
        assert list(journal.stretches.values())[-1].bridge_file == SIM_TEXT


def test_watch_of_a_held_journal_leaves_with_six(tmp_path, capsys):
    """The exit code of `keep`, in words."""
    writer = Writer(tmp_path / "log", Stretch("other", 0))
    try:
        assert main(["watch", FAST, "--plain", "--journal", str(tmp_path / "log")]) == 6
    finally:
        writer.stop()
    assert "log" in capsys.readouterr().err


def test_watch_into_what_is_no_journal_leaves_with_three(tmp_path, capsys):
    """A file that is something else is not overwritten."""
    path = tmp_path / "log"
    path.write_text("dear diary", encoding="utf-8")
    assert main(["watch", FAST, "--plain", "--journal", str(path)]) == 3
    assert "wanted" in capsys.readouterr().err or path.read_text(encoding="utf-8") == "dear diary"
    assert path.read_text(encoding="utf-8") == "dear diary"


@pytest.mark.parametrize(
    ("name", "words"),
    [
        ("lnk", "there is no screen 'lnk'; did you mean link?"),
        ("Link", "did you mean link?"),
        ("xyzzy", "known: tune-up"),
    ],
)
def test_watch_of_an_unknown_screen_tells_a_near_miss(name, words, capsys):
    """Exit code 2, the near miss, and what there is."""
    assert main(["watch", FAST, "--screen", name]) == 2
    assert words in capsys.readouterr().err


def test_plain_tells_the_boards_caution_once(tmp_path, capsys):
    """A board with another fit than the file's: one sentence, however many readings follow."""
    path = tmp_path / "capture"
    board = pack(Nameplate(0, 0, 0, 9, 0x51B0B41D, 10, 16, 65520, 2500, 2, 0xBEEF, 1, "board"))
    path.write_bytes(b"\0" + b"".join([board, tallies(1), board, tallies(22)]))
    assert main(["watch", f"file:{path}", "--plain", "--rate", "1000", "--bridge", str(BRIDGE_FILE)]) == 0
    said = capsys.readouterr()
    assert said.err.count("the board was given fit BEEF") == 1


def test_journal_is_whole_when_the_program_is_interrupted(tmp_path):
    """Ctrl-C in the plain form closes the journal like any other end."""
    path = tmp_path / "log"
    words = [sys.executable, "-m", "tui", "watch", "sim:", "--plain", "--journal", str(path)]
    with subprocess.Popen(words, cwd=ROOT, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True) as child:
        assert re.match("SWR|no carrier", child.stdout.readline())
        child.send_signal(2)
        child.communicate(timeout=20)
    assert child.returncode == 130
    with Journal(path) as journal:
        assert not journal.bad
        assert sum(len(timed.item) for timed in journal.tallies()) > 0
