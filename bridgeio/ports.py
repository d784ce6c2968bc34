"""Where bytes come from: a serial port, the network, a file, standard input or the simulated bridge, behind one face.

One rule: a source waits a quarter of a second at most, never writes, and whatever goes wrong becomes a
LinkError (FileError for `file:`) that says what came and what to do.
"""

from __future__ import annotations

import contextlib
import difflib
import os
import select
import sys
import time
from collections.abc import Callable
from typing import TYPE_CHECKING, Protocol, runtime_checkable

from bridgeio.errors import EndOfSource, FileError, LinkError
from bridgeio.plugged import Port, absent, check_device, find_again, in_words, list_ports, lost_errors, port_at

if TYPE_CHECKING:
    import serial

__all__ = [
    "DeviceSource",
    "EndOfSource",
    "FileSource",
    "Port",
    "Resting",
    "Returning",
    "Source",
    "list_ports",
    "open_source",
    "rest_on",
]

WAIT_S = 0.25
CHUNK = 65536
#: A terminal device hands out no more at a time, however much waits behind it.
FULL_BYTES = 4095


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


@runtime_checkable
class Returning(Source, Protocol):
    """A source that may come back after it was lost: a link goes on looking for it."""

    def reopen(self) -> bool:
        """Open it again, under whatever name. False while it is not there, LinkError where it does not open."""


@runtime_checkable
class Resting(Source, Protocol):
    """A source that notices while nobody reads that it is gone."""

    def rest(self, seconds: float) -> None:
        """Let more gather for `seconds` [s], less where it is gone: the next `read` says so. Data does not wake it."""


def open_source(text: str, baud: int = 115200) -> Source:
    """Source that `text` names, unopened: a device path, `file:PATH` (`-`: standard input), `sim:OPTIONS`,
    `socket://HOST:PORT`, `rfc2217://HOST:PORT`.

    LinkError for a scheme that is not known, with a near miss, for an address without host or port, and for wrong
    options of `sim:`.
    """
    scheme, colon, rest = text.partition(":")
    # A path may hold a colon (/dev/serial/by-path/pci-0000:00:14.0-usb), a scheme never holds a slash.
    if not colon or "/" in scheme or os.path.exists(text):
        return DeviceSource(text, baud)
    maker = _SCHEMES.get(scheme)
    if maker is None:
        raise LinkError(_unknown_scheme(text, scheme))
    return maker(rest, baud)


class DeviceSource:
    """A serial port, 8N1, held by us alone. The path may be anything that is a terminal device, a pty too.

    What is plugged in there at the first opening is remembered, so that `reopen` knows it again under another name.
    """

    simulated = False
    live = True

    def __init__(self, path: str, baud: int = 115200) -> None:
        self.name = path
        self.baud = baud
        self._port: serial.Serial | None = None
        self._known: Port | None = None

    def open(self) -> None:
        """Open the port for us alone. DTR and RTS are raised as on any opening; a board may reset."""
        self._open(self.name)

    def reopen(self) -> bool:
        """Open it again where it is now; False while it is not there."""
        path = find_again(self.name, self._known)
        if path is None:
            return False
        try:
            self._open(path)
        except LinkError as error:
            if absent(error.__cause__):  # on its way out, or not quite in yet
                return False
            raise
        return True

    def _open(self, path: str) -> None:
        import serial

        check_device(path)
        port = serial.Serial(timeout=WAIT_S, exclusive=True)
        port.port = path
        try:
            port.baudrate = self.baud
            port.open()
            _take_exclusively(port)
        except lost_errors() as error:
            port.close()
            raise LinkError(in_words(path, error)) from error
        except ValueError as error:
            port.close()
            raise LinkError(f"{path} cannot run at {self.baud} baud: {error}") from error
        self._port = port
        self._known = self._known or port_at(path)

    def read(self) -> bytes:
        """Whatever has come, after waiting 0.25 s at most. LinkError when the port is gone."""
        if self._port is None:
            raise LinkError(f"{self.name} is not open")
        try:
            data = _read_some(self._port)
        except lost_errors() as error:
            raise LinkError(f"{self.name} is gone: {error}; is it still plugged in?") from error
        if data is None:
            raise LinkError(f"{self.name} is gone: it was unplugged")
        return data

    def rest(self, seconds: float) -> None:
        """Let more gather for `seconds` [s], less where the port is gone."""
        rest_on(None if self._port is None else _descriptor(self._port), seconds)

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
        if port is None:
            return
        # Each on its own: a port that is gone cannot be given back, but its descriptor has to be closed all the same.
        for end in (lambda: _give_back(port), port.close):
            with contextlib.suppress(*lost_errors()):
                end()


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


def rest_on(fd: int | None, seconds: float, events: int = 0) -> None:
    """Wait `seconds` [s], less where `fd` hangs up or fails, or `events` of poll come; where there is no poll, wait."""
    if fd is None or not hasattr(select, "poll"):
        time.sleep(seconds)
        return
    poll = select.poll()
    poll.register(fd, events)  # a hang-up and an error are told unasked
    poll.poll(1000.0 * seconds)


def _descriptor(port: serial.Serial) -> int | None:
    """What to wait on; None on Windows, where a port has none."""
    return None if sys.platform == "win32" else port.fileno()


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
        data = os.read(fd, CHUNK)
    except BlockingIOError:
        return b""
    return _with_the_rest(fd, data) if len(data) == FULL_BYTES else data or None


def _with_the_rest(fd: int, data: bytes) -> bytes:
    """`data` and what waits behind it, so that a flood is read in few large steps; a fault shows in the next read."""
    parts = [data]
    while len(parts[-1]) == FULL_BYTES and len(parts) < CHUNK // FULL_BYTES and select.select([fd], [], [], 0.0)[0]:
        try:
            parts.append(os.read(fd, CHUNK))
        except OSError:
            break
    return b"".join(parts)


def _beside(path: str) -> str:
    """A near miss in the same folder, as words."""
    folder, name = os.path.split(path)
    try:
        near = difflib.get_close_matches(name, os.listdir(folder or "."), n=1)
    except OSError:
        return ""
    return f"; did you mean {os.path.join(folder, near[0])}?" if near else ""


def _unknown_scheme(text: str, scheme: str) -> str:
    near = difflib.get_close_matches(scheme.lower(), _SCHEMES, n=1)
    hint = f"; did you mean {near[0]}:?" if near else ""
    wanted = "a device path, file:PATH, socket://HOST:PORT, rfc2217://HOST:PORT or sim:"
    return f"{text}: there is no kind of source {scheme!r}; wanted {wanted}{hint}"


def _file(path: str, _baud: int) -> Source:
    return FileSource(path)


def _simulated(options: str, _baud: int) -> Source:
    from bridgeio.simulator.source import SimulatedSource

    return SimulatedSource(options)


def _socket(rest: str, _baud: int) -> Source:
    from bridgeio.network import SocketSource

    return SocketSource(f"socket:{rest}")


def _rfc2217(rest: str, baud: int) -> Source:
    from bridgeio.network import RemotePortSource

    return RemotePortSource(f"rfc2217:{rest}", baud)


#: scheme -> maker of the source from what stands behind the colon, and the rate [baud].
_SCHEMES: dict[str, Callable[[str, int], Source]] = {
    "file": _file,
    "sim": _simulated,
    "socket": _socket,
    "rfc2217": _rfc2217,
}
