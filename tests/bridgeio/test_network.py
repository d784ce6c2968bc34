"""A bridge at the far end of a network: bytes come through, and each way of failing is told in words."""

from __future__ import annotations

import select
import socket
import threading
import time
from collections.abc import Iterator

import pytest
import serial
from serial.rfc2217 import PortManager

from bridgeio.errors import LinkError
from bridgeio.link import Link, LinkState
from bridgeio.network import RemotePortSource, SocketSource
from bridgeio.ports import Source, open_source
from bridgeio.receiver import Receiver


@pytest.fixture
def server() -> Iterator[socket.socket]:
    """A listening socket; what it accepts is the far end."""
    with socket.create_server(("127.0.0.1", 0)) as listening:
        listening.settimeout(10.0)
        yield listening


def port_of(server: socket.socket) -> int:
    """The port a server listens on."""
    return int(server.getsockname()[1])


def read_up_to(source: Source, count: int) -> bytes:
    """So many bytes, in as many reads as it takes, but no more than forty silent ones."""
    got, silent = b"", 0
    while len(got) < count and silent < 40:
        piece = source.read()
        got, silent = got + piece, silent + (not piece)
    return got


def test_socket_reads_what_comes(server: socket.socket) -> None:
    """Bytes sent arrive unchanged, silence is b"", and nothing is sent back."""
    source = SocketSource(f"socket://127.0.0.1:{port_of(server)}")
    source.open()
    far, _ = server.accept()
    with far:
        assert source.read() == b""
        sent = bytes(range(256)) * 300
        far.sendall(sent)
        assert read_up_to(source, len(sent)) == sent
        source.close()
        assert far.recv(10) == b""


def test_socket_closed_by_the_other_end(server: socket.socket) -> None:
    """A server that closes is told as such; what it sent before is read first."""
    source = SocketSource(f"socket://127.0.0.1:{port_of(server)}")
    source.open()
    far, _ = server.accept()
    far.sendall(b"1 2\n")
    far.close()
    assert source.read() == b"1 2\n"
    with pytest.raises(LinkError, match=r"^socket://127\.0\.0\.1:\d+ is gone: it was closed by the other end$"):
        source.read()
    source.close()
    source.close()
    with pytest.raises(LinkError, match="is not open"):
        source.read()


@pytest.mark.parametrize("scheme", ["socket", "rfc2217"])
def test_connection_refused(server: socket.socket, scheme: str) -> None:
    """Where nothing listens, that is said with host and port; looking for it goes on, without an error."""
    port = port_of(server)
    server.close()
    source = open_source(f"{scheme}://127.0.0.1:{port}")
    with pytest.raises(LinkError, match=f"was refused; does anything listen on port {port} of 127.0.0.1\\?"):
        source.open()
    assert isinstance(source, SocketSource | RemotePortSource)
    assert source.reopen() is False


@pytest.mark.parametrize("scheme", ["socket", "rfc2217"])
def test_host_that_does_not_exist(monkeypatch: pytest.MonkeyPatch, scheme: str) -> None:
    """A host nobody knows is named."""

    def unknown(*_args: object, **_options: object) -> None:
        raise socket.gaierror(socket.EAI_NONAME, "Name or service not known")

    monkeypatch.setattr(socket, "getaddrinfo", unknown)
    with pytest.raises(LinkError, match=r"no host 'shck' was found \(Name or service not known\)"):
        open_source(f"{scheme}://shck:4000").open()


def test_host_that_does_not_answer(monkeypatch: pytest.MonkeyPatch) -> None:
    """A host that never answers is given up in words."""

    def silence(*_args: object, **_options: object) -> None:
        raise TimeoutError("timed out")

    monkeypatch.setattr(socket, "create_connection", silence)
    with pytest.raises(LinkError, match="shack does not answer; is it switched on and in reach"):
        SocketSource("socket://shack:4000").open()


@pytest.mark.parametrize("scheme", ["socket", "rfc2217"])
@pytest.mark.parametrize(
    "rest", ["", "//", "//host", "//:4000", "//host:port", "//host:99999", "host:4000", "//[::1:5"]
)
def test_address_that_is_none(scheme: str, rest: str) -> None:
    """An address without host or port is refused before anything is opened."""
    with pytest.raises(LinkError, match=f"wanted {scheme}://HOST:PORT$"):
        open_source(f"{scheme}:{rest}")


def test_impossible_host_name() -> None:
    """A host name no network can have is refused in words."""
    with pytest.raises(LinkError, match=r"^socket://a+:4000 does not open: "):
        SocketSource(f"socket://{'a' * 70}:4000").open()


class Lender(threading.Thread):
    """A server that lends a port by RFC 2217 to one client, and sends `bytes_out` when told to."""

    def __init__(self, server: socket.socket, bytes_out: bytes) -> None:
        super().__init__(daemon=True)
        self._server, self._bytes_out = server, bytes_out
        self.port = serial.serial_for_url("loop://", baudrate=9600)
        self.payload = b""
        self.send, self.over = threading.Event(), threading.Event()

    def run(self) -> None:
        """Serve until told to close."""
        far, _ = self._server.accept()
        with far:
            far.settimeout(5.0)
            self.write = far.sendall
            manager = PortManager(self.port, self)
            unsent = self._bytes_out
            while not self.over.is_set():
                if select.select([far], [], [], 0.02)[0]:
                    data = far.recv(1024)
                    if not data:
                        return
                    self.payload += b"".join(manager.filter(data))
                elif unsent and self.send.is_set():
                    far.sendall(b"".join(manager.escape(unsent)))
                    unsent = b""


def test_remote_port_sets_the_rate_and_reads(server: socket.socket) -> None:
    """A port by RFC 2217 runs at our rate, gives what comes, and gets no byte; when its server goes, it is gone."""
    sent = bytes(range(256))
    lender = Lender(server, sent)
    lender.start()
    source = RemotePortSource(f"rfc2217://127.0.0.1:{port_of(server)}", 57600)
    source.open()
    assert source.read() == b""
    lender.send.set()
    assert read_up_to(source, len(sent)) == sent
    assert (lender.port.baudrate, lender.payload) == (57600, b"")
    lender.over.set()
    with pytest.raises(LinkError, match="is gone: it was closed by the other end"):
        read_up_to(source, 1)
    source.close()
    source.close()
    with pytest.raises(LinkError, match="is not open"):
        source.read()


def test_rest_ends_where_the_connection_does(server: socket.socket) -> None:
    """Whoever lets bytes gather is back as soon as the other end closes, and not for bytes that come."""
    source = SocketSource(f"socket://127.0.0.1:{port_of(server)}")
    source.open()
    far, _ = server.accept()
    with far:
        far.sendall(b"abc")
        began_s = time.monotonic()
        source.rest(0.1)
        assert time.monotonic() - began_s >= 0.1
    source.rest(30.0)
    assert time.monotonic() - began_s < 10.0
    assert source.read() == b"abc"
    source.close()


def test_server_that_lends_no_port_is_left_behind(server: socket.socket) -> None:
    """While a server does not answer the state says that it is being opened, and stopping does not wait for it."""
    name = f"rfc2217://127.0.0.1:{port_of(server)}"
    link = Link(RemotePortSource(name), Receiver(), lambda _items, _at: None, lambda _: None)
    link.start()
    far, _ = server.accept()
    with far:
        assert link.state == LinkState("opening", f"opening {name}")
        began_s = time.monotonic()
        link.stop()
        assert time.monotonic() - began_s < 2.0
    assert link.state.phase == "lost"
