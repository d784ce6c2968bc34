"""The command `ports`."""

from __future__ import annotations

import argparse
import os
import threading
import tty
from types import SimpleNamespace

import pytest
from serial.tools import list_ports as serial_tools

from bridgeio.simulator.source import SimulatedSource
from tui.commands import ports


def run(*arguments: str) -> int:
    """Run the command as the command line would."""
    parser = argparse.ArgumentParser()
    ports.add_arguments(parser)
    return ports.run(parser.parse_args(arguments))


def plug(monkeypatch: pytest.MonkeyPatch, *descriptions: str) -> None:
    """Let so many ports be plugged in, /dev/ttyUSB0 and on."""
    found = [
        SimpleNamespace(device=f"/dev/ttyUSB{n}", description=text, serial_number="77", vid=1)
        for n, text in enumerate(descriptions)
    ]
    monkeypatch.setattr(serial_tools, "comports", lambda: found)


def test_list_of_ports(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    """Each port is a line with device, description and serial number."""
    plug(monkeypatch, "USB serial", "other")
    assert run() == 0
    assert capsys.readouterr().out.splitlines() == [
        "/dev/ttyUSB0  USB serial (serial number 77)",
        "/dev/ttyUSB1  other (serial number 77)",
    ]


def test_description_cannot_drive_the_terminal(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """Control characters in a description are shown escaped."""
    plug(monkeypatch, "evil\x1b]0;title\x07\n\u202e")
    assert run() == 0
    out = capsys.readouterr().out
    assert "\\x1b]0;title\\x07\\x0a\\u202e" in out
    assert "\x1b" not in out


@pytest.mark.parametrize(("arguments", "code"), [((), 0), (("--listen",), 4)])
def test_nothing_plugged_in(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], arguments: tuple[str, ...], code: int
) -> None:
    """Where there is no port the command says what to look at, and that sim: needs none."""
    plug(monkeypatch)
    assert run(*arguments) == code
    out = capsys.readouterr().out
    assert out.startswith("no serial port is plugged in\n")
    assert "bridgewright watch sim:" in out


def test_listening_to_a_bridge(capsys: pytest.CaptureFixture[str]) -> None:
    """A bridge on a given port is found by its nameplate, with rate, name and device id."""
    master, slave = os.openpty()
    tty.setraw(slave)
    path = os.ttyname(slave)
    over = threading.Event()

    def talk() -> None:
        source = SimulatedSource("rate=20")
        source.open()
        while not over.is_set():
            os.write(master, source.read())

    talker = threading.Thread(target=talk, daemon=True)
    talker.start()
    try:
        assert run("--listen", path) == 0
    finally:
        over.set()
        talker.join(5)
        os.close(slave)
        os.close(master)
    said = capsys.readouterr()
    assert said.out == (f"{path} at 115200: nameplate of sim bridge, device id 51B0B41D, a tally every 50 ms\n")
    assert f"listening on {path} at 115200" in said.err


def test_listening_where_nobody_is(capsys: pytest.CaptureFixture[str]) -> None:
    """A port that does not open is said so in words, and that no bridge was heard; exit code 4."""
    assert run("--listen", "/dev/no-such-port") == 4
    out = capsys.readouterr().out
    assert "/dev/no-such-port is not there" in out
    assert "no bridge was heard" in out
