"""Opening sources: devices on a pseudo terminal, files, and every way in which it fails, in words."""

from __future__ import annotations

import errno
import os
import shutil
import subprocess
import sys
import termios
import threading
from collections.abc import Callable
from io import FileIO
from pathlib import Path
from types import SimpleNamespace

import pytest
from serial.tools import list_ports as serial_tools

import bridgeio
from bridgeio import plugged, ports
from bridgeio.errors import FileError, LinkError
from bridgeio.listen import Heard, listen
from bridgeio.network import RemotePortSource, SocketSource
from bridgeio.ports import DeviceSource, EndOfSource, FileSource, open_source
from bridgeio.simulator.source import SimulatedSource

ROOT = Path(next(iter(bridgeio.__path__))).parent


@pytest.fixture
def nothing_plugged(monkeypatch: pytest.MonkeyPatch) -> None:
    """No serial port on this machine."""
    monkeypatch.setattr(serial_tools, "comports", list)


def child(*lines: str, user: int | None = None) -> subprocess.Popen[str]:
    """A Python process with our code, as another user if wanted."""
    drop = [] if user is None else ["setpriv", f"--reuid={user}", f"--regid={user}", "--clear-groups"]
    return subprocess.Popen(
        [*drop, sys.executable, "-c", "\n".join(lines)],
        cwd="/",
        env={"PYTHONPATH": str(ROOT), "PATH": os.environ["PATH"], "PYTHONDONTWRITEBYTECODE": "1"},
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
    )


# What a text names


@pytest.mark.parametrize(
    ("text", "kind"),
    [
        ("/dev/ttyUSB0", DeviceSource),
        ("/dev/serial/by-path/pci-0000:00:14.0-usb-0:2:1.0-port0", DeviceSource),
        ("COM3", DeviceSource),
        ("file:capture.bin", FileSource),
        ("file:-", FileSource),
        ("sim:", SimulatedSource),
        ("sim:antenna=dummy", SimulatedSource),
        ("socket://bridge.local:4000", SocketSource),
        ("rfc2217://[::1]:4000", RemotePortSource),
    ],
)
def test_kind_of_source_by_its_text(text: str, kind: type) -> None:
    """A path, even one with colons, is a device; file: and sim: are what they say; the name is kept."""
    source = open_source(text)
    assert isinstance(source, kind)
    assert source.name == text


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("simm:x", r"no kind of source 'simm'.*did you mean sim:\?"),
        ("File:x", r"no kind of source 'File'.*did you mean file:\?"),
        ("ftp:x", r"wanted a device path, file:PATH, socket://HOST:PORT, rfc2217://HOST:PORT or sim:$"),
        ("sockets://host:1", r"did you mean socket:\?"),
        ("sim:pwer=1", "did you mean power"),
    ],
)
def test_unknown_kind_of_source(text: str, words: str) -> None:
    """A scheme that is not known, or not yet, is refused with what is wanted."""
    with pytest.raises(LinkError, match=words):
        open_source(text)


# Devices


def test_device_reads_what_comes(pty: tuple[FileIO, str]) -> None:
    """Bytes written at the other end arrive unchanged, zeros, control bytes and line ends too."""
    master, path = pty
    source = DeviceSource(path)
    source.open()
    sent = bytes(range(256))
    master.write(sent)
    got = b""
    while len(got) < len(sent):
        piece = source.read()
        assert piece
        got += piece
    assert got == sent
    source.close()


def test_device_flooded(pty: tuple[FileIO, str]) -> None:
    """A flood larger than any buffer of a terminal comes through whole and in order, however large the reads."""
    master, path = pty
    source = DeviceSource(path)
    source.open()
    sent = b"".join(n.to_bytes(4, "little") for n in range(60_000))
    writer = threading.Thread(target=_write_all, args=(master, sent), daemon=True)
    writer.start()
    got = b""
    while len(got) < len(sent):
        piece = source.read()
        assert piece
        got += piece
    writer.join(5.0)
    assert got == sent
    source.close()


def _write_all(file: FileIO, data: bytes) -> None:
    while data:
        data = data[file.write(data) or 0 :]


def test_device_without_bytes(pty: tuple[FileIO, str]) -> None:
    """A silent port gives b"" and no error."""
    source = DeviceSource(pty[1])
    source.open()
    assert source.read() == b""
    source.close()


def test_device_unplugged(pty: tuple[FileIO, str]) -> None:
    """A port whose other end goes away is gone, in words."""
    master, path = pty
    source = DeviceSource(path)
    source.open()
    master.close()
    with pytest.raises(LinkError, match=f"^{path} is gone"):
        source.read()
    source.close()
    source.close()


@pytest.mark.parametrize("error", [OSError(errno.EIO, "input/output error"), termios.error(5, "tc")])
def test_device_lost_in_any_way(pty: tuple[FileIO, str], monkeypatch: pytest.MonkeyPatch, error: Exception) -> None:
    """Whatever a lost port raises while it is read becomes a LinkError."""

    def fail(_port: object) -> bytes:
        raise error

    source = DeviceSource(pty[1])
    source.open()
    monkeypatch.setattr(ports, "_read_some", fail)
    with pytest.raises(LinkError, match="is gone"):
        source.read()
    source.close()


def test_device_that_is_gone_leaves_nothing_open(pty: tuple[FileIO, str]) -> None:
    """Closing a port that is gone closes its descriptors too."""
    master, path = pty
    before = os.listdir("/proc/self/fd")
    source = DeviceSource(path)
    source.open()
    master.close()
    source.close()
    assert len(os.listdir("/proc/self/fd")) == len(before) - 1


def usb(device: str, serial_number: str | None, location: str | None, pid: int = 0x7523) -> SimpleNamespace:
    """A port on USB as pyserial lists it."""
    return SimpleNamespace(
        device=device, description="n/a", serial_number=serial_number, location=location, vid=0x1A86, pid=pid
    )


WAS = usb("/dev/ttyUSB0", "A1", "1-2:1.0")
NAMELESS = usb("/dev/ttyUSB0", None, "1-2")


@pytest.mark.parametrize(
    ("was", "plugged_in", "where"),
    [
        (WAS, [], None),
        (WAS, [usb("/dev/ttyUSB0", "A1", "1-2:1.0")], "/dev/ttyUSB0"),
        (WAS, [usb("/dev/ttyUSB0", "B2", "1-3:1.0"), usb("/dev/ttyUSB1", "A1", "1-4:1.0")], "/dev/ttyUSB1"),
        (WAS, [usb("/dev/ttyUSB1", "A1", "1-4:1.2"), usb("/dev/ttyUSB2", "A1", "1-4:1.0")], "/dev/ttyUSB2"),
        (WAS, [usb("/dev/ttyUSB3", "B2", "1-2:1.0")], "/dev/ttyUSB3"),
        (WAS, [usb("/dev/ttyUSB0", "B2", "1-3:1.0")], None),
        (WAS, [usb("/dev/ttyUSB0", "A1", "1-2:1.0", pid=0x6001)], None),
        (NAMELESS, [usb("/dev/ttyUSB0", None, "1-3"), usb("/dev/ttyUSB1", None, "1-2")], "/dev/ttyUSB1"),
        (NAMELESS, [usb("/dev/ttyUSB0", None, "1-3")], "/dev/ttyUSB0"),
        (NAMELESS, [usb("/dev/ttyUSB1", None, "1-3")], None),
        (None, [usb("/dev/ttyUSB0", "A1", "1-2")], "/dev/ttyUSB0"),
        (None, [usb("/dev/ttyUSB1", "A1", "1-2")], None),
    ],
)
def test_device_is_found_again(
    monkeypatch: pytest.MonkeyPatch, was: SimpleNamespace | None, plugged_in: list[SimpleNamespace], where: str | None
) -> None:
    """It is known by its serial number, else by its place, else by its path; a stranger at its path is left alone."""
    monkeypatch.setattr(serial_tools, "comports", lambda: [was])
    known = None if was is None else plugged.port_at("/dev/ttyUSB0")
    monkeypatch.setattr(serial_tools, "comports", lambda: plugged_in)
    assert plugged.find_again("/dev/ttyUSB0", known) == where


def test_device_not_open() -> None:
    """Reading before opening is an error in words."""
    with pytest.raises(LinkError, match="is not open"):
        DeviceSource("/dev/ttyUSB7").read()


def test_device_changes_its_rate(pty: tuple[FileIO, str]) -> None:
    """The rate can be changed without closing, and an impossible one is refused in words."""
    source = DeviceSource(pty[1])
    source.open()
    source.set_baud(9600)
    assert source.baud == 9600
    assert source.read() == b""
    with pytest.raises(LinkError, match="cannot run at -5 baud"):
        source.set_baud(-5)
    source.close()


def test_absent_device_lists_what_is_there(monkeypatch: pytest.MonkeyPatch) -> None:
    """A port that is not there is answered with those that are."""
    found = SimpleNamespace(device="/dev/ttyACM3", description="n/a", serial_number=None, vid=1)
    monkeypatch.setattr(serial_tools, "comports", lambda: [found])
    with pytest.raises(LinkError, match="/dev/ttyUSB7 is not there; plugged in: /dev/ttyACM3"):
        DeviceSource("/dev/ttyUSB7").open()


@pytest.mark.usefixtures("nothing_plugged")
def test_absent_device_with_nothing_plugged_in() -> None:
    """Where nothing is plugged in, that is said."""
    with pytest.raises(LinkError, match="is not there; no serial port is plugged in"):
        DeviceSource("/dev/ttyUSB7").open()


@pytest.mark.usefixtures("nothing_plugged")
def test_things_that_are_no_ports(tmp_path: Path) -> None:
    """A folder and a file given as a device are named as what they are; a file gets its near miss."""
    capture = tmp_path / "capture.bin"
    capture.write_bytes(b"")
    with pytest.raises(LinkError, match=f"{tmp_path} is a folder, not a serial port"):
        DeviceSource(str(tmp_path)).open()
    with pytest.raises(LinkError, match=f"did you mean file:{capture}"):
        DeviceSource(str(capture)).open()
    with pytest.raises(LinkError, match="/dev/null does not open as a serial port"):
        DeviceSource("/dev/null").open()


def test_busy_device_names_its_holder(pty: tuple[FileIO, str]) -> None:
    """A port that another program holds is busy, with its name and process id."""
    holder = child(
        "from bridgeio.ports import DeviceSource",
        f"source = DeviceSource({pty[1]!r}); source.open(); print('open', flush=True); input()",
    )
    try:
        assert holder.stdout is not None
        assert holder.stdout.readline() == "open\n"
        with pytest.raises(LinkError, match=rf"is busy: \S+ \(pid {holder.pid}\) holds it"):
            DeviceSource(pty[1]).open()
    finally:
        holder.communicate("\n", timeout=20)


def test_device_opened_twice(pty: tuple[FileIO, str]) -> None:
    """A port we hold ourselves is busy too, and says so."""
    first = DeviceSource(pty[1])
    first.open()
    with pytest.raises(LinkError, match="is busy: this program itself holds it"):
        DeviceSource(pty[1]).open()
    first.close()


def fake_owner(group: str, gid: int, mode: int) -> dict[str, Callable[..., SimpleNamespace]]:
    """What stat, group and user files would say of a device."""
    return {
        "os.stat": lambda _path: SimpleNamespace(st_gid=gid, st_mode=mode),
        "grp.getgrgid": lambda _gid: SimpleNamespace(gr_name=group),
        "pwd.getpwuid": lambda _uid: SimpleNamespace(pw_name="ada"),
    }


@pytest.mark.parametrize(
    ("group", "gid", "mode", "words"),
    [
        ("dialout", 20, 0o20660, "run `sudo usermod -aG dialout ada`, then log out and in again"),
        ("root", 0, 0o20660, "its group is root, which does not help; a udev rule"),
        ("dialout", 20, 0o20600, "its group is dialout, which does not help; a udev rule"),
    ],
)
def test_refused_device_says_what_to_do(
    monkeypatch: pytest.MonkeyPatch, group: str, gid: int, mode: int, words: str
) -> None:
    """Permission refused names the device's group and the command, or why that would not help."""
    for name, fake in fake_owner(group, gid, mode).items():
        monkeypatch.setattr(name, fake)
    said = plugged.in_words("/dev/ttyUSB0", PermissionError(errno.EACCES, "Permission denied"))
    assert said.startswith("/dev/ttyUSB0 may not be opened by you")
    assert words in said


@pytest.mark.skipif(os.geteuid() != 0 or not shutil.which("setpriv"), reason="needs root and setpriv")
def test_refused_device_for_an_ordinary_user(pty: tuple[FileIO, str]) -> None:
    """For an ordinary user a real refusal arrives in those words."""
    os.chown(pty[1], 0, 20)
    os.chmod(pty[1], 0o660)
    ordinary = child(
        "from bridgeio.ports import DeviceSource",
        f"try: DeviceSource({pty[1]!r}).open()",
        "except Exception as error: print(type(error).__name__, error)",
        user=65534,
    )
    said, _ = ordinary.communicate(timeout=20)
    assert said.startswith(f"LinkError {pty[1]} may not be opened by you: it belongs to the group ")
    assert "sudo usermod -aG" in said


# Files


def test_file_is_read_to_its_end(tmp_path: Path) -> None:
    """A file gives its bytes, then EndOfSource; it is neither live nor simulated."""
    path = tmp_path / "lines.txt"
    path.write_bytes(b"100 5\n" * 20000)
    source = FileSource(str(path))
    source.open()
    got = source.read()
    while len(got) < 120000:
        got += source.read()
    assert got == b"100 5\n" * 20000
    with pytest.raises(EndOfSource, match="has been read to its end"):
        source.read()
    source.close()
    assert (source.live, source.simulated) == (False, False)


def test_file_that_is_not_there(tmp_path: Path) -> None:
    """A missing file is a FileError with the near miss of its folder."""
    (tmp_path / "contest.cap").write_bytes(b"")
    with pytest.raises(FileError, match=r"cannot be read: No such file.*did you mean .*contest\.cap\?"):
        FileSource(str(tmp_path / "contets.cap")).open()
    with pytest.raises(FileError, match="is a folder"):
        FileSource(str(tmp_path)).open()
    with pytest.raises(FileError, match="names no file"):
        FileSource("").open()


def test_named_pipe_without_a_writer(tmp_path: Path) -> None:
    """A named pipe nobody writes to yet opens at once, waits, and gives what comes later."""
    path = tmp_path / "pipe"
    os.mkfifo(path)
    source = FileSource(str(path))
    source.open()
    assert source.read() == b""
    writer = os.open(path, os.O_WRONLY)
    os.write(writer, b"1 2\n")
    assert source.read() == b"1 2\n"
    os.close(writer)
    with pytest.raises(EndOfSource):
        source.read()
    source.close()


def test_standard_input() -> None:
    """file:- reads standard input to its end."""
    reader = child(
        "from bridgeio.ports import open_source, EndOfSource",
        "source = open_source('file:-'); source.open(); got = b''",
        "try:",
        "    while True: got += source.read()",
        "except EndOfSource: print(got)",
    )
    said, _ = reader.communicate("7 8\n", timeout=20)
    assert said == "b'7 8\\n'\n"


def test_ports_on_usb_come_first(monkeypatch: pytest.MonkeyPatch) -> None:
    """What is plugged in is listed with USB first; pyserial's n/a is no description."""
    monkeypatch.setattr(
        serial_tools,
        "comports",
        lambda: [
            SimpleNamespace(device="/dev/ttyS0", description="n/a", serial_number=None, vid=None),
            SimpleNamespace(device="/dev/ttyUSB0", description="USB serial", serial_number="A1", vid=1),
        ],
    )
    found = [(port.device, port.description, port.serial_number) for port in ports.list_ports()]
    assert found == [("/dev/ttyUSB0", "USB serial", "A1"), ("/dev/ttyS0", "", None)]


def test_simulator_needs_no_numpy_to_be_named() -> None:
    """Naming sim: loads neither numpy nor pyserial: a screen can paint first."""
    process = child(
        "import sys",
        "from bridgeio.ports import open_source",
        "open_source('sim:power=5')",
        "print(sorted({'numpy', 'serial'} & set(sys.modules)))",
    )
    assert process.communicate(timeout=20)[0] == "[]\n"


# Listening


class Board:
    """A port on which something talks at one rate, and rubbish at the others."""

    simulated, live = False, True

    def __init__(self, port: str, says: Callable[[int], bytes]) -> None:
        self.name, self._says, self._baud = port, says, 0
        self.opened = 0

    def open(self) -> None:
        """Count: every opening may reset a real board."""
        self.opened += 1

    def set_baud(self, baud: int) -> None:
        """Change the rate."""
        self._baud = baud

    def read(self) -> bytes:
        """What it says at this rate."""
        return self._says(self._baud)

    def close(self) -> None:
        """Nothing to close."""


def heard(says: Callable[[int], bytes], rates: tuple[int, ...] = (115200, 9600, 57600)) -> tuple[Heard, Board]:
    """What listening to such a board says."""
    board = Board("/dev/ttyX", says)

    def open_port(_port: str, baud: int) -> Board:
        board.set_baud(baud)
        return board

    return listen("/dev/ttyX", rates=rates, seconds=0.02, open_port=open_port), board


def simulated_bytes(options: str) -> bytes:
    """The first second of a simulated bridge."""
    source = SimulatedSource(f"duration=1&pace=fast&{options}")
    source.open()
    return source.read()


@pytest.mark.parametrize(
    ("options", "words"),
    [("", "nameplate"), ("wire=text", "nameplate"), ("wire=plain", "plain lines of two numbers")],
)
def test_bridge_is_heard_at_its_rate(options: str, words: str) -> None:
    """Of several rates the one at which something sensible comes is found; the port is opened once."""
    said = simulated_bytes(options)
    result, board = heard(lambda baud: said if baud == 9600 else b"\xf3\x8a\x00\xfe" * 20)
    assert (result.baud, result.words) == (9600, words)
    assert board.opened == 1
    assert (result.nameplate is None) == (words != "nameplate")


def test_silent_port_is_given_up_early() -> None:
    """A port that says nothing at two rates is silent; the others are not tried."""
    asked: list[int] = []

    def says(baud: int) -> bytes:
        asked.append(baud)
        return b""

    result, _ = heard(says)
    assert (result.baud, result.words) == (None, "silent")
    assert set(asked) == {115200, 9600}


def test_rubbish_at_every_rate() -> None:
    """Where something talks but nothing can be read, no rate is named."""
    result, _ = heard(lambda _baud: b"hello world\r\n")
    assert result.baud is None
    assert "something talks" in result.words
