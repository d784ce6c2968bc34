"""Promise: a journal moved, deleted or replaced under us is noticed, and nothing is lost after that."""

import os
import re
import shutil
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import pytest

from tests.faults.board import SteadyBoard
from tests.faults.rig import LAST_MOMENTS_MS, Keep, examine, missing_in, seeded


def rename(path):
    """Somebody tidies up."""
    path.rename(path.with_name("tidied"))


def delete(path):
    """Somebody deletes it."""
    path.unlink()


def replace(path):
    """A copy, as a tool for backups leaves it, takes its place."""
    copy = path.with_name("copied")
    shutil.copyfile(path, copy)
    os.replace(copy, path)


def delete_log(path):
    """Somebody takes the write-ahead log for rubbish."""
    path.with_name(path.name + "-wal").unlink()


FAULTS = {"renamed": rename, "deleted": delete, "replaced": replace, "log deleted": delete_log}


def struck_alone(folder, fault, wait_s):
    """As `strike`, with a bridge of its own."""
    folder.mkdir()
    with SteadyBoard() as board:
        return strike(board, folder, fault, wait_s)


def strike(board, folder, fault, wait_s):
    """Do it to a running keep; seconds until it is told [s]."""
    path = folder / "a.journal"
    with Keep(board.path, path) as keep:
        keep.until(lambda: keep.last >= 1)
        end_s = time.monotonic() + wait_s
        keep.until(lambda: time.monotonic() >= end_s)
        fault(path)
        done_s, acknowledged = time.time(), keep.last
        told_s = keep.until_said("was moved, deleted or replaced: recording goes on in .*-rescue-")
        keep.until(lambda: keep.last >= acknowledged + 2)
        at_ms = board.now_ms
        assert keep.end() == 0, keep.words
    words = next(words for _, words in keep.words if "recording goes on in" in words)
    rescue = Path(re.search(r"goes on in (.+?), wh", words)[1])
    assert told_s - done_s <= 2.0
    assert rescue.parent == folder
    found = examine(rescue)
    # The rescue file holds all of it: what came before too, and every acknowledged block.
    assert found.last >= keep.last
    assert missing_in(found.ms) == found.account.missing == found.account.unkept == 0
    assert found.ms[-1] >= at_ms - LAST_MOMENTS_MS
    assert [mark.text for mark in found.marks if mark.kind == "moved"] == [re.sub("^.*?keep: ", "", words)]
    return told_s - done_s


def test_journal_taken_away_is_noticed_and_rescued(tmp_path):
    """Told within two seconds with the rescue file's name, in which no frame is missing, whichever way it went."""
    with ThreadPoolExecutor(len(FAULTS)) as pool:
        struck = {name: pool.submit(struck_alone, tmp_path / name, FAULTS[name], 0.2) for name in FAULTS}
    for name, outcome in struck.items():
        assert outcome.result() <= 2.0, name


@pytest.mark.long
@pytest.mark.timeout(900)
def test_eighty_journals_taken_away_are_rescued(tmp_path, request, report):
    """Twenty times each, at random moments."""
    chance, repeat = seeded(request)
    print(repeat)
    began_s = time.monotonic()
    with ThreadPoolExecutor(3) as pool:
        struck = [
            pool.submit(struck_alone, tmp_path / f"{turn} {name}", FAULTS[name], chance.uniform(0.0, 1.0))
            for turn in range(20)
            for name in FAULTS
        ]
    worst_s = max(outcome.result() for outcome in struck)
    report(
        f"{len(struck)} journals taken away, 0 failures, so below {3 / len(struck):.3f}; "
        f"told after {worst_s:.1f} s at most; {time.monotonic() - began_s:.0f} s; {repeat}"
    )
