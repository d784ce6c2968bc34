"""Promise: the log survives the program dying at any moment, and at most the running second is lost."""

import signal
import sqlite3
import time
from collections import Counter
from dataclasses import dataclass, field

import pytest

from tests.faults.rig import Keep, examine, needs_strace, seeded, slow_disk, snapshot, until

#: Of each kind of moment, so many at push and in the long run.
PUSH = {"anywhere": 1, "due": 1, "commit": 2, "making": 1, "closing": 1}
LONG = {"anywhere": 12, "due": 6, "commit": 24, "making": 8, "closing": 10}

#: How long a sync is held, so that a kill can fall into it [s]. Longer, and the promise of a second would not bind.
_HELD_S = 0.06


@dataclass
class Drill:
    """Kills one keep after another and compares what is left with what was acknowledged."""

    board: object
    folder: object
    chance: object
    repeat: str
    fell: Counter = field(default_factory=Counter)
    worst_ms: int = 0
    kept: int = 0
    _made: int = 0
    # Acknowledged before the log grew: whatever is acknowledged after that was committed before the kill.
    _heard: int = 0

    @property
    def journal(self):
        """Where the drill goes on."""
        return self.folder / f"{self._made}.journal"

    def kill(self, kind):
        """One kill and its check; whether it still ran then. That the next one resumes is seen at the next one."""
        if kind == "making":
            self._made += 1
            self.kept = 0
        held_s = {"commit": _HELD_S, "making": 0.02, "closing": 0.05}.get(kind, 0.0)
        before = slow_disk(held_s) if held_s else ()
        with Keep(self.board.path, self.journal, before=before) as keep:
            where = getattr(self, f"_{kind}")(keep)
            at_ms, opened_ms = self.board.now_ms, self.board.opened_ms
            killed = keep.end(signal.SIGKILL) == -signal.SIGKILL
            if where == "in a commit" and len(keep.blocks) > self._heard:
                where = "just after a commit"
            if keep.blocks:
                # It opened the journal of the one killed before by itself, and goes on behind its last block.
                assert keep.blocks[0][1] >= self.kept, self.repeat
            self.fell[where if killed else "too late"] += 1
            until(lambda: self.board.opened_ms < 0)
            self._check(keep, at_ms, opened_ms if keep.said("is open") else None, killed)
            return killed

    def _anywhere(self, keep):
        """At any moment from the start of the process on."""
        end_s = time.monotonic() + self.chance.uniform(0.0, 3.0)
        until(lambda: time.monotonic() >= end_s)
        return "while recording" if keep.blocks else "in the start"

    def _due(self, keep):
        """When the next block is nearly due: no kill costs more."""
        keep.until(lambda: keep.last > self.kept + 1)
        (before_s, _), (last_s, _) = keep.blocks[-2:]
        end_s = time.monotonic() + (last_s - before_s) * self.chance.uniform(0.85, 0.98)
        until(lambda: time.monotonic() >= end_s)
        return "just before a block was due"

    def _commit(self, keep):
        """While the log has grown and nothing has been acknowledged yet."""
        keep.until_keeping(self.chance.choice([1, 2]))
        self._heard, before = len(keep.blocks), keep.log_written()
        keep.until(lambda: keep.log_written() != before, every_s=0.001)
        end_s = time.monotonic() + self.chance.uniform(0.0, 0.75) * _HELD_S
        until(lambda: time.monotonic() >= end_s, every_s=0.001)
        return "in a commit"

    def _making(self, keep):
        """While a new file and its tables come into being."""
        keep.until(self.journal.exists, every_s=0.0005)
        end_s = time.monotonic() + self.chance.uniform(0.0, 0.15)
        until(lambda: time.monotonic() >= end_s, every_s=0.0005)
        return "after it was made" if keep.said("is open") else "while it was made"

    def _closing(self, keep):
        """After it was told to end, while it writes the rest and folds the log in."""
        keep.until_keeping()
        before = self.journal.stat().st_mtime_ns
        keep.tell(signal.SIGTERM)
        end_s = time.monotonic() + self.chance.uniform(0.0, 0.25)
        until(lambda: time.monotonic() >= end_s, every_s=0.001)
        # The file itself is written only while the log is folded in.
        return "in the checkpoint" if self.journal.stat().st_mtime_ns != before else "while it closed"

    def _check(self, keep, at_ms, opened_ms, killed):
        if not self.journal.stat().st_size:
            assert not keep.blocks, self.repeat
            return
        found = examine(snapshot(self.journal, self.folder)) if self._tables() else None
        assert keep.last <= (found.last if found else 0), f"acknowledged and not there; {self.repeat}"
        assert not found or found.last >= self.kept, f"of an earlier one; {self.repeat}"
        if found is None:
            return
        self.kept = found.last
        assert found.account.missing == found.account.unkept == 0, self.repeat
        if killed and opened_ms is not None:
            lost_ms = at_ms - max([opened_ms, *found.ms[-1:].tolist()])
            self.worst_ms = max(self.worst_ms, lost_ms)
            assert lost_ms <= 1000, f"{lost_ms} ms lost; {self.repeat}"

    def _tables(self):
        """Whether the file is a journal yet: a kill while it was made may leave an empty one."""
        link = sqlite3.connect(snapshot(self.journal, self.folder))
        try:
            return link.execute("PRAGMA user_version").fetchone() != (0,)
        finally:
            link.close()

    def resume(self):
        """The one after the last kill records and ends whole."""
        with Keep(self.board.path, self.journal) as keep:
            keep.until(lambda: keep.last > self.kept)
            assert keep.end() == 0, keep.words
        found = examine(self.journal)
        assert keep.last <= found.last


def drill(board, folder, request, report, kinds):
    """Kills of all kinds in a random order; the figures of the run."""
    chance, repeat = seeded(request)
    print(repeat)
    began_s = time.monotonic()
    made = Drill(board, folder, chance, repeat)
    order = [kind for kind, number in kinds.items() for _ in range(number)]
    chance.shuffle(order)
    for kind in order:
        # One that had ended by itself before the kill is no kill.
        until(lambda kind=kind: made.kill(kind), 60)
        if kind == "making":
            made.resume()
            made.kept = examine(made.journal).last
    made.resume()
    n, inside = len(order), made.fell["in a commit"]
    report(
        f"{n} kills {dict(made.fell)}, 0 failures, so below {3 / n:.2f}; worst loss {made.worst_ms} ms; "
        f"{time.monotonic() - began_s:.0f} s; {repeat}"
    )
    assert inside * 3 >= n, f"only {inside} of {n} fell into a commit; {repeat}"


@needs_strace
def test_killed_at_any_moment_keep_loses_nothing_it_acknowledged(board, tmp_path, request, report):
    """Killed in a commit, in the making, at the close and anywhere, it loses a second and no acknowledged block."""
    drill(board, tmp_path, request, report, PUSH)


@needs_strace
@pytest.mark.long
@pytest.mark.timeout(900)
def test_killed_sixty_times_keep_loses_nothing_it_acknowledged(board, tmp_path, request, report):
    """The same sixty times."""
    drill(board, tmp_path, request, report, LONG)
