"""One reader thread between a source and those who listen: it alone opens, reads and closes the port.

One rule: whatever happens in the thread reaches the listeners as a state in words, and nothing can keep the
program from ending.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

from bridgeio.errors import BridgeIOError
from bridgeio.ports import EndOfSource, Source

if TYPE_CHECKING:
    from bridgeio.frames import Item
    from bridgeio.receiver import Receiver

__all__ = ["PHASES", "Link", "LinkState"]

#: Phase of a link -> what it means. lost and ended are final.
PHASES: dict[str, str] = {
    "opening": "the port is being opened",
    "open": "frames come, or may come any moment",
    "silent": "open, but nothing readable has come for a while",
    "lost": "the port did not open, is gone, or a listener failed",
    "ended": "a file or a simulation has come to its end, or the link was stopped",
}

#: A board that resets when its port opens needs up to this long to speak [s].
SILENT_AFTER_S = 3.0


@dataclass(frozen=True, slots=True)
class LinkState:
    """One of PHASES, and the same as a person would say it. The words may hold outside text."""

    phase: str
    words: str


class Link:
    """Reads `source` through `receiver` in a daemon thread of its own.

    `on_items(items, arrival_s)` and `on_state(state)` are called from that thread; arrival is in seconds UTC.
    """

    def __init__(
        self,
        source: Source,
        receiver: Receiver,
        on_items: Callable[[list[Item], float], None],
        on_state: Callable[[LinkState], None],
        silent_after_s: float = SILENT_AFTER_S,
    ) -> None:
        self._source, self._receiver = source, receiver
        self._on_items, self._on_state = on_items, on_state
        self._silence = _Silence(silent_after_s)
        self._state = LinkState("opening", f"opening {source.name}")
        self._error: Exception | None = None
        self._stopping = threading.Event()
        self._thread = threading.Thread(target=self._run, name="link reader", daemon=True)

    @property
    def state(self) -> LinkState:
        """How the link is now; silence is seen here even while a read hangs in a driver."""
        state = self._state
        return self._silence.state() or state if state.phase in ("open", "silent") else state

    def start(self) -> None:
        """Start reading. A link runs once; for another run make another link."""
        self._thread.start()

    def stop(self, timeout_s: float = 2.0) -> None:
        """Let the reader hand on what it has read, close and end; left behind after `timeout_s` [s].

        Raises what a listener raised in the thread, once.
        """
        self._stopping.set()
        if self._thread.is_alive() and self._thread is not threading.current_thread():
            self._thread.join(timeout_s)
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
        """One opening of the port, until it is lost, ends, or we are stopped; closed again in any case."""
        try:
            self._tell(self._state)
            self._source.open()
            self._silence.start()
            self._tell(LinkState("open", f"{self._source.name} is open"))
            while not self._stopping.is_set():
                self._step(self._source.read())
            return LinkState("ended", f"{self._source.name} is closed")
        finally:
            self._source.close()

    def _step(self, data: bytes) -> None:
        arrival_s = time.time()
        items = self._receiver.feed(data) if data else []
        self._silence.heard(data, bool(items))
        state = self._silence.state() or LinkState("open", f"{self._source.name} is open")
        if state != self._state:
            self._tell(state)
        if items:
            self._on_items(items, arrival_s)

    def _tell(self, state: LinkState) -> None:
        self._state = state
        self._on_state(state)

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
