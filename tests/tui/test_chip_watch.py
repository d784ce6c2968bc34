"""The live screen before a running chip, in a real terminal (tmux), until the plug is pulled.

The screens are captured once and judged by many tests; what they must show is what was connected.
"""

from __future__ import annotations

import functools
import os
import re
import shlex
import shutil
import subprocess
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from types import TracebackType
from typing import Self

import numpy as np
import numpy.typing as npt
import pytest

from bridgeio.simulator.options import Scenario
from bridgeio.simulator.station import Station
from tests.mcu import bench
from tests.mcu.board import Board, needs_board, workshop

pytestmark = [needs_board, pytest.mark.skipif(not shutil.which("tmux"), reason="no terminal: apt install tmux")]

#: Columns and lines, in the order they are tried; the last again with the plug pulled.
SIZES = ((120, 40), (40, 20), (80, 24))
#: 40 columns have no room for the name.
NAMED = 60
ALIVE = "█"  # large figures, mark and ribbon of a live reading; an old one falls into dots
PATIENCE_S = 10.0
#: What stays on the screen is marked as past, beside the reason.
UNPLUGGED = r"(?s)stale: /dev/\S+ is gone: it was unplugged.*\bwas (?:counts )?\d"
#: "Within about a second", and a busy machine.
UNPLUGGED_S = 1.5


@functools.cache
def station() -> Station:
    """38 W into a dipole that is 250 kHz off."""
    return Station(Scenario(power_w=40.0, detune_khz=250.0, knob="still"))


def millivolts() -> npt.NDArray[np.float64]:
    """What the chip's pins carry: the same for 40 s, then the last conversion for ever."""
    forward, reflected = station().port_peaks_v(np.zeros(1))
    return bench.pin_millivolts([(float(forward[0]), float(reflected[0]))], 4000, seed=3)


class Terminal:
    """A program in a tmux window on a socket of its own."""

    def __init__(self, *words: str) -> None:
        self._socket = str(workshop() / "tmux")
        self._words = shlex.join(words)

    def __enter__(self) -> Self:
        columns, lines = SIZES[0]
        size = ("-x", str(columns), "-y", str(lines))
        # What a program said that could not start stays to be seen.
        stay = ("start-server", ";", "set-option", "-g", "remain-on-exit", "on", ";")
        self._tmux(*stay, "new-session", "-d", "-s", "screen", *size, "-c", str(bench.ROOT), self._words)
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._tmux("kill-server")

    def resize(self, columns: int, lines: int) -> None:
        """Another size."""
        self._tmux("resize-window", "-t", "screen", "-x", str(columns), "-y", str(lines))

    def screen(self, condition: Callable[[str], bool] = lambda text: True) -> str:
        """The screen's text once it meets the condition; as it is where it never does."""
        deadline = time.monotonic() + PATIENCE_S
        while not condition(text := self._tmux("capture-pane", "-p", "-t", "screen")):
            if time.monotonic() > deadline:
                break
            time.sleep(0.02)
        return text

    def _tmux(self, *words: str) -> str:
        command = ["tmux", "-u", "-S", self._socket, "-f", "/dev/null", *words]
        # readline puts the size of pytest's own terminal there, and a program believes it more than its terminal.
        own = {name: value for name, value in os.environ.items() if name not in ("COLUMNS", "LINES", "NO_COLOR")}
        done = subprocess.run(command, capture_output=True, text=True, timeout=PATIENCE_S, check=False, env=own)
        assert done.returncode == 0, done.stderr
        return done.stdout


@dataclass
class Watched:
    """Screens by size, the one after the plug was pulled, and how long that took to show [s]."""

    live: dict[tuple[int, int], str] = field(default_factory=dict)
    unplugged: str = ""
    unplugged_s: float = 0.0


@functools.cache
def watched(bridge: Path, mark: str) -> Watched:
    """`bridgewright watch` of the running chip by a bridge file, each screen taken when it shows `mark`, a pattern."""
    seen = Watched()
    with Board(bench.waveform(millivolts()), firmware=bench.firmware(), paced=True) as board:
        read_by = ("--bridge", str(bridge), "--frequency", "14.1M")
        with Terminal(sys.executable, "-m", "tui", "watch", board.path, *read_by) as terminal:
            screen = terminal.screen(lambda text: bench.held_exclusively(board.path))
            assert bench.held_exclusively(board.path), f"the port was not opened\n{screen}"
            board.run()
            for size in SIZES:
                terminal.resize(*size)
                seen.live[size] = terminal.screen(functools.partial(drawn, *size, mark))
            began_s = time.monotonic()
            board.quit()
            seen.unplugged = terminal.screen(lambda text: bool(re.search(UNPLUGGED, text)) and ALIVE not in text)
            seen.unplugged_s = time.monotonic() - began_s
    return seen


def drawn(columns: int, lines: int, mark: str, text: str) -> bool:
    """Whether a screen shows `mark` and is drawn for this size: frequency on top, keys at the bottom, scale across."""
    rows = text.splitlines()
    framed = len(rows) == lines and "14.100 MHz" in rows[0] and "quit" in rows[-1]
    across = any(row.endswith("┤") and len(row) == columns - 1 for row in rows)
    return framed and across and re.search(mark, text) is not None


def calibrated() -> Watched:
    """Read by the chip's own bridge file."""
    return watched(bench.bridge_file(), r"(?s)\d-\d.*(returned|back) \d")


def uncalibrated() -> Watched:
    """Read by a file made for another converter."""
    return watched(bench.wrong_bridge_file(), r"(?s)counts \d+ / \d+.*forward.*uncalibrated")


@pytest.mark.parametrize("size", SIZES, ids=str)
def test_screen_shows_swr_with_an_interval_that_holds_the_truth(size: tuple[int, int]) -> None:
    """The interval beside the large figures holds the true SWR, at every size."""
    screen = calibrated().live[size]
    interval = re.search(r"(\d+\.\d+)-(\d+\.\d+)", screen)
    assert " SWR " in screen, screen
    assert ALIVE in screen, screen
    assert interval, screen
    assert float(interval[1]) <= float(station().at(0.0).swr) <= float(interval[2]), screen


@pytest.mark.parametrize("size", SIZES, ids=str)
def test_screen_shows_power(size: tuple[int, int]) -> None:
    """Forward and net power stand on the screen, within the wattmeter's and the leak's 15 % of the truth."""
    screen, truth = calibrated().live[size], station().at(0.0)
    forward, net = re.search(r"^ *(?:forward )?(\d+) W", screen, re.MULTILINE), re.search(r"net (\d+)", screen)
    assert forward, screen
    assert net, screen
    assert float(forward[1]) == pytest.approx(float(truth.forward_w), rel=0.15)
    assert float(net[1]) == pytest.approx(float(truth.net_w), rel=0.15)


@pytest.mark.parametrize("size", [size for size in SIZES if size[0] >= NAMED], ids=str)
def test_screen_names_the_bridge(size: tuple[int, int]) -> None:
    """The bridge file's name stands on the first line."""
    assert "chip bridge" in calibrated().live[size].splitlines()[0]


def test_unplugged_bridge_is_told_within_a_second() -> None:
    """Pull the plug: in about a second the screen says in words that the port is gone."""
    seen = calibrated()
    assert re.search(UNPLUGGED, seen.unplugged), seen.unplugged
    assert seen.unplugged_s < UNPLUGGED_S


def test_number_of_an_unplugged_bridge_is_not_shown_as_alive() -> None:
    """What stays on the screen says `was`, and large figures, mark and ribbon have lost their body."""
    screen = calibrated().unplugged
    for words in (r"was \d+\.\d+-\d+\.\d+", r"net was \d+ W", r"forward was \d+ W"):
        assert re.search(words, screen), screen
    assert ALIVE not in screen, screen


@pytest.mark.parametrize("size", SIZES, ids=str)
def test_wrong_bridge_file_shows_counts_only(size: tuple[int, int]) -> None:
    """With the file of a 12-bit converter the screen has the chip's counts, `uncalibrated`, and no watt and no SWR."""
    screen, sent = uncalibrated().live[size], bench.counts(millivolts())
    counts = re.search(r"counts (\d+) / (\d+)", screen)
    assert counts, screen
    for side in (0, 1):
        assert sent[:, side].min() <= int(counts[side + 1]) <= sent[:, side].max()
    assert "SWR uncalibrated" in screen, screen
    assert ALIVE not in screen, screen
    assert not re.search(r"\d W|\d-\d", re.sub(r"\| +\d+ W", "", screen)), screen


@pytest.mark.parametrize("size", [size for size in SIZES if size[0] >= NAMED], ids=str)
def test_wrong_bridge_file_is_told_on_the_screen(size: tuple[int, int]) -> None:
    """Both full scales stand on the screen in words."""
    screen = uncalibrated().live[size]
    assert "counts only: full scale is 16368 on the bridge and 4095 in bridge file" in screen, screen


def test_counts_of_an_unplugged_bridge_are_not_shown_as_alive() -> None:
    """Pull the plug: the counts say `was`, beside words on the link."""
    seen = uncalibrated()
    assert re.search(r"was counts \d+ / \d+", seen.unplugged), seen.unplugged
    assert re.search(UNPLUGGED, seen.unplugged), seen.unplugged
