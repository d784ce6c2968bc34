"""Promise: a disk that refuses one call, whichever, is told, and costs nothing that was acknowledged."""

import time
from collections import Counter
from concurrent.futures import ThreadPoolExecutor

import pytest

from bridgeio.journal.book import Book
from tests.faults.board import SteadyBoard
from tests.faults.rig import Keep, examine, missing_in, needs_strace, refusing_disk, snapshot

#: Calls by which a journal is written; the n-th of each thread is refused.
CALLS = ("pwrite64", "fdatasync")
ERRORS = ("ENOSPC", "EIO")


def refuse(folder, call, error, turn, new):
    """One refusal under keep, on a new journal or on one that is there; what it came to."""
    folder.mkdir()
    path = folder / "a.journal"
    if not new:
        Book(path).close()
    case = f"{call} {error} {turn} {'new' if new else 'continued'}"
    with SteadyBoard() as board, Keep(board.path, path, before=refusing_disk(call, error, turn, path)) as keep:
        began_s = time.monotonic()
        while keep.alive and keep.last < 2:
            assert time.monotonic() - began_s < 20, (case, keep.words)
            time.sleep(0.01)
        if not keep.alive:
            assert keep.end() == 3, (case, keep.words)
            assert not keep.said("Traceback"), (case, keep.words)
            assert keep.said("bridgewright: .*a.journal"), (case, keep.words)
            # Nothing was promised, and the next one may go on.
            Book(path).close()
            return "refused at the start"
        at_ms = board.now_ms
        assert keep.end() == 0, (case, keep.words)
        stopped_s, again_s = keep.said("has stopped"), keep.said("again after")
        assert stopped_s is None or (again_s is not None and again_s - stopped_s <= 5.0), (case, keep.words)
    found = examine(snapshot(path, folder))
    assert found.last >= keep.last, case
    assert missing_in(found.ms) == found.account.missing == found.account.unkept == 0, case
    assert found.ms[-1] >= at_ms - 100, case
    assert [mark.kind for mark in found.marks].count("stall") == (stopped_s is not None), case
    return "not noticed" if stopped_s is None else "told, then resumed"


@needs_strace
def test_refused_call_is_told_and_recording_resumes(tmp_path):
    """A write and a sync refused once, in the midst of recording: told, tried again, nothing lost."""
    cases = [("pwrite64", "ENOSPC", 3, False), ("fdatasync", "EIO", 2, False), ("pwrite64", "EIO", 1, True)]
    with ThreadPoolExecutor(3) as pool:
        outcomes = [pool.submit(refuse, tmp_path / str(n), *case) for n, case in enumerate(cases)]
    assert [one.result() for one in outcomes] == ["told, then resumed", "told, then resumed", "refused at the start"]


@needs_strace
@pytest.mark.long
@pytest.mark.timeout(900)
def test_each_call_refused_in_turn_costs_nothing(tmp_path, report):
    """Every write and sync up to the tenth of any thread, refused once with either error, on new and old journals."""
    began_s = time.monotonic()
    cases = [(call, error, n, new) for new in (True, False) for n in range(1, 11) for call in CALLS for error in ERRORS]
    with ThreadPoolExecutor(3) as pool:
        outcomes = [pool.submit(refuse, tmp_path / str(n), *case) for n, case in enumerate(cases)]
    came_to = Counter(one.result() for one in outcomes)
    n = len(cases)
    report(f"{n} refusals {dict(came_to)}, 0 failures, so below {3 / n:.3f}; {time.monotonic() - began_s:.0f} s")
    assert came_to["told, then resumed"] >= 10
