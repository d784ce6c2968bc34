"""Every byte that the screens write to a terminal, under hostile outside text, is in the grammar of what is allowed."""

from __future__ import annotations

import itertools
import os
import shlex
import shutil
import subprocess
import sys
import threading
import time
import tty
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import numpy as np
import pytest

from bridgeio.frames import Item, Nameplate, Remark, Tallies
from bridgeio.framing import pack
from tests import fitted
from tests.terminal import HOSTILE, ROOT, Screen, residue
from tui.screens import SCREENS

#: Each text stands for about half a paint, so that in some rounds on some screen every one is drawn [s].
_A_TEXT_S = 0.025
#: A name for folders and ports that would do most of it at once.
EVIL = "a\x1b]2;owned\x07\x1b[2J\x9b31m\u202e[red]"
#: The screens that key `s` goes round; the bench is among them only with its file.
ROUND = [name for name in SCREENS if name != "bench"]


def fits(text: str, room: int) -> str:
    """As much of a text as a field of the wire holds; NUL ends it there."""
    return text.replace("\0", "").encode("utf-8", "replace")[:room].decode("utf-8", "ignore")


def frames(number: int, text: str, ms: int) -> list[Item]:
    """What a hostile board sends: its name, what it has to say, and two tallies of a carrier."""
    plate = Nameplate(number % 256, ms, 0, 1 + number % 250, 0, 10, 1, 4095, 0, 0, 0, 1, fits(text, 12))
    remark = Remark((number + 1) % 256, ms, number % 256, number, fits(text, 24))
    counts = np.array([2000.0, 2001.0]), np.array([300.0, 301.0])
    seq = (np.array([number + 2, number + 3]) % 256).astype(np.uint8)
    tallies = Tallies(seq, np.array([ms + 10, ms + 20], dtype=np.uint32), *counts, np.zeros(2, dtype=np.uint8))
    return [plate, remark, tallies]


class HostileBoard:
    """A board behind a port of a hostile name, that goes through all hostile texts again and again."""

    def __init__(self, folder: Path) -> None:
        self._master, slave = os.openpty()
        tty.setraw(slave)
        self.path = folder / f"tty{EVIL}"
        self.path.symlink_to(os.ttyname(slave))
        self._slave = slave
        self.sent = 0
        self._stop = threading.Event()
        self._thread = threading.Thread(target=self._talk, daemon=True)
        self._thread.start()

    def a_round_more(self, timeout_s: float = 30.0) -> None:
        """Wait until all texts have been sent once more."""
        goal, end_s = self.sent + len(HOSTILE), time.monotonic() + timeout_s
        while self.sent < goal:
            assert time.monotonic() < end_s
            time.sleep(0.02)

    def unplug(self) -> None:
        """Pull the plug."""
        if self._thread.is_alive():
            self._stop.set()
            self._thread.join(10)
            os.close(self._slave)
            os.close(self._master)

    def _talk(self) -> None:
        for number in itertools.count():
            self.sent = number
            text = HOSTILE[number % len(HOSTILE)]
            ms = 20 * number
            data = b"".join(pack(item) for item in frames(4 * number, text, ms))
            try:
                os.set_blocking(self._master, False)
                os.write(self._master, data)
            except BlockingIOError:
                pass  # nobody reads yet: what does not fit is lost, as on a wire
            if self._stop.wait(_A_TEXT_S):
                return


@contextmanager
def hostile_board(folder: Path) -> Iterator[HostileBoard]:
    """A hostile board, unplugged at the end."""
    board = HostileBoard(folder)
    try:
        yield board
    finally:
        board.unplug()


def hostile_bridge(folder: Path, name: str) -> Path:
    """A fitted bridge file of a hostile name in a place of a hostile name."""
    place = folder / EVIL
    place.mkdir(exist_ok=True)
    quoted = '"' + "".join(f"\\U{ord(char):08X}" for char in name) + '"'
    path = place / "bridge.toml"
    path.write_text(fitted.bridge_text(12).replace('"garden shed bridge (12 bit)"', quoted), encoding="utf-8")
    return path


def words_for(board: HostileBoard, bridge: Path, journal: Path) -> list[str]:
    """The command that shows all of it."""
    words = ["watch", str(board.path), "--bridge", str(bridge), "--frequency", "14.1M", "--journal", str(journal)]
    return [sys.executable, "-m", "tui", *words]


@pytest.mark.parametrize(
    ("columns", "lines", "env"),
    [(120, 40, {}), (40, 20, {"LC_ALL": "C", "NO_COLOR": "1"})],
    ids=["wide", "narrow, ascii, no colour"],
)
def test_no_screen_lets_outside_text_drive_the_terminal(tmp_path, columns, lines, env):
    """Names of board, bridge, port and folder, remarks and errors on each screen, help and prompt: no residue."""
    bridge = hostile_bridge(tmp_path, "".join(HOSTILE[:40])[:200])
    with (
        hostile_board(tmp_path) as board,
        Screen(words_for(board, bridge, tmp_path / EVIL / "log"), columns, lines, env) as screen,
    ):
        screen.wait_for("forward" if columns > 40 else "SWR")
        board.a_round_more()
        for _ in ROUND:
            screen.type("s")
            board.a_round_more()
        for opens, closes in (("?", "\x1b"), ("f", "\x1b")):
            screen.type(opens)
            board.a_round_more()
            screen.type(closes)
            board.a_round_more()  # Escape and a key right behind it would be one key
        before = len(screen.written)
        board.unplug()
        screen.wait_for("stale", after=before)
        screen.type("q")
        assert screen.end() == 0
    assert residue(screen.written, bells=2) == []
    assert b"\\x1b" in screen.written


def test_an_error_that_ends_the_screen_is_harmless_too(tmp_path):
    """A bridge file that is wrong in a place of a hostile name: words on the terminal, no residue, exit code 3."""
    bridge = hostile_bridge(tmp_path, "x")
    bridge.write_text(f'schema = 1\n[bridge]\nname = "x"\n"{EVIL[-5:]}" = "\\u001b[2J"\n', encoding="utf-8")
    with Screen([sys.executable, "-m", "tui", "watch", "sim:", "--bridge", str(bridge)]) as screen:
        assert screen.end() == 3
    assert residue(screen.written) == []
    assert b"\\x1b" in screen.written


def test_bench_lets_no_outside_text_drive_the_terminal(tmp_path):
    """The bench's questions, body, news and prompt before a hostile board, a file of a hostile name: no residue."""
    (tmp_path / EVIL).mkdir()
    sheet = tmp_path / EVIL / "x.toml"
    with (
        hostile_board(tmp_path) as board,
        Screen([sys.executable, "-m", "tui", "watch", str(board.path), "--bench", str(sheet)]) as screen,
    ):
        seen = screen.wait_for("What is this bridge called?")
        screen.type("\r")
        seen = screen.wait_for("What line", seen)
        for answer in 13 * ("\r",):
            screen.type(answer)
        seen = screen.wait_for("Choose a step", seen)
        screen.type("\r")
        seen = screen.wait_for("before you key", seen)
        screen.type("\r")
        board.a_round_more()
        board.unplug()
        screen.wait_for("unplugged", seen)
        screen.type("q")
        assert screen.end() == 0
    assert sheet.exists()
    assert residue(screen.written) == []
    assert b"\\x1b" in screen.written


@pytest.mark.skipif(not shutil.which("tmux"), reason="no terminal: apt install tmux")
def test_title_and_clipboard_stay_as_they_were(tmp_path):
    """In tmux, which lets programs set both: the pane keeps its title and no buffer is filled."""
    bridge = hostile_bridge(tmp_path, EVIL)

    def tmux(*words: str) -> str:
        command = ["tmux", "-S", str(tmp_path / "tmux"), *words]
        return subprocess.run(command, capture_output=True, text=True, check=True).stdout

    with hostile_board(tmp_path) as board:
        command = shlex.join(words_for(board, bridge, tmp_path / "log"))
        opened = ("new-session", "-d", "-x", "120", "-y", "40", "-c", str(ROOT), command)
        try:
            tmux(*opened)
            tmux("set-option", "-g", "set-clipboard", "on")
            tmux("set-option", "-g", "allow-rename", "on")
            title = tmux("display-message", "-p", "#{pane_title}")
            board.a_round_more()
            for _ in ROUND:
                tmux("send-keys", "s")
                board.a_round_more()
            shown = tmux("capture-pane", "-p")
            assert tmux("display-message", "-p", "#{pane_title}") == title
            assert "owned" not in title
            assert tmux("list-buffers") == ""
            assert "forward" in shown or "frames" in shown
        finally:
            tmux("kill-server")


@pytest.mark.parametrize("text", ["\x1b[2Jx", "\x9b31m", "\x1b]0;x\x07", "\u202e", "\x08", "\x1b[38;5;199mx"])
def test_the_grammar_itself_sees_what_drives_a_terminal(text):
    """A residue is found where such a text is written as it is; without it nothing is."""
    harmless = "\x1b[1;1H\x1b[38;2;1;2;3mSWR 1.4\x1b[0m\r\n"
    assert residue(f"{harmless}{text}".encode())
    assert residue(harmless.encode()) == []
