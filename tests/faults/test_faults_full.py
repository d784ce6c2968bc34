"""Promise: a full disk costs only what it must; nothing acknowledged is lost, and recording resumes by itself."""

import os
import resource
import shutil
import subprocess
import time

import pytest

from tests.faults.rig import LAST_MOMENTS_MS, Keep, examine, missing_in


class SmallDisk:
    """A file system of one megabyte of its own, filled to the last byte and emptied again."""

    how = "a mounted file system"

    def __init__(self, folder):
        self.folder = folder
        self._ballast = folder / "ballast"

    def fill(self, keep):
        """Leave no room."""
        with self._ballast.open("wb", buffering=0) as out:
            for size in (4096, 512, 1):
                while self._take(out, size):
                    pass

    def free(self, keep):
        """Make room."""
        self._ballast.unlink()

    def room(self):
        """Make room for a reader."""
        self._ballast.unlink()

    @staticmethod
    def _take(out, size):
        try:
            return out.write(bytes(size)) == size
        except OSError:
            return False


class SmallFiles:
    """The same by a limit on the size of any file that keep writes, set from outside and lifted again."""

    how = "a limit on the size of files"

    def __init__(self, folder):
        self.folder = folder

    def fill(self, keep):
        """Let no file grow beyond what the log has."""
        limit = keep.log_written()[0]
        resource.prlimit(keep.pid, resource.RLIMIT_FSIZE, (limit, resource.RLIM_INFINITY))

    def free(self, keep):
        """Lift the limit."""
        resource.prlimit(keep.pid, resource.RLIMIT_FSIZE, (resource.RLIM_INFINITY, resource.RLIM_INFINITY))

    def room(self):
        """A reader has no limit."""


@pytest.fixture
def small_disk(tmp_path):
    """A disk that can be filled: mounted where we may mount, else the limit on files stands in for it."""
    folder = tmp_path / "small"
    folder.mkdir()
    mount = ["mount", "-t", "tmpfs", "-o", "size=1m", "bridgewright-test", str(folder)]
    if os.geteuid() or not shutil.which("mount") or subprocess.run(mount, capture_output=True).returncode:
        yield SmallFiles(folder)
        return
    yield SmallDisk(folder)
    subprocess.run(["umount", "-l", str(folder)], check=True)


def fill_and_free(board, disk, wait_s=1.5):
    """A disk is full for a while under keep, then has room again."""
    path = disk.folder / "a.journal"
    with Keep(board.path, path) as keep:
        keep.until(lambda: keep.last >= 1)
        disk.fill(keep)
        full_s = time.time()
        said_s = keep.until_said("the journal has stopped: .*; the reading goes on")
        end_s = time.monotonic() + wait_s
        keep.until(lambda: time.monotonic() >= end_s)
        safe = keep.last
        disk.free(keep)
        free_s = time.time()
        again_s = keep.until_said("recording to .* again after")
        keep.until(lambda: keep.last >= safe + 2)
        at_ms = board.now_ms
        assert keep.end() == 0, keep.words
    assert said_s - full_s <= 2.0
    assert again_s - free_s <= 5.0
    found = examine(path)
    assert found.last >= keep.last
    assert found.ms[-1] >= at_ms - LAST_MOMENTS_MS
    assert missing_in(found.ms) == found.account.missing == found.account.unkept == 0
    lengths = [mark.value for mark in found.marks if mark.kind == "stall"]
    assert lengths == [pytest.approx(again_s - said_s, abs=0.5)]
    return said_s - full_s, again_s - free_s


def test_full_disk_stops_and_resumes_without_a_loss(board, small_disk, report):
    """Alarm within two seconds, recording within five of room being made, all that waited is kept, the stall marked."""
    alarm_s, again_s = fill_and_free(board, small_disk)
    report(f"full by {small_disk.how}: told after {alarm_s:.1f} s, recording {again_s:.1f} s after room was made")


def test_growth_of_files_refused_stops_and_resumes_without_a_loss(board, tmp_path):
    """The same where the system refuses to let files grow."""
    fill_and_free(board, SmallFiles(tmp_path), wait_s=0.5)


def test_disk_still_full_at_the_end_is_told_by_exit_code(board, small_disk):
    """Told to stop while there is no room, keep says how many frames are lost; what was acknowledged is there."""
    path = small_disk.folder / "a.journal"
    with Keep(board.path, path) as keep:
        keep.until(lambda: keep.last >= 1)
        small_disk.fill(keep)
        keep.until_said("the journal has stopped")
        assert keep.end() == 3
        assert keep.said(r"\d+ frames could not be written")
    small_disk.room()
    found = examine(path)
    assert found.last >= keep.last
    assert missing_in(found.ms) == 0


@pytest.mark.long
@pytest.mark.timeout(900)
def test_twenty_full_disks_cost_nothing(board, small_disk, report):
    """The same twenty times on one journal, which is continued."""
    began_s = time.monotonic()
    for turn in range(20):
        folder = small_disk.folder / str(turn)
        folder.mkdir()
        disk = type(small_disk)(folder)
        fill_and_free(board, disk, wait_s=0.5 + turn % 4)
        shutil.rmtree(folder)
    report(f"20 full disks by {small_disk.how}, 0 failures, so below {3 / 20}; {time.monotonic() - began_s:.0f} s")
