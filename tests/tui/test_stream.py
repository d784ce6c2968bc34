"""`stream`: readings of every source as lines, and nothing else on standard output."""

import csv
import json
import os
import signal
import subprocess
import sys
import time
import tty
from datetime import datetime
from pathlib import Path

import numpy as np
import pytest

from bridgeio.bridge_file import parse_bridge_file
from bridgeio.frames import Nameplate, Tallies
from bridgeio.framing import pack
from bridgeio.rows import COLUMNS
from bridgeio.simulator import BRIDGE_FILE
from bridgeio.simulator.source import SimulatedSource
from calibration.flags import names
from calibration.meter import Meter
from tests import fitted, shed
from tui.__main__ import main

ROOT = Path(__file__).parents[2]


def start(*words, **options):
    """`stream` in a process of its own."""
    options = {"stdout": subprocess.PIPE, "stderr": subprocess.PIPE, "text": True} | options
    env = {name: value for name, value in os.environ.items() if name != "PYTHONUNBUFFERED"}
    return subprocess.Popen([sys.executable, "-m", "tui", "stream", *words], cwd=ROOT, env=env, **options)


@pytest.fixture
def stream(capsys):
    """Run `stream` to its end; gives the rows of its JSON lines and what was said beside them."""

    def run(*words):
        capsys.readouterr()
        assert main(["stream", *map(str, words)]) == 0
        told = capsys.readouterr()
        return [json.loads(line, parse_constant=pytest.fail) for line in told.out.splitlines()], told.err

    return run


@pytest.fixture(scope="session")
def shed_file(tmp_path_factory):
    """The shed bridge's file."""
    path = tmp_path_factory.mktemp("shed") / "shed.bridge.toml"
    path.write_text(fitted.bridge_text(12), encoding="utf-8")
    return path


# The simulated bridge


SCENES = [
    "",
    "antenna=vertical&frequency=40m",
    "antenna=25",
    "antenna=25+40j&frequency=10m",
    "antenna=dummy",
    "antenna=open",
    "antenna=150&power=2&line=none",
    "mode=key",
    "mode=key&antenna=vertical&power=5",
]


def holds(row, low, high, truth):
    """Whether the interval between two keys holds the truth; an end that is not known bounds nothing."""
    return (row[low] is None or row[low] <= truth + 1e-9) and (row[high] is None or truth <= row[high] + 1e-9)


def test_intervals_of_the_simulated_bridge_hold_its_truth(stream):
    """Of 2250 readings over antennas, bands, powers and keying, at least 95 % hold true SWR, forward and net power."""
    held = []
    for scene in SCENES:
        options = f"pace=fast&rate=10&duration=25&{scene}"
        rows, _ = stream(f"sim:{options}")
        truth = SimulatedSource(options).station.at((np.arange(len(rows)) + 1) / 10.0)
        assert len(rows) == 250
        for row, forward_w, net_w, swr in zip(rows, truth.forward_w, truth.net_w, truth.swr, strict=True):
            powers = holds(row, "forward_low_w", "forward_high_w", forward_w) and holds(
                row, "net_low_w", "net_high_w", net_w
            )
            held.append(powers and (forward_w == 0.0 or holds(row, "swr_low", "swr_high", swr)))
            assert "simulated" in row["flags"]
            assert ("no-carrier" in row["flags"]) == (row["swr"] is None) == (row["forward_w"] == 0.0)
    assert np.mean(held) >= 0.95
    assert len(held) == 2250


def test_intervals_of_the_simulated_bridge_say_something(stream):
    """An interval that held everything would be no use: at 50 W into a dipole, SWR is known to a third at most."""
    rows, _ = stream("sim:pace=fast&rate=10&duration=25")
    widths = [(row["swr_high"] - row["swr_low"]) / row["swr"] for row in rows]
    assert np.median(widths) < 0.33


@pytest.mark.parametrize("mode", ["cw", "ssb", "sweep", "off"])
@pytest.mark.parametrize("wire", ["binary", "text", "plain"])
def test_every_mode_and_wire_gives_readings(stream, mode, wire):
    """Keyed and silent transmitters run too, over each form of the wire; plain lines say that they are unchecked."""
    rows, said = stream(f"sim:pace=fast&duration=4&rate=50&mode={mode}&wire={wire}")
    assert len(rows) == 200
    assert said == ""
    for row in rows:
        assert "simulated" in row["flags"]
        assert ("unchecked" in row["flags"]) == (wire == "plain")
        assert "uncalibrated" not in row["flags"]


def test_frequency_comes_from_the_bridge(stream):
    """What the simulated bridge says of its frequency goes before the option."""
    rows, _ = stream("sim:pace=fast&duration=1&rate=10&frequency=40m", "--frequency", "20m")
    assert {row["frequency_hz"] for row in rows} == {7.15e6}


def test_damage_is_counted_and_said(stream):
    """Frames that are damaged or lost give no readings and are told at the end, on standard error."""
    rows, said = stream("sim:pace=fast&duration=10&drop=0.05&damage=0.05")
    assert 850 < len(rows) < 950
    assert "bad checksum" in said
    assert "frames lost at least" in said


# Lines of two numbers, as a sketch prints them


BANDS = sorted(set(shed.table("shed_loads")["frequency_hz"]))


@pytest.mark.parametrize("hz", BANDS, ids="{:.0f}".format)
def test_plain_lines_read_as_the_meter_does(stream, shed_file, tmp_path, hz):
    """Counts from a file of lines give the meter's figures, in every column, and say that they are unchecked."""
    loads = shed.table("shed_loads")
    own = loads["frequency_hz"] == hz
    forward, reflected = loads["forward_12"][own], loads["reflected_12"][own]
    path = tmp_path / "loads.txt"
    path.write_text("".join(f"{f} {r}\n" for f, r in zip(forward, reflected, strict=True)), encoding="utf-8")
    rows, said = stream(f"file:{path}", "--samples", 50, "--bridge", shed_file, "--frequency", f"{hz:.0f}")
    bridge = parse_bridge_file(fitted.bridge_text(12), "x").calibrated()
    expected = Meter(bridge).read(forward, reflected, frequency_hz=hz, samples=50, checked=False)
    assert (len(rows), said) == (25, "")
    for number, row in enumerate(rows):
        assert row["flags"] == list(names(expected.flags[number]))
        assert "unchecked" in row["flags"]
        assert (row["bridge"], row["time"], row["averaged"]) == (bridge.name, None, 1)
        for name in list(COLUMNS)[1:20]:
            value = float(getattr(expected, name)[number])
            assert row[name] == (value if np.isfinite(value) else None), name


def test_user_pattern_reads_other_lines(stream, shed_file, tmp_path):
    """Lines of another form are read by the user's pattern, and what does not match is counted."""
    path = tmp_path / "log.txt"
    path.write_text("fwd=1100 ref=300\nhello\nfwd=1101 ref=301\n", encoding="utf-8")
    pattern = r"fwd=(?P<forward>\d+) ref=(?P<reflected>\d+)"
    rows, said = stream(f"file:{path}", "--pattern", pattern, "--bridge", shed_file, "--frequency", "20m")
    assert [(row["forward_counts"], row["reflected_counts"]) for row in rows] == [(1100, 300), (1101, 301)]
    assert said == "bridgewright stream: 1 line in none of the known forms\n"


def test_standard_input_is_read_to_its_end(shed_file):
    """file:- reads what is piped in, and ends with it."""
    process = start("file:-", "--bridge", str(shed_file), "--frequency", "20m", stdin=subprocess.PIPE)
    out, err = process.communicate("1100 300\n219 85.66\n", timeout=60)
    assert [json.loads(line)["forward_counts"] for line in out.splitlines()] == [1100.0, 219.0]
    assert (process.returncode, err) == (0, "")


@pytest.mark.parametrize("end", ["", "219 8"])
def test_last_line_without_its_end_is_left_out_and_said(stream, tmp_path, end):
    """A line that the file's end may have cut off is no reading, since its numbers could be false; it is told."""
    path = tmp_path / "lines.txt"
    path.write_text(f"1100 300\n{end}", encoding="utf-8")
    rows, said = stream(f"file:{path}")
    assert [row["forward_counts"] for row in rows] == [1100.0]
    assert ("the last line has no line end and was left out, as it may be cut off" in said) == bool(end)


def test_lines_without_a_bridge_file_are_counts(stream, tmp_path):
    """Without a bridge file there are counts and no watts, and one sentence says how to get them."""
    path = tmp_path / "lines.txt"
    path.write_text("1100 300\n219 85.66\n", encoding="utf-8")
    rows, said = stream(f"file:{path}", "--frequency", "20m")
    assert [row["flags"] for row in rows] == [["uncalibrated", "unchecked"]] * 2
    assert all(row["forward_w"] is None for row in rows)
    assert said == (
        "bridgewright stream: no bridge file: counts only (give one with --bridge, made by `bridgewright fit`)\n"
    )


# Which bridge file


@pytest.fixture
def capture(tmp_path):
    """A recording of some tallies before and after a nameplate."""

    def make(**plate):
        told = {"full_scale": 4095, "device_id": 7, "bridge_file_id": 0, "reference_mv": 0, "name": "board"} | plate
        nameplate = Nameplate(2, 20, 0, 1, period_ms=10, summed=1, features=0, firmware_version=1, **told)
        some = [Tallies.of([seq], [10 * seq], 1100, 300) for seq in (0, 1, 3, 4)]
        path = tmp_path / "capture.bin"
        path.write_bytes(b"".join(map(pack, [*some[:2], nameplate, *some[2:]])))
        return path

    return make


def test_nameplate_decides_from_where_it_stands(stream, shed_file, capture):
    """Tallies before the nameplate are counts, those after it are watts, and the sentence says why, once."""
    rows, said = stream(f"file:{capture()}", "--bridge", shed_file, "--frequency", "20m")
    assert ["uncalibrated" in row["flags"] for row in rows] == [True, True, False, False]
    assert said.count("waiting for the bridge's nameplate") == 1


def test_other_full_scale_is_counts_only(stream, shed_file, capture):
    """A board that counts to another full scale is never read, and both numbers are said."""
    rows, said = stream(f"file:{capture(full_scale=65520)}", "--bridge", shed_file, "--frequency", "20m")
    assert all("uncalibrated" in row["flags"] for row in rows)
    assert f"full scale is 65520 on the bridge and 4095 in bridge file {shed_file}" in said


def test_board_with_another_fit_is_said(stream, shed_file, capture):
    """A board that carries another fit's id is read by the file, with a word of caution."""
    rows, said = stream(f"file:{capture(bridge_file_id=0x1234)}", "--bridge", shed_file, "--frequency", "20m")
    assert "uncalibrated" not in rows[-1]["flags"]
    assert "the board was given fit 1234, bridge file" in said


# Forms and ends


def test_csv_has_one_header_and_the_same_figures(stream, capsys):
    """CSV is the same readings under one line of names."""
    rows, _ = stream("sim:pace=fast&duration=1&rate=10")
    assert main(["stream", "sim:pace=fast&duration=1&rate=10", "--format", "csv"]) == 0
    header, *lines = csv.reader(capsys.readouterr().out.splitlines())
    assert header == list(COLUMNS)
    assert [float(line[header.index("swr")]) for line in lines] == [row["swr"] for row in rows]


@pytest.mark.parametrize("count", [1, 7, 300])
def test_count_ends_it_exactly(stream, count):
    """After N readings it ends, however many come in one go."""
    rows, _ = stream("sim:pace=fast", "--count", count)
    assert len(rows) == count


def test_live_readings_have_times(stream):
    """A live source's readings are dated, in order, a hundred a second where a hundred a second are sent."""
    rows, _ = stream("sim:rate=100", "--count", 20)
    times = [datetime.fromisoformat(row["time"]).timestamp() for row in rows]
    assert (np.diff(times) >= 0.0).all()
    # The first ones may still move as arrivals with less delay come in.
    assert np.median(np.diff(times)) == pytest.approx(0.01, abs=0.0011)
    assert 0.0 <= time.time() - times[-1] < 5.0


@pytest.mark.parametrize("wire", ["binary", "text", "plain"])
def test_raw_bytes_replay_to_the_same_counts(stream, tmp_path, wire):
    """What --raw has kept gives, read as a file, the same counts, figures and flags but for `simulated`."""
    path = tmp_path / "capture.bin"
    rows, _ = stream(f"sim:pace=fast&duration=3&wire={wire}", "--raw", path, "--frequency", "20m")
    again, _ = stream(f"file:{path}", "--bridge", BRIDGE_FILE, "--frequency", "20m")
    assert len(rows) == len(again) == 300
    for row, other in zip(rows, again, strict=True):
        assert row.pop("flags") == [*other.pop("flags"), "simulated"]
        assert row == other


def test_raw_never_overwrites(tmp_path, capsys):
    """A file that is there is not written over, and a port that does not open leaves no empty file."""
    path = tmp_path / "capture.bin"
    path.write_bytes(b"precious")
    assert main(["stream", "sim:pace=fast", "--count", "1", "--raw", str(path)]) == 3
    assert f"{path}: cannot be made: File exists; --raw wants the name of a new file" in capsys.readouterr().err
    assert path.read_bytes() == b"precious"
    assert main(["stream", "/dev/no-such-port", "--raw", str(tmp_path / "new.bin")]) == 4
    assert not (tmp_path / "new.bin").exists()


def test_raw_on_a_full_disk_is_said(tmp_path, monkeypatch, capsys):
    """Where the bytes cannot be kept, it ends in words."""
    full = open("/dev/full", "wb", buffering=0)  # noqa: SIM115 - the command closes it
    monkeypatch.setattr("tui.commands.stream._new_file", lambda _: full)
    assert main(["stream", "sim:pace=fast", "--raw", str(tmp_path / "x")]) == 3
    assert full.closed
    assert "x: cannot be written: No space left on device" in capsys.readouterr().err


def test_reader_that_leaves_ends_it_quietly():
    """`stream | head -1` gives its line, and no word of complaint."""
    process = start("sim:")
    assert json.loads(process.stdout.readline())["flags"] == ["simulated"]
    process.stdout.close()
    assert process.wait(timeout=20) == 0
    assert process.stderr.read() == ""
    process.stderr.close()


def test_killed_stream_has_kept_its_bytes(tmp_path):
    """Whatever ends it, the bytes behind every reading that came out are in the raw file by then."""
    path = tmp_path / "capture.bin"
    process = start("sim:", "--raw", str(path))
    assert process.stdout.readline()
    kept = path.stat().st_size
    process.kill()
    process.communicate(timeout=20)
    assert kept > 0


def test_interrupt_ends_it_quietly():
    """Ctrl-C ends it without a word, and every line that came out is whole."""
    process = start("sim:")
    first = process.stdout.readline()
    process.send_signal(signal.SIGINT)
    out, err = process.communicate(timeout=20)
    assert (process.returncode, err) == (130, "")
    assert all(json.loads(line) for line in [first, *out.splitlines()])
    assert out == "" or out.endswith("\n")


# A board that is pulled out and put back


@pytest.fixture
def sockets(tmp_path):
    """A port by a link that leads to one pseudo terminal after the other; gives `plug`, which returns the far end."""
    port, held = tmp_path / "bridge", []

    def plug():
        master, slave = os.openpty()
        tty.setraw(slave)
        fresh = tmp_path / "fresh"
        fresh.symlink_to(os.ttyname(slave))
        fresh.replace(port)
        os.close(slave)
        held.append(os.fdopen(master, "wb", buffering=0))
        return held[-1]

    yield port, plug
    for far in held:
        far.close()


def said_until(process, words):
    """What it says on standard error, line by line, up to a line with these words."""
    for line in process.stderr:
        if words in line:
            return line
    raise AssertionError(f"{words!r} was never said")


def reading(process):
    """The next reading."""
    return json.loads(process.stdout.readline())


def test_board_that_is_pulled_and_put_back_is_read_on(sockets, tmp_path):
    """A pulled plug is said once, its return too; readings go on, counts only until the board has told its name."""
    port, plug = sockets
    file = parse_bridge_file(BRIDGE_FILE.read_text(encoding="utf-8"), "x")

    def plate(device_id):
        return pack(Nameplate(0, 10, 0, 1, device_id, 10, 16, file.full_scale, 0, 0, 0, 0, "double"))

    def tally(number):
        return pack(Tallies.of(number, 10 * number, 30_000, 9_000))

    far, raw = plug(), tmp_path / "raw"
    process = start(str(port), "--bridge", str(BRIDGE_FILE), "--frequency", "20m", "--raw", str(raw))
    try:
        until_kept(raw, lambda: far.write(plate(file.device_id)))
        far.write(tally(1))
        assert reading(process)["swr"] is not None
        port.unlink()  # before the terminal, whose name may be given to another at once
        far.close()
        assert said_until(process, "looking") == (
            f"bridgewright stream: {port} is gone: it was unplugged; looking for it\n"
        )
        far = plug()
        assert said_until(process, "again") == f"bridgewright stream: {port} is open again\n"
        far.write(b"\0" + tally(1))
        assert reading(process)["swr"] is None
        far.write(plate(0x57A46E03) + tally(2))
        assert reading(process)["swr"] is None
        far.write(plate(file.device_id) + tally(3))
        assert reading(process)["swr"] is not None
        process.send_signal(signal.SIGINT)
        _, rest = process.communicate(timeout=20)
    finally:
        process.kill()
    assert "looking" not in rest
    assert process.returncode == 130
    assert raw.read_bytes().endswith(plate(0x57A46E03) + tally(2) + plate(file.device_id) + tally(3))


def until_kept(path, send):
    """Send until something is kept: what comes before the port is open is thrown away with its opening."""
    end_s = time.monotonic() + 20.0
    while not path.exists() or not path.stat().st_size:
        assert time.monotonic() < end_s
        if path.exists():
            send()
        time.sleep(0.01)
