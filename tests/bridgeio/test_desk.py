"""The desk: which calibration may be used for what comes, and what is said where none may."""

from __future__ import annotations

import re

import numpy as np
import pytest

from bridgeio.bridge_file import BridgeFile, parse_bridge_file, sheet_text
from bridgeio.desk import Desk, Reading
from bridgeio.frames import Item, Nameplate, Tallies
from bridgeio.simulator import BRIDGE_FILE
from bridgeio.simulator.board import DEVICE_ID, FULL_SCALE


def bridge_file(device_id: bool = True) -> BridgeFile:
    """The simulated bridge's file, as it is or for any board."""
    text = sheet_text(BRIDGE_FILE)
    return parse_bridge_file(text if device_id else re.sub(r"(?m)^device_id.*$", "", text), "shed.toml")


def tallies(first_ms: int = 10, count: int = 10, *, checked: bool = True) -> Tallies:
    """Some 5 W, every 10 ms."""
    ms = np.arange(first_ms, first_ms + 10 * count, 10, dtype=np.uint32)
    columns = (np.full(count, 14000.0), np.full(count, 2000.0), np.zeros(count, dtype=np.uint8))
    return Tallies(np.zeros(count, dtype=np.uint8), ms, *columns, checked=checked, has_ms=checked)


def nameplate(full_scale: int = FULL_SCALE, device_id: int = DEVICE_ID) -> Nameplate:
    """Who the board is."""
    return Nameplate(0, 10, 0, 1, device_id, 10, 16, full_scale, 2500, 0, 0, 1, "board")


def calibrated(desk: Desk, *items: Item) -> list[bool]:
    """Whether each block of tallies among the items is read by a bridge file."""
    return [not batch.readings.has("uncalibrated").any() for batch in desk.take(items, 0.0)]


@pytest.mark.parametrize("device_id", [True, False])
def test_frames_before_any_nameplate_are_counts_only(device_id: bool) -> None:
    """A board that was running before us may be any board: until its nameplate no file is known to fit it."""
    desk = Desk([bridge_file(device_id)], Reading(frequency_hz=14.1e6))
    assert calibrated(desk, tallies()) == [False]
    assert "waiting for the bridge's nameplate" in str(desk.note)
    assert calibrated(desk, nameplate(), tallies(110)) == [True]
    assert desk.note is None


@pytest.mark.parametrize(("device_id", "read"), [(False, True), (True, False)])
def test_bridge_that_never_sends_a_nameplate(device_id: bool, read: bool) -> None:
    """After 4.5 s without one it is read by a file for any board, and by a file for one board it never is."""
    desk = Desk([bridge_file(device_id)], Reading(frequency_hz=14.1e6))
    by_file = calibrated(desk, *(tallies(first_ms) for first_ms in range(10, 6010, 100)))
    assert by_file[:44] == [False] * 44
    assert by_file[46:] == [read] * 14


def test_other_full_scale_is_never_read() -> None:
    """Full scale of board and file differ: counts only, and the sentence has both."""
    desk = Desk([bridge_file(device_id=False)], Reading(frequency_hz=14.1e6))
    assert calibrated(desk, nameplate(full_scale=16368), tallies()) == [False]
    assert desk.note == "counts only: full scale is 16368 on the bridge and 65520 in bridge file shed.toml"


def test_other_board_is_never_read() -> None:
    """A file made for one board is not used for another one."""
    desk = Desk([bridge_file()], Reading(frequency_hz=14.1e6))
    assert calibrated(desk, nameplate(device_id=1), tallies()) == [False]
    assert "board 00000001 has no bridge file among those given" in str(desk.note)


def test_plain_lines_are_read_at_once_and_nothing_else_is_claimed() -> None:
    """Lines never bring a nameplate: they are read by the one file given, and no sentence says that they are not."""
    desk = Desk([bridge_file()], Reading(frequency_hz=14.1e6))
    assert calibrated(desk, tallies(checked=False)) == [True]
    assert (desk.note, desk.bridge_name) == (None, "sim bridge")


def test_desk_before_anything_came_complains_of_nothing() -> None:
    """With one bridge file and nothing to read there is nothing to say."""
    assert Desk([bridge_file()]).note is None
