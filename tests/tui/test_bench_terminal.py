"""A whole bench on the simulated bridge in a real terminal (tmux), by keys alone, killed in the middle."""

from __future__ import annotations

import json
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

from bridgeio.bridge_file import load_bridge_file
from bridgeio.simulator.options import Scenario
from bridgeio.simulator.station import Station
from tests.terminal import Screen
from tests.tmux import ROOT, Tmux
from tui.__main__ import main

pytestmark = pytest.mark.skipif(not shutil.which("tmux"), reason="no terminal: apt install tmux")

#: What is typed at the questions of a new sheet, in their order; "" takes what is proposed.
ANSWERS = ("shed", "", "", "", "150", "0.3", "100", "100", "36", "2", "", "", "", "20m")
FREE = "takes it in hand"


def bench(folder: Path, path: Path) -> Tmux:
    """The Bench screen on the simulated bench."""
    return Tmux(folder, [sys.executable, "-m", "tui", "watch", "sim:", "--bench", str(path)])


def answer_questions(terminal: Tmux) -> None:
    """All questions of a new sheet."""
    terminal.wait("What is this bridge called?")
    for text, following in zip(ANSWERS, (*ANSWERS[1:], None), strict=True):
        before = terminal.screen()
        terminal.press(*([text] if text else []), "Enter")
        if following is not None:
            terminal.wait(lambda text, before=before: text.splitlines()[3:] != before.splitlines()[3:])


def begin_step(terminal: Tmux) -> None:
    """Choose, read the cautions, ready, key down."""
    terminal.press("Enter")
    terminal.wait("before you key")
    terminal.press("Enter")
    terminal.wait("Key down now")
    terminal.press("k")
    terminal.wait("key down (k)")


def take_step(terminal: Tmux, number: int) -> str:
    """A keyed step, whatever is suggested first; what the simulated wattmeter shows is typed where it is asked for."""
    begin_step(terminal)
    text = terminal.wait(lambda text: "(Enter: " in text or "Key up now" in text)
    if "(Enter: " in text:
        terminal.press(text.partition("wattmeter shows ")[2].split()[0], "Enter")
    text = terminal.wait("Key up now")
    assert f"step {number} is in the file" in text
    terminal.press("k")
    return terminal.wait(FREE)


def test_whole_bench_by_keys_alone_survives_a_kill_and_reads_truthfully(tmp_path):
    """Dark, powers, kill -9 in the middle of a step, turned, loads, fit: nothing taken is lost, sim: reads true."""
    path = tmp_path / "shed.toml"
    with bench(tmp_path, path) as terminal:
        answer_questions(terminal)
        terminal.wait("first fit")
        terminal.press("Enter")
        terminal.wait("before you key")
        terminal.press("Enter")
        terminal.wait("step 1 is in the file")
        terminal.wait(FREE)
        for number in (2, 3, 4):
            take_step(terminal, number)
        begin_step(terminal)
        terminal.wait("(Enter: ")
        terminal.kill()
    assert [step.kind for step in load_bridge_file(path).steps] == ["dark", "power", "power", "power"]
    with bench(tmp_path, path) as terminal:
        terminal.wait("taken 4")
        terminal.wait("key up")
        terminal.wait(FREE)
        number = 4
        for words in ("turned end for end", "into 25 ohm ", "into 100 ohm "):
            number += 1
            own_step(terminal, words)
            take_step(terminal, number)
        terminal.press("w")
        terminal.wait("fit id", 40.0)
        terminal.press("q")
        terminal.end()
    file = load_bridge_file(path)
    assert [step.kind for step in file.steps] == ["dark", "power", "power", "power", "reversed", "load", "load"]
    assert file.fit_id is not None
    reads_truthfully(path)


def own_step(terminal: Tmux, words: str) -> None:
    """A step of one's own for what a text of the list says."""
    kind, load = ("reversed", None) if "turned" in words else ("load", words.split()[1])
    terminal.press("n")
    for asked, text in (("kind", kind), ("frequency", "20m"), ("load", load), ("line", "0"), ("power", "1")):
        if load is not None or asked not in ("load", "line"):
            terminal.wait(lambda screen, asked=asked: screen.splitlines()[-1].lstrip().startswith(asked))
            terminal.press(text, "Enter")
    terminal.wait(lambda screen: "your own" in screen and "A step of" not in screen and FREE in screen)


def reads_truthfully(path: Path) -> None:
    """Loads on the simulated bridge, read by the file: truth lies within the intervals of SWR and forward power."""
    for antenna in ("100", "75", "30+20j"):
        options = f"antenna={antenna}&line=none&power=10&knob=still&frequency=14.175M"
        words = [
            sys.executable,
            "-m",
            "tui",
            "stream",
            f"sim:{options}&duration=1",
            "--bridge",
            str(path),
            "--count",
            "20",
        ]
        done = subprocess.run(words, cwd=ROOT, capture_output=True, text=True, timeout=30, check=True)
        reading = json.loads(done.stdout.splitlines()[-1])
        truth = Station(Scenario(antenna=antenna, line=None, power_w=10.0, knob="still", frequency_hz=14.175e6)).at(0.0)
        assert reading["swr_low"] <= float(truth.swr) <= reading["swr_high"], reading
        assert reading["forward_low_w"] <= float(truth.forward_w) <= reading["forward_high_w"], reading
        assert "simulated" in reading["flags"]


def test_a_wrong_file_is_told_in_words(tmp_path):
    """A file that is no bench sheet ends the screen with its faults and exit code 3."""
    path = tmp_path / "x.toml"
    path.write_text("schema = 1\n", encoding="utf-8")
    with Screen([sys.executable, "-m", "tui", "watch", "sim:", "--bench", str(path)]) as screen:
        assert screen.end() == 3
    assert b"bridge: is missing" in screen.written


@pytest.mark.parametrize("words", [["--screen", "bench"], ["--bench", "x.toml", "--plain"]])
def test_bench_without_file_or_screen_is_usage(words, capsys):
    """The screen without a file, or a file without a screen, is told in words with exit code 2."""
    assert main(["watch", "sim:", *words]) == 2
    assert "wanted a terminal" in (said := capsys.readouterr().err) or "needs a file: --bench FILE" in said
