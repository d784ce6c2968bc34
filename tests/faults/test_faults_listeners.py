"""Promise: recording does not hang on whoever listens to what keep says."""

import os
import signal
import subprocess
import sys

from bridgeio.journal import Journal
from tests.faults.rig import ROOT, examine, missing_in, until


def blocks(path):
    """Number of the last block that a reader finds; 0 while there is none."""
    if not path.exists() or not path.stat().st_size:
        return 0
    with Journal(path) as book:
        return max((block.id for block in book.blocks()), default=0)


def keep(source, path, out, err):
    """The command, its streams into pipes."""
    command = [sys.executable, "-m", "tui", "keep", source, str(path), "--acknowledge"]
    return subprocess.Popen(command, cwd=ROOT, stdout=out, stderr=err)


def test_keep_goes_on_when_nobody_listens_any_more(board, tmp_path):
    """With both streams closed at the other end the journal goes on, even where there is an alarm to tell."""
    path, heard, said = tmp_path / "a.journal", *os.pipe()
    child = keep(board.path, path, said, said)
    os.close(said)
    os.close(heard)
    try:
        until(lambda: blocks(path) >= 1)
        path.rename(tmp_path / "tidied")
        until(lambda: list(tmp_path.glob("a-rescue-*")))
        (rescue,) = (one for one in tmp_path.glob("a-rescue-*") if one.suffix == ".journal")
        until(lambda: blocks(rescue) >= 2)
        child.send_signal(signal.SIGTERM)
        child.wait(20)
    finally:
        child.kill()
        child.wait(20)
    found = examine(rescue)
    assert found.last >= 2
    assert missing_in(found.ms) == 0


def test_acknowledgement_that_nobody_reads_does_not_hold_up_the_journal(board, tmp_path):
    """Where the pipe for block numbers is full, blocks are written all the same, and later numbers cover them."""
    path, heard, said = tmp_path / "a.journal", *os.pipe()
    os.set_blocking(said, False)
    filled = 0
    while True:
        try:
            filled += os.write(said, bytes(512))
        except BlockingIOError:
            break
    os.set_blocking(said, True)
    child = keep(board.path, path, said, subprocess.DEVNULL)
    os.close(said)
    try:
        # The second is written by whoever has found no room for the first one's number.
        until(lambda: blocks(path) >= 2)
        while filled:
            filled -= len(os.read(heard, filled))
        until(lambda: blocks(path) >= 4)
        child.send_signal(signal.SIGTERM)
        numbers = os.fdopen(heard).read().split("\n")[:-2]
        assert child.wait(20) == 0
    finally:
        child.kill()
        child.wait(20)
    assert int(numbers[0]) > 1
    assert int(numbers[-1]) == examine(path).last
