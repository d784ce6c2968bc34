"""One reader between a source and those who listen: it alone opens, reads and closes the port, in a thread of its own
(`start`) or in the caller's (`run`).

A port that was open and is gone is looked for until it is back, or the link is stopped.

One rule: whatever happens to the source reaches the listeners as a state in words, and nothing can keep the program
from ending.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

from bridgeio.errors import BridgeIOError, LinkError
from bridgeio.ports import EndOfSource, Resting, Returning, Source

if TYPE_CHECKING:
    from bridgeio.frames import Item
    from bridgeio.receiver import Receiver

__all__ = ["PHASES", "REST_S", "Link", "LinkState", "rest_s"]

#: Phase of a link -> what it means. lost and ended are final.
PHASES: dict[str, str] = {
    "opening": "the port is being opened",
    "open": "frames come, or may come any moment",
    "silent": "open, but nothing readable has come for a while",
    "looking": "the port is gone and is looked for; open follows when it is back",
    "lost": "the port did not open, is gone for good, or a listener failed",
    "ended": "a file or a simulation has come to its end, or the link was stopped",
}

#: A board that resets when its port opens needs up to this long to speak [s].
SILENT_AFTER_S = 3.0
#: A port that is gone is tried this often, at once the first time [s].
TRY_EVERY_S = 0.5
#: After frames have been handed on the next ones gather for this long [s]: most of what a frame costs is the same for
#: a dozen. A bridge that sends fewer than thirty a second never waits, and half a frame is never waited for.
REST_S = 0.03
#: One who stops a link waits no longer than this for a source that is just being opened [s]: nothing has come from it.
_OPENING_S = 1.0
#: Where so much comes at once [bytes] there is no time to rest: a terminal's buffer holds hardly more.
_PLENTY_BYTES = 3072


@dataclass(frozen=True, slots=True)
class LinkState:
    """One of PHASES, and the same as a person would say it. The words may hold outside text."""

    phase: str
    words: str


def rest_s(source: Source, data: bytes, wanted_s: float = REST_S) -> float:
    """How long [s] to let more gather after what `data` held has been handed on; nothing gathers in a file."""
    return wanted_s if source.live and len(data) < _PLENTY_BYTES else 0.0


class Link:
    """Reads `source` through `receiver`, in a daemon thread of its own or in the caller's.

    `on_items(items, arrival_s)`, `on_state(state)` and `on_reopened()` are called from that thread; arrival is in
    seconds UTC. `on_reopened` comes when the source is back after a loss, before anything read from it: what was known
    of the board no longer holds, for another one may have been plugged in. on_bytes: given what was read before
    anything is made of it. persist: a source that does not open at first is looked for like one that was lost.
    """

    def __init__(
        self,
        source: Source,
        receiver: Receiver,
        on_items: Callable[[list[Item], float], None],
        on_state: Callable[[LinkState], None],
        silent_after_s: float = SILENT_AFTER_S,
        *,
        on_reopened: Callable[[], None] = lambda: None,
        on_bytes: Callable[[bytes], object] = lambda data: None,
        persist: bool = False,
    ) -> None:
        self._source, self._receiver = source, receiver
        self._on_items, self._on_state, self._on_reopened = on_items, on_state, on_reopened
        self._on_bytes = on_bytes
        #: After frames more may gather for this long [s]; a listener may change it.
        self.rest_s = REST_S
        self._persist = persist
        self._tried_s = -TRY_EVERY_S
        self._silence = _Silence(silent_after_s)
        self._state = LinkState("opening", f"opening {source.name}")
        self._error: Exception | None = None
        self._stopping = threading.Event()
        # Whoever can rest with an eye on the port does, so that a pulled plug is no later for it.
        self._rest: Callable[[float], object] = source.rest if isinstance(source, Resting) else self._stopping.wait
        self._thread = threading.Thread(target=self._run, name="link reader", daemon=True)

    @property
    def state(self) -> LinkState:
        """How the link is now; silence is seen here even while a read hangs in a driver."""
        state = self._state
        return self._silence.state() or state if state.phase in ("open", "silent") else state

    def start(self) -> None:
        """Start reading. A link runs once; for another run make another link."""
        self._thread.start()

    def run(self) -> None:
        """Read in the calling thread, in place of `start`, until the source ends or a listener calls `stop`.

        Raises LinkError or FileError where it does not open or is lost for good, and what a listener raises.
        """
        try:
            final = self._session()
        except EndOfSource as error:
            final = LinkState("ended", str(error))
        self._tell(final)

    def stop(self, timeout_s: float = 2.0) -> None:
        """Let the reader hand on what it has read, close and end; left behind after `timeout_s` [s].

        Raises what a listener raised in the thread, once.
        """
        self._stopping.set()
        if self._thread.is_alive() and self._thread is not threading.current_thread():
            closed = self._state.phase in ("opening", "looking")
            self._thread.join(min(timeout_s, _OPENING_S) if closed else timeout_s)
            if self._thread.is_alive():
                self._state = LinkState("lost", f"{self._source.name} does not answer and was left behind")
        error, self._error = self._error, None
        if error is not None:
            raise error

    def _run(self) -> None:
        try:
            final = self._session()
        except EndOfSource as error:
            final = LinkState("ended", str(error))
        except BridgeIOError as error:
            final = LinkState("lost", str(error))
        except Exception as error:  # noqa: BLE001 - a listener may raise anything; stop() raises it again
            self._error = error
            words = f"reading stopped by a fault in the program: {type(error).__name__}: {error}"
            final = LinkState("lost", words)
        self._tell_last(final)

    def _session(self) -> LinkState:
        """From the first opening until the source is lost for good, ends, or we are stopped; closed in any case."""
        try:
            self._tell(self._state)
            self._open()
            while not self._stopping.is_set():
                try:
                    data = self._source.read()
                except LinkError as error:
                    self._look_for(error)
                else:
                    self._step(data)
            return LinkState("ended", f"{self._source.name} is closed")
        finally:
            self._source.close()

    def _open(self) -> None:
        """Open for the first time. LinkError where that cannot be, unless we are to persist."""
        self._tried_s = time.monotonic()
        try:
            self._source.open()
        except LinkError as error:
            if not self._persist:
                raise
            self._look_for(error)
        else:
            self._opened()

    def _look_for(self, loss: LinkError) -> None:
        """Try until the source is open again or we are stopped. Raises `loss` where the source never comes back."""
        self._source.close()
        if not isinstance(self._source, Returning):
            raise loss
        began_s, words = time.monotonic(), f"{loss}; looking for it"
        while not self._stopping.is_set():
            self._tell_new(LinkState("looking", f"{words} for {int(time.monotonic() - began_s)} s"))
            # A port that opens and is gone at once, again and again, is not tried more often either.
            if self._stopping.wait(max(0.0, self._tried_s + TRY_EVERY_S - time.monotonic())):
                return
            self._tried_s = time.monotonic()
            try:
                back, words = self._source.reopen(), f"{loss}; looking for it"
            except LinkError as error:
                back, words = False, f"{error}; trying again"
            if back:
                self._receiver.reopened()
                self._on_reopened()
                self._opened()
                return

    def _opened(self) -> None:
        self._silence.start()
        self._tell(LinkState("open", f"{self._source.name} is open"))

    def _step(self, data: bytes) -> None:
        arrival_s, items = time.time(), []
        if data:
            self._on_bytes(data)
            items = self._receiver.feed(data)
        self._silence.heard(data, bool(items))
        state = self._silence.state() or LinkState("open", f"{self._source.name} is open")
        self._tell_new(state)
        if items:
            self._on_items(items, arrival_s)
            rest = rest_s(self._source, data, self.rest_s)
            if rest and not self._stopping.is_set():
                self._rest(rest)

    def _tell(self, state: LinkState) -> None:
        self._state = state
        self._on_state(state)

    def _tell_new(self, state: LinkState) -> None:
        if state != self._state:
            self._tell(state)

    def _tell_last(self, state: LinkState) -> None:
        """Tell the last state; a listener that fails even on this is kept for stop()."""
        try:
            self._tell(state)
        except Exception as error:  # noqa: BLE001 - as in _run
            self._error = self._error or error


class _Silence:
    """The clock of silence: since when nothing readable has come, and whether anything came at all."""

    def __init__(self, after_s: float) -> None:
        self._after_s = after_s
        self._noise = False
        self._since_s = time.monotonic()

    def start(self) -> None:
        self._since_s, self._noise = time.monotonic(), False

    def heard(self, data: bytes, readable: bool) -> None:
        """Note what a read has brought: bytes that make no sense are noise, they do not end the silence."""
        if readable:
            self.start()
        elif data:
            self._noise = True

    def state(self) -> LinkState | None:
        """Return the silent state in whole seconds, None while there is no silence."""
        quiet_s = time.monotonic() - self._since_s
        if quiet_s < self._after_s:
            return None
        if self._noise:
            words = f"open, but nothing that came in {int(quiet_s)} s could be read: wrong rate?"
            return LinkState("silent", words)
        return LinkState("silent", f"open but silent for {int(quiet_s)} s")
