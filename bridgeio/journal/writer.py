"""The journal's own thread: the reading hands over and goes on, the disk takes its time.

One rule: `put` never waits for the disk. While the disk is behind, frames wait in a bounded queue; beyond it they are
counted, and a mark tells how many were not kept and for how long.
"""

from __future__ import annotations

import sqlite3
import threading
import time
from collections import deque
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

from bridgeio.account import Counters
from bridgeio.errors import BridgeIOError
from bridgeio.frames import Item

from .assembly import Assembly, Feed, Reopened, Unkept
from .book import Book, Mark, Stretch
from .pack import frames_in

__all__ = ["JournalState", "Writer"]

#: Frames that wait for the disk: two minutes of a thousand a second.
MOST_WAITING = 120_000
#: Marks that wait for the disk.
_MOST_MARKS = 10_000
#: What a feed weighs in the queue beside its frames, so that empty ones are bounded too.
_FEED_WEIGHT = 1

_POLL_S, _TICK_S, _RETRY_S, _LOOK_S = 0.1, 0.002, 1.0, 0.25
#: So often, and so far apart [s], the last rows are tried when told to stop.
_LAST_TRIES, _LAST_PAUSE_S = 3, 0.25
#: A commit that takes this long is told [s].
_SLOW_S = 1.0
#: Our clock against the steady one: more than this between two looks is a step [s].
_STEP_S = 0.05
_US = 1_000_000


@dataclass(frozen=True, slots=True)
class JournalState:
    """phase: recording, slow, stopped, moved or closed; words: what a person should know."""

    phase: str
    words: str


class Writer:
    """Writes one journal, from construction to `stop`. `put`, `mark` and `begin` are for one thread or several."""

    def __init__(
        self,
        path: str | Path,
        stretch: Stretch,
        *,
        on_state: Callable[[JournalState], None] | None = None,
        on_commit: Callable[[int], None] | None = None,
        most_waiting: int = MOST_WAITING,
        wall: Callable[[], float] = time.time,
        steady: Callable[[], float] = time.monotonic,
        book: Callable[[str | Path], Book] = Book,
    ) -> None:
        """Open the journal and begin a stretch. JournalHeld or FileError where it may not be written.

        on_state, on_commit (number of the last block that is safe) are called from the writer's thread; they must not
        raise nor wait. most_waiting: frames that may wait for the disk.
        """
        self._book = book(path)
        self._assembly = Assembly(stretch)
        self._on_state, self._on_commit = on_state, on_commit
        self._wall, self._steady = wall, steady
        self._most_waiting = most_waiting
        self._guard = threading.Lock()
        self._queue: deque[Feed | Mark | Reopened | Stretch | Unkept] = deque()
        self._waiting = self._marks_waiting = 0
        self._gap: Unkept | None = None
        self._fault: Exception | None = None
        self._ending = threading.Event()
        self._writing_since_s: float | None = None
        self._trouble_since_s: float | None = None
        self._clock_offset_s = wall() - steady()
        self._looked_s = steady()
        self._state = JournalState("recording", f"recording to {self._book.path}")
        self._thread = threading.Thread(target=self._run, name="journal", daemon=True)
        self._thread.start()

    @property
    def path(self) -> Path:
        """Where recording goes now: the rescue file once the journal was moved."""
        return self._book.path

    @property
    def state(self) -> JournalState:
        """How recording stands."""
        since_s = self._writing_since_s
        behind_s = 0.0 if since_s is None else self._steady() - since_s
        if self._state.phase in ("recording", "moved") and behind_s >= _SLOW_S:
            return JournalState("slow", f"the disk has not answered for {behind_s:.0f} s; {self._waiting} frames wait")
        return self._state

    def put(self, items: Sequence[Item], arrival_s: float, counters: Counters | None = None) -> bool:
        """Hand over items that arrived together at `arrival_s` [s since 1970]; never waits for the disk.

        counters: the receiver's, as they stand. False where there was no room: the frames are counted as not kept.
        """
        damaged, missing = (counters.damaged, counters.lost) if counters else (0, 0)
        feed = Feed(items, arrival_s, self._steady(), damaged, missing)
        frames = sum(map(frames_in, items))
        with self._guard:
            if self._waiting + frames + _FEED_WEIGHT > self._most_waiting:
                first_s = self._gap.first_s if self._gap else arrival_s
                self._gap = Unkept((self._gap.frames if self._gap else 0) + frames, first_s, arrival_s)
                return False
            self._close_gap()
            self._queue.append(feed)
            self._waiting += frames + _FEED_WEIGHT
        return True

    def mark(self, kind: str, text: str = "", value: float = 0.0, utc_s: float | None = None) -> bool:
        """Note something: a word for its kind, a text, a value [Hz or s by the kind]. False where too many wait."""
        utc_us = int((self._wall() if utc_s is None else utc_s) * _US)
        with self._guard:
            if self._marks_waiting >= _MOST_MARKS:
                return False
            self._queue.append(Mark(kind, utc_us, text, value))
            self._marks_waiting += 1
        return True

    def begin(self, stretch: Stretch) -> None:
        """What is put from here on belongs to another stretch: another source or bridge file."""
        with self._guard:
            self._queue.append(stretch)

    def reopened(self) -> None:
        """The source was lost and is back: what is put from here on is of no known board until a nameplate tells."""
        with self._guard:
            self._queue.append(Reopened(int(self._wall() * _US)))

    def stop(self, timeout_s: float = 10.0) -> bool:
        """Write what waits and close the journal. False where the disk has not taken it within `timeout_s`."""
        self._ending.set()
        self._thread.join(timeout_s)
        if self._fault:
            raise self._fault
        return not self._thread.is_alive() and self._state.phase == "closed"

    # The writer's thread.

    def _run(self) -> None:
        try:
            self._go_on()
        except Exception as error:  # noqa: BLE001 - told at once and raised by `stop`
            self._fault = error
            self._state = JournalState("stopped", f"the journal has stopped by a fault of the program: {error!r}")
            if self._on_state:
                self._on_state(self._state)

    def _go_on(self) -> None:
        while True:
            ending = self._ending.wait(self._pause_s())
            self._gather()
            self._watch_clock()
            if ending:
                self._assembly.cut()
            if self._assembly.rows:
                self._write(ending)
            else:
                self._look()
            if ending:
                self._finish()
                return

    def _pause_s(self) -> float:
        """Until the next look into the queue, sooner where a block is due [s]."""
        due_s = self._assembly.due_s
        return _POLL_S if due_s is None else min(_POLL_S, max(_TICK_S, due_s - self._steady()))

    def _gather(self) -> None:
        with self._guard:
            if self._ending.is_set():
                self._close_gap()
            entries, self._queue = self._queue, deque()
            self._waiting = self._marks_waiting = 0
        for entry in entries:
            if isinstance(entry, Feed):
                self._assembly.take(entry)
            elif isinstance(entry, Mark):
                self._assembly.mark(entry)
            elif isinstance(entry, Stretch):
                self._assembly.begin(entry)
            elif isinstance(entry, Reopened):
                self._assembly.reopened(entry.utc_us)
            else:
                self._assembly.unkept(entry)
        self._assembly.tick(self._steady())

    def _close_gap(self) -> None:
        """Queue the word on what was not kept, before what is kept again. For whoever holds the guard."""
        if self._gap:
            self._queue.append(self._gap)
            self._gap = None

    def _write(self, ending: bool) -> None:
        """Commit the rows gathered; while the disk refuses, try again every second and let the queue fill.

        At the end it is tried a few times: what a last write adds, a mark on how long it took, is written too.
        """
        tries = _LAST_TRIES
        while self._assembly.rows:
            self._look()
            started_s = self._writing_since_s = self._steady()
            tries -= 1
            try:
                last = self._book.write(self._assembly.rows)
            except sqlite3.Error as error:
                self._refused(error)
                if not ending and self._ending.wait(_RETRY_S):
                    return
                if ending:
                    time.sleep(_LAST_PAUSE_S)
            else:
                self._assembly.rows = []
                self._committed(last, self._steady() - started_s)
                if not ending:
                    return
            finally:
                self._writing_since_s = None
            if ending and not tries:
                return

    def _committed(self, last: int, took_s: float) -> None:
        if self._trouble_since_s is not None:
            away_s, self._trouble_since_s = self._steady() - self._trouble_since_s, None
            self._note("stall", f"the journal could not be written for {away_s:.1f} s", away_s)
            self._tell("recording", f"recording to {self.path} again after {away_s:.0f} s")
        elif took_s >= _SLOW_S:
            self._note("stall", f"the disk took {took_s:.1f} s to write", took_s)
        if self._on_commit:
            self._on_commit(last)

    def _refused(self, error: sqlite3.Error) -> None:
        if self._trouble_since_s is None:
            self._trouble_since_s = self._steady()
        self._tell(
            "stopped",
            f"the journal has stopped: {self.path}: {error}; the reading goes on, up to {self._most_waiting} frames "
            "wait and are written once that is over",
        )

    def _look(self) -> None:
        """Notice that the file at our path is another, or gone, and go on in a rescue file."""
        now_s = self._steady()
        if not self._assembly.rows and now_s - self._looked_s < _LOOK_S:
            return
        self._looked_s = now_s
        if self._book.in_place():
            return
        lost, stretch = self._book.path, self._book.stretch
        try:
            self._book, whole = self._book.rescued()
        except (sqlite3.Error, BridgeIOError) as error:
            self._tell("stopped", f"{lost} was moved, deleted or replaced, and no rescue file can be made: {error}")
            return
        holds = "which holds all of it" if whole else "what came before is in the moved file only"
        words = f"{lost} was moved, deleted or replaced: recording goes on in {self.path}, {holds}"
        if not whole and stretch:
            self._assembly.rows.insert(0, stretch)
        self._note("moved", words)
        self._tell("moved", words)

    def _watch_clock(self) -> None:
        before_s, utc_s, after_s = self._steady(), self._wall(), self._steady()
        if after_s - before_s > _STEP_S / 10:
            # We were held up between the looks: they tell nothing.
            return
        offset_s = utc_s - before_s
        step_s, self._clock_offset_s = offset_s - self._clock_offset_s, offset_s
        if abs(step_s) > _STEP_S:
            self._assembly.clock_stepped(utc_s, step_s)

    def _finish(self) -> None:
        if self._trouble_since_s is not None:
            words = f"{self._assembly.frames} frames could not be written: {self._state.words}"
            self._book.close()
            self._tell("stopped", words)
            return
        self._book.close()
        self._tell("closed", f"{self.path} is closed")

    def _note(self, kind: str, text: str, value: float = 0.0) -> None:
        self._assembly.mark(Mark(kind, int(self._wall() * _US), text, value))

    def _tell(self, phase: str, words: str) -> None:
        fresh = JournalState(phase, words)
        if fresh != self._state and self._on_state:
            self._state = fresh
            self._on_state(fresh)
        self._state = fresh
