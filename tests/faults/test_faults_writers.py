"""Promise: one log has one writer, by whatever name it is called, and the right to write goes with its owner."""

import fcntl
import os
import signal
import subprocess
import threading
import time
from contextlib import suppress
from pathlib import Path

import pytest

from bridgeio.errors import FileError
from bridgeio.journal import Journal, JournalHeld
from bridgeio.journal.book import Book
from tests.faults.racers import line_up, server
from tests.faults.rig import Keep, seeded, until


def names_of(path):
    """Names that lead to the same journal."""
    link, folder = path.with_name("link.journal"), path.parent.with_name("link-to-folder")
    if not link.is_symlink():
        link.symlink_to(path)
        folder.symlink_to(path.parent)
    return [path, link, folder / path.name, path.parent / ".." / path.parent.name / path.name]


def readable(path):
    """Whether a reader gets at the journal, which must be sound; False while it is being made."""
    if not path.exists() or not path.stat().st_size:
        return False
    with suppress(FileError), Journal(path) as book:
        book.account()
        assert book.bad == []
        return bool(book.stretches)
    return False


def race(context, path, chance, ending):
    """Some writers at once: one wins, others leave with 6 and its number, a reader may read; the winner is ended."""
    names = [chance.choice(names_of(path)) for _ in range(chance.randint(2, 8))]
    racers = line_up(context, names, path.parent)
    try:
        until(lambda: sum(racer.process.is_alive() for racer in racers) <= 1, 30)
        (winner,) = (racer for racer in racers if racer.process.is_alive())
        until(lambda: readable(path))
        for racer in racers:
            if racer is not winner:
                assert racer.process.exitcode == 6, racer.words
                assert f"is being written by process {winner.pid}" in racer.words, (winner.pid, racer.words)
        os.kill(winner.pid, ending)
        winner.process.join(20)
        assert winner.process.exitcode == (0 if ending == signal.SIGTERM else -ending), winner.words
    finally:
        for racer in racers:
            racer.process.kill()
            racer.process.join(20)
    return len(racers)


def races(folder, number, request):
    """Races on journals that are new every fifth time; winners are ended or killed by turns."""
    chance, repeat = seeded(request)
    print(repeat)
    context, began_s, writers = server(), time.monotonic(), 0
    for turn in range(number):
        place = folder / str(turn // 5) / "logs"
        place.mkdir(parents=True, exist_ok=True)
        ending = signal.SIGKILL if turn % 2 else signal.SIGTERM
        writers += race(context, place / "a.journal", chance, ending)
        # Left behind by a killed owner the lock file binds nobody, as the next race shows; else it is gone.
        assert (place / "a.journal-lock").exists() == (ending == signal.SIGKILL), repeat
    return (
        f"{number} races of {writers} writers, 0 failures, so below {3 / number:.3f}; "
        f"{time.monotonic() - began_s:.0f} s; {repeat}"
    )


def test_of_writers_at_once_exactly_one_wins(tmp_path, request):
    """By path, by symbolic link and by way of another folder: one records, all others say whose the journal is."""
    races(tmp_path, 10, request)


def test_hard_link_to_a_journal_is_refused_in_words(board, tmp_path):
    """Under its second name a journal is not written: its owner could not be seen from there."""
    path, hard = tmp_path / "a.journal", tmp_path / "b.journal"
    with Keep(board.path, path) as keep:
        keep.until_keeping()
        os.link(path, hard)
        with Keep("sim:", hard) as second:
            until(lambda: not second.alive)
            assert second.end() == 3
            assert second.said(r"the file has 2 names \(hard links\)")
        assert not Path(f"{hard}-lock").exists()
        keep.until_keeping()


def test_owner_that_has_only_just_taken_the_lock_is_named(tmp_path):
    """Not the one killed before it, whose number still stands in the lock file for a moment."""
    path, lock = tmp_path / "a.journal", tmp_path / "a.journal-lock"
    gone = subprocess.Popen(["true"])
    gone.wait(10)
    lock.write_text(f"{gone.pid}\n")
    with lock.open("r+") as held:
        fcntl.flock(held, fcntl.LOCK_EX)
        late = threading.Timer(0.1, lambda: lock.write_text(f"{os.getpid()}\n"))
        late.start()
        with pytest.raises(JournalHeld, match=f"by process {os.getpid()};"):
            Book(path)
        late.join(10)


def test_journal_in_the_making_is_never_taken_for_another_file(tmp_path):
    """Whoever reads while it comes into being finds an empty file or a journal."""
    for number in range(20):
        path = tmp_path / f"{number}.journal"
        maker = threading.Thread(target=lambda path=path: Book(path).close())
        maker.start()
        until(lambda path=path: path.exists() and path.stat().st_size, every_s=0)
        Journal(path).close()
        maker.join(20)


@pytest.mark.long
@pytest.mark.timeout(900)
def test_of_writers_at_once_exactly_one_wins_two_hundred_times(tmp_path, request, report):
    """The same two hundred times."""
    report(races(tmp_path, 200, request))
