"""Where bytes come from: a serial port, a file, standard input or the simulated bridge, behind one face.

One rule: a source waits a quarter of a second at most, never writes, and whatever goes wrong becomes a
LinkError (FileError for `file:`) that says what came and what to do.
"""

from __future__ import annotations

import difflib
import os
import select
import sys
from collections.abc import Callable
from typing import TYPE_CHECKING, Protocol

from bridgeio.errors import BridgeIOError, FileError, LinkError
from bridgeio.plugged import Port, check_device, in_words, list_ports, lost_errors

if TYPE_CHECKING:
    import serial

__all__ = [
    "DeviceSource",
    "EndOfSource",
    "FileSource",
    "Port",
    "Source",
    "list_ports",
    "open_source",
]

WAIT_S = 0.25
CHUNK = 65536


class EndOfSource(BridgeIOError):
    """A file or a bounded simulation has no more to give; not a fault."""


class Source(Protocol):
    """What a link reads from. Only one thread may call `open`, `read` and `close`."""

    name: str
    simulated: bool
    live: bool

    def open(self) -> None:
        """Open, or raise LinkError (FileError for a file) that says what to do."""

    def read(self) -> bytes:
        """Bytes, or b"" after at most 0.25 s without any. LinkError when gone, EndOfSource at the end."""

    def close(self) -> None:
        """Close; harmless where it is closed."""


def open_source(text: str, baud: int = 115200) -> Source:
    """Source that `text` names, unopened: a device path, `file:PATH` (`-`: standard input), `sim:OPTIONS`.

    LinkError for a scheme that is not known, with a near miss, and for wrong options of `sim:`.
    """
    scheme, colon, rest = text.partition(":")
    # A path may hold a colon (/dev/serial/by-path/pci-0000:00:14.0-usb), a scheme never holds a slash.
    if not colon or "/" in scheme or os.path.exists(text):
        return DeviceSource(text, baud)
    maker = _SCHEMES.get(scheme)
    if maker is None:
        raise LinkError(_unknown_scheme(text, scheme))
    return maker(rest)


class DeviceSource:
    """A serial port, 8N1, held by us alone. The path may be anything that is a terminal device, a pty too."""

    simulated = False
    live = True

    def __init__(self, path: str, baud: int = 115200) -> None:
        self.name = path
        self.baud = baud
        self._port: serial.Serial | None = None

    def open(self) -> None:
        """Open the port for us alone. DTR and RTS are raised as on any opening; a board may reset."""
        import serial

        check_device(self.name)
        port = serial.Serial(timeout=WAIT_S, exclusive=True)
        port.port = self.name
        try:
            port.baudrate = self.baud
            port.open()
            _take_exclusively(port)
        except lost_errors() as error:
            port.close()
            raise LinkError(in_words(self.name, error)) from error
        except ValueError as error:
            port.close()
            raise LinkError(f"{self.name} cannot run at {self.baud} baud: {error}") from error
        self._port = port

    def read(self) -> bytes:
        """Whatever has come, after waiting 0.25 s at most. LinkError when the port is gone."""
        if self._port is None:
            raise LinkError(f"{self.name} is not open")
        try:
            data = _read_some(self._port)
        except lost_errors() as error:
            raise LinkError(f"{self.name} is gone: {error}; is it still plugged in?") from error
        if data is None:
            raise LinkError(f"{self.name} is gone: it was unplugged or closed at its other end")
        return data

    def set_baud(self, baud: int) -> None:
        """Change the rate without closing, so that a board does not reset; bytes waiting are thrown away."""
        self.baud = baud
        if self._port is None:
            return
        try:
            self._port.baudrate = baud
            self._port.reset_input_buffer()
        except ValueError as error:
            raise LinkError(f"{self.name} cannot run at {baud} baud: {error}") from error
        except lost_errors() as error:
            raise LinkError(f"{self.name} is gone: {error}") from error

    def close(self) -> None:
        """Close the port; an unplugged one closes without complaint."""
        port, self._port = self._port, None
        if port is not None:
            try:
                _give_back(port)
                port.close()
            except lost_errors():
                return  # it was gone before: there is nothing left to close


class FileSource:
    """A capture or text lines from a file, a named pipe, or standard input (`-`).

    Not live: when its bytes are read says nothing about when they were sent.
    """

    simulated = False
    live = False

    def __init__(self, path: str) -> None:
        self.name = f"file:{path}"
        self._path = path
        self._fd: int | None = None

    def open(self) -> None:
        """Open for reading. FileError where that cannot be."""
        if self._path == "-":
            self._fd = sys.stdin.fileno()
            return
        if not self._path:
            raise FileError("file: names no file; wanted file:PATH, or file:- for standard input")
        if os.path.isdir(self._path):
            raise FileError(f"{self._path} is a folder; wanted a capture or text lines")
        try:
            # Without blocking: a named pipe nobody has opened for writing yet must not hold us here.
            self._fd = os.open(self._path, os.O_RDONLY | getattr(os, "O_NONBLOCK", 0) | getattr(os, "O_BINARY", 0))
        except OSError as error:
            raise FileError(f"{self._path} cannot be read: {error.strerror}{_beside(self._path)}") from error

    def read(self) -> bytes:
        """Return the next bytes; EndOfSource at the end."""
        if self._fd is None:
            raise FileError(f"{self.name} is not open")
        try:
            if os.name == "posix" and not select.select([self._fd], [], [], WAIT_S)[0]:
                return b""
            data = os.read(self._fd, CHUNK)
        except OSError as error:
            raise FileError(f"{self.name} cannot be read on: {error.strerror}") from error
        if not data:
            raise EndOfSource(f"{self.name} has been read to its end")
        return data

    def close(self) -> None:
        """Close the file; standard input stays open, it is not ours."""
        fd, self._fd = self._fd, None
        if fd is not None and self._path != "-":
            os.close(fd)


def _take_exclusively(port: serial.Serial) -> None:
    """Refuse later openings by other programs; pyserial's own lock binds only those that ask for it."""
    if sys.platform != "win32":
        import fcntl
        import termios

        fcntl.ioctl(port.fileno(), termios.TIOCEXCL)


def _give_back(port: serial.Serial) -> None:
    """Let others open it again: where the far end stays open (a pty) exclusive use outlives our closing."""
    if sys.platform != "win32":
        import fcntl
        import termios

        fcntl.ioctl(port.fileno(), termios.TIOCNXCL)


def _read_some(port: serial.Serial) -> bytes | None:
    """Bytes, b"" after the wait, or None where the port reports its end."""
    if sys.platform == "win32":
        return bytes(port.read(port.in_waiting or 1))
    fd = port.fileno()
    if not select.select([fd], [], [], WAIT_S)[0]:
        return b""
    try:
        return os.read(fd, CHUNK) or None
    except BlockingIOError:
        return b""


def _beside(path: str) -> str:
    """A near miss in the same folder, as words."""
    folder, name = os.path.split(path)
    try:
        near = difflib.get_close_matches(name, os.listdir(folder or "."), n=1)
    except OSError:
        return ""
    return f"; did you mean {os.path.join(folder, near[0])}?" if near else ""


def _unknown_scheme(text: str, scheme: str) -> str:
    if scheme in ("socket", "rfc2217"):
        return f"{text}: sources over the network are not built yet; wanted a device path, file:PATH or sim:"
    near = difflib.get_close_matches(scheme.lower(), _SCHEMES, n=1)
    hint = f"; did you mean {near[0]}:?" if near else ""
    return f"{text}: there is no kind of source {scheme!r}; wanted a device path, file:PATH or sim:{hint}"


def _simulated(options: str) -> Source:
    from bridgeio.simulator.source import SimulatedSource

    return SimulatedSource(options)


#: scheme -> maker of the source from what stands behind the colon.
_SCHEMES: dict[str, Callable[[str], Source]] = {"file": FileSource, "sim": _simulated}
