"""The Link screen in a real terminal (tmux): reached by its key, at three sizes, with a journal beside it."""

import shutil
import sys

import pytest

from tests.tui.test_chip_watch import SIZES, Terminal

pytestmark = pytest.mark.skipif(not shutil.which("tmux"), reason="no terminal: apt install tmux")

WANTED = ("open, and frames come", "checksum", "forward", "the file says", "by bridge file", "recording to")


def test_link_tells_line_counts_and_journal_at_every_size(tmp_path):
    """`s` goes to Link; damage, both counts and what the readings are made by stand there without scrolling."""
    words = ("watch", "sim:knob=still&damage=0.2&seed=3", "--journal", str(tmp_path / "log"))
    with Terminal(sys.executable, "-m", "tui", *words) as terminal:
        screen = terminal.screen(lambda text: "journal" in text and "█" in text)
        assert "journal" in screen, screen
        terminal._tmux("send-keys", "-t", "screen", "s")
        for size in SIZES:
            terminal.resize(*size)
            screen = terminal.screen(lambda text: all(each in text for each in WANTED))
            for each in WANTED:
                assert each in screen, f"{each}\n{screen}"
