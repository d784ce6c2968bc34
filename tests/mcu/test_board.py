"""The simulated board itself: what the other tests may rely on when they run the program against it."""

from __future__ import annotations

import fcntl
import os
import struct
import termios
import time
from collections.abc import Callable

import pytest

from bridgeio.frames import Tallies
from bridgeio.receiver import Receiver
from tests.mcu.board import Board, needs_board

pytestmark = needs_board


def until(condition: Callable[[], bool], timeout_s: float = 20.0) -> None:
    """Wait for a condition, at most `timeout_s`."""
    deadline = time.monotonic() + timeout_s
    while not condition():
        assert time.monotonic() < deadline, f"not within {timeout_s} s"
        time.sleep(0.005)


def test_simulated_time_stands_still_while_nobody_reads() -> None:
    """A run flat out without a reader fills the line's buffer and waits; read late, not one frame is missing."""
    with Board(stop_after_ms=30_000) as board:
        line = os.open(board.path, os.O_RDONLY | os.O_NOCTTY)
        board.run()
        waiting = bytearray(4)
        until(lambda: fcntl.ioctl(line, termios.FIONREAD, waiting) == 0 and struct.unpack("i", waiting)[0] > 4000)
        receiver = Receiver(from_start=True)
        items = receiver.feed(board.read_to_end())
        os.close(line)
    assert receiver.counters.lost == 0
    assert [item.ms[-1] for item in items if isinstance(item, Tallies)][-1] > 29_900


def test_paced_board_keeps_to_the_clock() -> None:
    """Half a second of paced simulation takes no less than that."""
    with Board(stop_after_ms=500, paced=True) as board:
        began = time.monotonic()
        board.read_to_end()
    assert time.monotonic() - began > 0.45


def test_converter_takes_tenths_of_a_millivolt() -> None:
    """A step of the converter lies between 10.7 and 10.8 mV, and is seen there: whole millivolts would beat with it."""
    with Board([(0, 10.7, 10.8)], stop_after_ms=200) as board:
        items = Receiver(from_start=True).feed(board.read_to_end())
    last = [item for item in items if isinstance(item, Tallies)][-1]
    assert (last.forward[-1], last.reflected[-1]) == (16 * 9, 16 * 10)


def test_board_left_while_blocked_ends_its_child() -> None:
    """Leaving a board that nobody reads and that has no end in simulated time returns at once."""
    with Board() as board:
        board.run()
        child = board.pid
    with pytest.raises(ProcessLookupError):
        os.kill(child, 0)
