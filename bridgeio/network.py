"""A bridge at the far end of a network: raw bytes over TCP, or a remote serial port by RFC 2217.

One rule: nothing goes out but what opening the connection takes; what fails names the host, and what to do.
"""

from __future__ import annotations

import select
import socket
from typing import TYPE_CHECKING
from urllib.parse import urlsplit

from bridgeio.errors import LinkError
from bridgeio.ports import CHUNK, WAIT_S, rest_on

if TYPE_CHECKING:
    import serial

__all__ = ["RemotePortSource", "SocketSource"]

#: Long enough for a first packet that gets lost, short enough for whoever stops a link meanwhile [s].
CONNECT_S = 1.5
#: A host that vanishes without a word is noticed after 5 s of silence and three questions 2 s apart.
_KEEP_ALIVE = (("TCP_KEEPIDLE", 5), ("TCP_KEEPINTVL", 2), ("TCP_KEEPCNT", 3))
#: Poll's word for a connection that the other end has closed, where the system has one.
_CLOSED_THERE = getattr(select, "POLLRDHUP", 0)


class SocketSource:
    """Bytes as a TCP server sends them: `socket://HOST:PORT`. The connection is only read."""

    simulated = False
    live = True

    def __init__(self, name: str) -> None:
        """LinkError for an address without host or port."""
        self.name = name
        self._address = _address(name)
        self._socket: socket.socket | None = None

    def open(self) -> None:
        """Connect within 1.5 s, or raise LinkError."""
        try:
            self._socket = socket.create_connection(self._address, timeout=CONNECT_S)
            _watch_over(self._socket)
        except (OSError, UnicodeError) as error:
            raise LinkError(_in_words(self.name, self._address, error)) from error

    def reopen(self) -> bool:
        """Connect again; False while that cannot be."""
        return _opened(self)

    def read(self) -> bytes:
        """Whatever has come, after waiting 0.25 s at most. LinkError when the connection is gone."""
        if self._socket is None:
            raise LinkError(f"{self.name} is not open")
        try:
            if not select.select([self._socket], [], [], WAIT_S)[0]:
                return b""
            data = self._socket.recv(CHUNK)
        except OSError as error:
            raise LinkError(f"{self.name} is gone: {error.strerror or error}") from error
        if not data:
            raise LinkError(f"{self.name} is gone: it was closed by the other end")
        return data

    def rest(self, seconds: float) -> None:
        """Let more gather for `seconds` [s], less where the other end has closed the connection."""
        rest_on(None if self._socket is None else self._socket.fileno(), seconds, _CLOSED_THERE)

    def close(self) -> None:
        """Close the connection; harmless where it is closed."""
        held, self._socket = self._socket, None
        if held is not None:
            held.close()


class RemotePortSource:
    """A serial port that a server lends by RFC 2217, 8N1: `rfc2217://HOST:PORT`, options of pyserial after a `?`."""

    simulated = False
    live = True

    def __init__(self, name: str, baud: int = 115200) -> None:
        """LinkError for an address without host or port."""
        self.name, self.baud = name, baud
        self._address = _address(name)
        self._port: serial.SerialBase | None = None

    def open(self) -> None:
        """Connect, and agree on rate and format: up to 10 s with a server that does not answer."""
        import serial

        try:
            self._port = serial.serial_for_url(self.name, baudrate=self.baud, timeout=WAIT_S)
        except OSError as error:
            # pyserial hides what happened to the socket behind an error of its own.
            cause = error.__context__ if isinstance(error.__context__, OSError) else error
            raise LinkError(_in_words(self.name, self._address, cause)) from error
        except ValueError as error:
            raise LinkError(f"{self.name} cannot be used at {self.baud} baud: {error}") from error

    def reopen(self) -> bool:
        """Connect again; False while that cannot be."""
        return _opened(self)

    def read(self) -> bytes:
        """Whatever has come, after waiting 0.25 s at most. LinkError when the connection is gone."""
        if self._port is None:
            raise LinkError(f"{self.name} is not open")
        try:
            return bytes(self._port.read(self._port.in_waiting or 1))
        except OSError as error:
            raise LinkError(f"{self.name} is gone: it was closed by the other end") from error

    def close(self) -> None:
        """Close the connection; harmless where it is closed."""
        port, self._port = self._port, None
        if port is not None:
            port.close()


def _opened(source: SocketSource | RemotePortSource) -> bool:
    """Whether it opens; a server that is down refuses, so that every failure counts as not there yet."""
    try:
        source.open()
    except LinkError:
        source.close()
        return False
    return True


def _address(name: str) -> tuple[str, int]:
    """Host and port of an address `scheme://HOST:PORT`."""
    scheme = name.partition(":")[0]
    try:
        parts = urlsplit(name)
        host, port = parts.hostname, parts.port
    except ValueError as error:
        raise LinkError(f"{name}: {error}; wanted {scheme}://HOST:PORT") from error
    if not host or not port or not name.startswith(f"{scheme}://"):
        raise LinkError(f"{name}: host or port is missing; wanted {scheme}://HOST:PORT")
    return host, port


def _watch_over(connection: socket.socket) -> None:
    """Let the system ask after a silent other end, without a byte of ours."""
    connection.setsockopt(socket.SOL_SOCKET, socket.SO_KEEPALIVE, 1)
    for option, value in _KEEP_ALIVE:
        if hasattr(socket, option):
            connection.setsockopt(socket.IPPROTO_TCP, getattr(socket, option), value)


def _in_words(name: str, address: tuple[str, int], error: Exception) -> str:
    host, port = address
    if isinstance(error, ConnectionRefusedError):
        return f"{name}: the connection was refused; does anything listen on port {port} of {host}?"
    if isinstance(error, socket.gaierror):
        return f"{name}: no host {host!r} was found ({error.strerror}); is the name right, and the network up?"
    if isinstance(error, TimeoutError):
        return f"{name}: {host} does not answer; is it switched on and in reach?"
    return f"{name} does not open: {getattr(error, 'strerror', None) or error}"
