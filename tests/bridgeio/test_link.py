"""The reader thread: what comes is handed on, what goes wrong is said, and it always ends."""

from __future__ import annotations

import functools
import itertools
import re
import threading
import time
from collections.abc import Callable
from io import FileIO
from pathlib import Path

import pytest

from bridgeio.errors import LinkError
from bridgeio.frames import Item, Tallies
from bridgeio.framing import pack
from bridgeio.link import PHASES, REST_S, Link, LinkState, rest_s
from bridgeio.ports import DeviceSource, EndOfSource, Source, open_source
from bridgeio.receiver import Receiver


class Listener:
    """Keeps what a link says; `fail` is raised when items come."""

    def __init__(self, fail: Exception | None = None) -> None:
        self.items: list[Item] = []
        self.arrivals: list[float] = []
        self.states: list[LinkState] = []
        self._fail = fail

    def on_items(self, items: list[Item], arrival_s: float) -> None:
        """Keep, or fail."""
        if self._fail:
            raise self._fail
        self.items += items
        self.arrivals.append(arrival_s)

    def on_state(self, state: LinkState) -> None:
        """Keep."""
        self.states.append(state)

    @property
    def phases(self) -> list[str]:
        """Phases in order, each change once."""
        phases = [state.phase for state in self.states]
        return [p for n, p in enumerate(phases) if n == 0 or p != phases[n - 1]]

    def link(self, source: Source, silent_after_s: float = 3.0) -> Link:
        """A link that tells this listener, started."""
        link = Link(source, Receiver(), self.on_items, self.on_state, silent_after_s=silent_after_s)
        link.start()
        return link


class Scripted:
    """A source that gives prepared pieces, then waits, ends, breaks or hangs."""

    name, simulated, live = "scripted", False, True

    def __init__(self, *pieces: bytes, then: Callable[[], bytes] = lambda: b"") -> None:
        self._pieces, self._then = list(pieces), then
        self.calls: list[tuple[str, str]] = []

    def _note(self, what: str) -> None:
        self.calls.append((what, threading.current_thread().name))

    def open(self) -> None:
        """Note who opens."""
        self._note("open")

    def read(self) -> bytes:
        """Give the next piece."""
        self._note("read")
        time.sleep(0.001)
        return self._pieces.pop(0) if self._pieces else self._then()

    def close(self) -> None:
        """Note who closes."""
        self._note("close")


def until(condition: Callable[[], bool], timeout_s: float = 10.0) -> None:
    """Wait for a condition, or fail."""
    deadline_s = time.monotonic() + timeout_s
    while not condition():
        assert time.monotonic() < deadline_s, "waited in vain"
        time.sleep(0.005)


def frames(count: int) -> bytes:
    """So many tallies on the wire, after the lone zero of a start."""
    return b"\0" + pack(Tallies.of(range(count), [10 * n for n in range(count)], 1000, 50))


def test_frames_pass_from_port_to_listener(pty: tuple[FileIO, str]) -> None:
    """Frames written into a port reach the listener with the time of their arrival."""
    master, path = pty
    listener = Listener()
    link = listener.link(DeviceSource(path))
    until(lambda: "open" in listener.phases)
    before_s = time.time()
    master.write(frames(20))
    until(lambda: sum(len(i) for i in listener.items if isinstance(i, Tallies)) == 20)
    assert before_s <= listener.arrivals[0] <= time.time()
    assert link.state == LinkState("open", f"{path} is open")
    link.stop()


def test_fast_bridge_is_read_in_few_steps() -> None:
    """After frames the reader rests while more gather; half a frame is no reason to rest."""
    read_s: list[float] = []

    class Timed(Scripted):
        def read(self) -> bytes:
            read_s.append(time.monotonic())
            return super().read()

    whole = frames(3)
    listener = Listener()
    link = listener.link(Timed(whole, whole[:10], whole[10:]))
    until(lambda: len(read_s) > 3)
    link.stop()
    assert read_s[1] - read_s[0] >= REST_S
    assert read_s[3] - read_s[2] >= REST_S
    assert min(after - before for before, after in itertools.pairwise(read_s[:4])) < REST_S


def test_rest_is_for_what_gathers() -> None:
    """A flood is read on at once, as a port holds little, and so is a file."""
    file = Scripted()
    file.live = False
    assert rest_s(Scripted(), bytes(15)) == REST_S
    assert rest_s(Scripted(), bytes(15), 0.1) == 0.1
    assert rest_s(Scripted(), bytes(4095)) == 0.0
    assert rest_s(file, bytes(15)) == 0.0


def test_port_unplugged_is_looked_for_in_words(pty: tuple[FileIO, str], tmp_path: Path) -> None:
    """When the other end goes away the link says so, and for how long it has looked for it, until it is stopped."""
    master, path = pty
    # A name of our own: that of a terminal which is gone may be given to somebody else's at once.
    port = tmp_path / "port"
    port.symlink_to(path)
    listener = Listener()
    link = listener.link(DeviceSource(str(port)))
    until(lambda: "open" in listener.phases)
    port.unlink()
    master.close()
    words = rf"{port} is gone: it was unplugged; looking for it for [1-9]\d* s"
    until(lambda: re.fullmatch(words, link.state.words) is not None)
    link.stop()
    assert listener.phases == ["opening", "open", "looking", "ended"]


def test_port_that_does_not_open() -> None:
    """A port that is not there at first is lost with the words of the error; stop raises nothing."""
    listener = Listener()
    link = listener.link(DeviceSource("/dev/no-such-port"))
    until(lambda: link.state.phase == "lost")
    assert "/dev/no-such-port is not there" in link.state.words
    link.stop()


def test_silence_is_noticed_and_ends(pty: tuple[FileIO, str]) -> None:
    """Without bytes the link is silent, in seconds, and open again with the next frame."""
    master, path = pty
    listener = Listener()
    link = listener.link(DeviceSource(path), silent_after_s=0.2)
    until(lambda: link.state == LinkState("silent", "open but silent for 1 s"))
    master.write(frames(3))
    until(lambda: link.state.phase == "open")
    until(lambda: listener.phases == ["opening", "open", "silent", "open"])
    link.stop()


def test_unreadable_bytes_do_not_end_the_silence() -> None:
    """Bytes that make no frame count as silence, with another reason."""
    listener = Listener()
    link = listener.link(Scripted(then=lambda: b"\xf3\x8a\x91"), silent_after_s=0.2)
    until(lambda: link.state.phase == "silent")
    assert "nothing that came in 0 s could be read: wrong rate?" in link.state.words
    link.stop()


def test_silence_is_seen_while_a_read_hangs() -> None:
    """A read that never returns does not keep the state at open, nor stop from returning."""
    release = threading.Event()
    listener = Listener()

    def hang() -> bytes:
        release.wait(30)
        return b""

    source = Scripted(then=hang)
    link = listener.link(source, silent_after_s=0.2)
    until(lambda: link.state.phase == "silent")
    started_s = time.monotonic()
    link.stop(timeout_s=0.1)
    assert time.monotonic() - started_s < 5.0
    assert link.state == LinkState("lost", "scripted does not answer and was left behind")
    release.set()
    until(lambda: source.calls[-1][0] == "close")


def test_end_of_a_simulation() -> None:
    """A bounded simulation ends the link with all its frames handed on."""
    listener = Listener()
    link = listener.link(open_source("sim:duration=3&pace=fast"))
    until(lambda: link.state.phase == "ended")
    assert "has ended after 3 s" in link.state.words
    assert sum(len(i) for i in listener.items if isinstance(i, Tallies)) >= 299
    link.stop()


def test_one_thread_opens_reads_and_closes() -> None:
    """Only the reader thread touches the source, and closing is the last thing it does."""
    source, listener = Scripted(frames(2)), Listener()
    link = listener.link(source)
    until(lambda: bool(listener.items))
    link.stop()
    assert {thread for _, thread in source.calls} == {"link reader"}
    assert source.calls[0][0] == "open"
    assert [what for what, _ in source.calls].count("close") == 1
    assert source.calls[-1][0] == "close"


def test_stop_joins_the_thread() -> None:
    """After stop the thread is gone, the state is ended, and a second stop is harmless."""
    listener, before = Listener(), set(threading.enumerate())
    link = listener.link(Scripted())
    until(lambda: "open" in listener.phases)
    link.stop()
    assert set(threading.enumerate()) <= before
    assert link.state == LinkState("ended", "scripted is closed")
    link.stop()


def test_stop_while_a_source_is_being_opened() -> None:
    """A source that takes long to open is left behind within 1 s, and the state has said what is going on."""
    release, listener = threading.Event(), Listener()

    class Slow(Scripted):
        def open(self) -> None:
            super().open()
            release.wait(30)

    source = Slow()
    link = listener.link(source)
    until(lambda: bool(source.calls))
    assert link.state == LinkState("opening", "opening scripted")
    began_s = time.monotonic()
    link.stop(timeout_s=20.0)
    assert time.monotonic() - began_s < 5.0
    assert link.state == LinkState("lost", "scripted does not answer and was left behind")
    release.set()
    until(lambda: source.calls[-1][0] == "close")
    assert ("read", "link reader") not in source.calls


def test_link_may_run_in_the_thread_of_the_caller() -> None:
    """`run` opens, reads and closes in the calling thread, and returns once a listener has stopped it."""
    source, listener = Scripted(frames(2)), Listener()
    link = Link(source, Receiver(), lambda _items, _at: link.stop(), listener.on_state)
    link.run()
    assert {thread for _, thread in source.calls} == {threading.current_thread().name}
    assert [what for what, _ in source.calls] == ["open", "read", "close"]
    assert listener.phases == ["opening", "open", "ended"]


def test_run_ends_with_the_source() -> None:
    """`run` returns at the end of a source, and raises what a source is lost by, closed in either case."""

    def fail(error: Exception) -> bytes:
        raise error

    ended, lost = (
        Scripted(then=functools.partial(fail, error))
        for error in (EndOfSource("it has ended"), LinkError("it is gone"))
    )
    listener = Listener()
    Link(ended, Receiver(), listener.on_items, listener.on_state).run()
    assert listener.states[-1] == LinkState("ended", "it has ended")
    with pytest.raises(LinkError, match="it is gone"):
        Link(lost, Receiver(), listener.on_items, listener.on_state).run()
    assert ended.calls[-1][0] == lost.calls[-1][0] == "close"


def test_bytes_are_handed_on_before_what_is_made_of_them() -> None:
    """Every byte that was read comes as it is, before the items in it."""
    told: list[bytes | str] = []
    data = frames(2)
    link = Link(
        Scripted(data[:5], data[5:]), Receiver(), lambda _items, _at: told.append("items"), lambda _: None,
        on_bytes=told.append,
    )  # fmt: skip
    link.start()
    until(lambda: "items" in told)
    link.stop()
    assert told == [data[:5], data[5:], "items"]


def test_stop_before_start() -> None:
    """A link that was never started can be stopped."""
    listener = Listener()
    Link(Scripted(), Receiver(), listener.on_items, listener.on_state).stop()
    assert listener.states == []


def test_listener_may_stop_the_link_itself() -> None:
    """Stopping from inside a listener does not wait for itself."""
    listener = Listener()
    link = Link(Scripted(frames(2)), Receiver(), lambda _items, _at: link.stop(), listener.on_state)
    link.start()
    until(lambda: link.state.phase == "ended")


def test_listener_that_fails() -> None:
    """A fault in a listener closes the port, is told as lost, and is raised by stop, once."""
    source, listener = Scripted(frames(2)), Listener(fail=ZeroDivisionError("by zero"))
    link = listener.link(source)
    until(lambda: link.state.phase == "lost")
    assert link.state.words == "reading stopped by a fault in the program: ZeroDivisionError: by zero"
    assert source.calls[-1][0] == "close"
    with pytest.raises(ZeroDivisionError, match="by zero"):
        link.stop()
    link.stop()


@pytest.mark.parametrize(
    ("error", "phase"), [(LinkError("it is gone"), "lost"), (EndOfSource("it has ended"), "ended")]
)
def test_how_a_source_ends(error: Exception, phase: str) -> None:
    """A lost port is lost, an end is an end; both in the source's own words."""

    def fail() -> bytes:
        raise error

    listener = Listener()
    link = listener.link(Scripted(frames(1), then=fail))
    until(lambda: link.state.phase == phase)
    assert link.state.words == str(error)
    assert set(listener.phases) <= set(PHASES)
    link.stop()
