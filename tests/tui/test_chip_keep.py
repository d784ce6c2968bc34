"""`keep` before simulated boards that are reset, pulled out, put back elsewhere and exchanged for one another.

What it has kept is read back by bridge files: each stretch of the journal tells by its nameplate which board it is of,
and a board that no file was made for gives counts and nothing more.
"""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
import tty
from collections.abc import Callable, Iterator
from contextlib import ExitStack, suppress
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Self

import numpy as np
import pytest

from bridgeio.bridge_file import BridgeFile, parse_bridge_file
from bridgeio.desk import Desk, Reading
from bridgeio.errors import FileError
from bridgeio.frames import Nameplate, Tallies
from bridgeio.framing import pack
from bridgeio.journal import Journal, Mark
from bridgeio.receiver import Receiver
from bridgeio.simulator import BRIDGE_FILE
from tests.mcu import bench
from tests.mcu.bench import until
from tests.mcu.board import Board, avr_elf, needs_board

#: Three boards; there are bridge files of the first two.
FIRST_ID, OTHER_ID, STRANGER_ID = 0x0F125701, 0x0B0A4D02, 0x57A46E03
#: Promised: the port open again after its return, and a board known again by its nameplates, 2 s apart, after its
#: first frame, with something for a busy machine [s].
BACK_S, KNOWN_S = 1.5, 2.0 + 0.25
#: A board that has talked this long has sent its early nameplates, and owes the next one by two seconds [ms].
TALKED_MS = 1300
INPUTS = [(0.0, 600.0, 100.0)]

#: Of the long run: exchanges, after how many of them nothing more may be held, and tallies of each board.
CYCLES, SETTLED, TALLIES = 100, 50, 20
#: What the process may grow by after that [kB]; by then SQLite has filled most of the 2 MB of pages that it holds.
GROWN_KB = 1024


@dataclass(frozen=True)
class Part:
    """A stretch of a journal: whose it is, when it begins, when its first block begins [s], tallies and those read."""

    plate: Nameplate | None
    started_s: float
    first_s: float
    tallies: int
    read: int

    @property
    def board(self) -> tuple[int, int] | None:
        """Device id and number of the start, where a nameplate has told them."""
        return None if self.plate is None else (self.plate.device_id, self.plate.boot)


def parts(path: Path, files: list[BridgeFile]) -> list[Part]:
    """The stretches of a journal that hold tallies, each read by whichever of `files` its nameplate allows."""
    found = []
    with Journal(path) as journal:
        blocks = list(journal.blocks())
        for number, stretch in journal.stretches.items():
            own = [block for block in blocks if block.stretch == number]
            items = [timed.item for block in own for timed in block.timed()]
            desk = Desk(files, Reading(frequency_hz=14.1e6), live=False)
            desk.nameplate = stretch.nameplate
            batches = [
                batch.readings for item in items if isinstance(item, Tallies) for batch in desk.take([item], 0.0)
            ]
            tallies = sum(len(batch) for batch in batches)
            read = sum(int(np.isfinite(batch.forward_w).sum()) for batch in batches)
            if tallies:
                first_s = own[0].utc_first_us / 1e6
                found.append(Part(stretch.nameplate, stretch.started_us / 1e6, first_s, tallies, read))
        assert not journal.bad
    return found


class Keeping:
    """`bridgewright keep` as a process, of whatever stands behind the link `port`."""

    def __init__(self, folder: Path) -> None:
        self.port, self.journal, self._file = folder / "bridge", folder / "log", folder / "first.bridge.toml"
        self._file.write_text(bridge_text(FIRST_ID), encoding="utf-8")

    def __enter__(self) -> Self:
        words = [sys.executable, "-m", "tui", "keep", str(self.port), str(self.journal), "--bridge", str(self._file)]
        self._process = subprocess.Popen(
            words, cwd=bench.ROOT, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
        )
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._process.kill()
        self._process.communicate()

    @property
    def pid(self) -> int:
        """Process id."""
        return self._process.pid

    def plug(self, path: str) -> None:
        """Let the link lead to another terminal, at once."""
        fresh = self.port.with_name("fresh")
        fresh.symlink_to(path)
        fresh.replace(self.port)

    def unplug(self) -> None:
        """Take the link away, before what it leads to goes: a terminal's own name may be given to another at once."""
        self.port.unlink()

    def opened(self, path: str) -> float:
        """Wait until the terminal at `path` is held; how long that took [s]."""
        began_s = time.monotonic()
        until(lambda: bench.held_exclusively(path) or self._process.poll() is not None, "the port was not opened")
        assert self._process.poll() is None, self._process.communicate()
        return time.monotonic() - began_s

    def heard(self, condition: Callable[[list[Part]], bool], complaint: str) -> list[Part]:
        """Wait until what is in the journal meets a condition."""
        seen: list[list[Part]] = [[]]

        def met() -> bool:
            with suppress(FileError):  # not there yet
                seen[0] = parts(self.journal, [])
            return condition(seen[0])

        until(met, complaint, 12.0)
        return seen[0]

    @property
    def starts_told(self) -> list[int]:
        """The boards' starts, as the nameplates in the journal tell them."""
        with Journal(self.journal) as journal:
            return [stretch.nameplate.boot for stretch in journal.stretches.values() if stretch.nameplate]

    def end(self) -> str:
        """Tell it to stop; what it said. It ends well, and its journal is sound."""
        self._process.send_signal(signal.SIGTERM)
        out, said = self._process.communicate(timeout=30)
        assert self._process.returncode == 0, said
        assert str(self.journal) in out
        return said

    def marks(self) -> list[Mark]:
        """What is marked about the link, in order."""
        with Journal(self.journal) as journal:
            return [mark for mark in journal.marks if mark.kind.startswith("link")]


@pytest.fixture
def boards() -> Iterator[Callable[[int], Board]]:
    """Makes running boards with a device id each, held until they are let run."""
    with ExitStack() as held:
        yield lambda device_id: held.enter_context(
            Board(INPUTS, firmware=avr_elf(f"DEVICE_ID=0x{device_id:08X}UL"), paced=True)
        )


def bridge_text(device_id: int) -> str:
    """A bridge file for a board: which file is used is the question here, not what it reads."""
    head, _, rest = BRIDGE_FILE.read_text(encoding="utf-8").partition("[[step]]")
    text = (head + rest[rest.index("[fit]") :]).replace("full_scale = 65520", f"full_scale = {bench.FULL_SCALE}")
    return text.replace("51B0B41D", f"{device_id:08X}")


def files() -> list[BridgeFile]:
    """Bridge files of the first board and of the other one; there is none of the stranger."""
    return [parse_bridge_file(bridge_text(board), f"{board:08X}") for board in (FIRST_ID, OTHER_ID)]


@needs_board
def test_reset_board_is_kept_on_in_a_stretch_of_its_own(tmp_path: Path, boards: Callable[[int], Board]) -> None:
    """The reset pin while keep runs: the same port, a new stretch with the second start, all of both read."""
    board = boards(FIRST_ID)
    with Keeping(tmp_path) as kept:
        kept.plug(board.path)
        kept.opened(board.path)
        board.run()
        kept.heard(lambda found: len(found) > 0, "nothing was kept")
        board.reset()
        kept.heard(lambda found: found[-1].board == (FIRST_ID, 2), "the second start was not kept")
        kept.end()
    first, second = parts(kept.journal, files())
    assert (first.board, second.board) == ((FIRST_ID, 1), (FIRST_ID, 2))
    assert (first.read, second.read) == (first.tallies, second.tallies)
    assert [mark.kind for mark in kept.marks()] == ["link open", "link ended"]


@needs_board
def test_board_put_back_elsewhere_is_kept_on(tmp_path: Path, boards: Callable[[int], Board]) -> None:
    """The plug pulled and put into another socket: open again within 1.5 s, known with its first frame, and marked."""
    before, after = boards(FIRST_ID), boards(FIRST_ID)
    with Keeping(tmp_path) as kept:
        back_s, ran_s = exchanged(kept, before, after)
        found = kept.heard(lambda found: len(found) > 1, "the board was not kept on")
        said = kept.end()
    read = parts(kept.journal, files())
    known_s = found[-1].started_s - ran_s
    print(f"open again after {1000 * back_s:.0f} ms, known {1000 * known_s:.0f} ms after its first conversion")
    assert back_s < BACK_S
    assert known_s < KNOWN_S
    assert {part.board for part in read} == {(FIRST_ID, 1)}
    assert all(part.read == part.tallies for part in read)
    assert [mark.kind for mark in kept.marks()] == ["link open", "link looking", "link found", "link ended"]
    assert f"{kept.port} is gone: it was unplugged; looking for it for 0 s" in said


@needs_board
def test_exchanged_board_is_read_by_its_own_file_or_none(tmp_path: Path, boards: Callable[[int], Board]) -> None:
    """Other boards at the same path: each one's stretch tells its id, and is read by that id's file or not at all."""
    first, other, stranger = boards(FIRST_ID), boards(OTHER_ID), boards(STRANGER_ID)
    with Keeping(tmp_path) as kept:
        exchanged(kept, first, other)
        kept.heard(lambda found: found[-1].board == (OTHER_ID, 1), "the other board was not kept")
        kept.unplug()
        other.quit()
        kept.plug(stranger.path)
        kept.opened(stranger.path)
        stranger.run()
        kept.heard(lambda found: found[-1].board == (STRANGER_ID, 1), "the stranger was not kept")
        kept.end()
    read = parts(kept.journal, files())
    assert [part.board for part in read] == [(FIRST_ID, 1), (OTHER_ID, 1), (STRANGER_ID, 1)]
    assert [part.read for part in read] == [read[0].tallies, read[1].tallies, 0]
    assert [mark.kind for mark in kept.marks()].count("link found") == 2


@needs_board
def test_exchanged_board_in_full_flight_is_not_taken_for_the_old_one(
    tmp_path: Path, boards: Callable[[int], Board]
) -> None:
    """A stranger that has talked long before it is opened: what comes before its next nameplate is nobody's yet."""
    before, after = boards(FIRST_ID), boards(STRANGER_ID)
    with Keeping(tmp_path) as kept:
        exchanged(kept, before, after, talked=True)
        kept.heard(lambda found: found[-1].board == (STRANGER_ID, 1), "the stranger was not kept")
        kept.end()
    first, *between, last = parts(kept.journal, files())
    assert first.board == (FIRST_ID, 1)
    (found,) = [mark for mark in kept.marks() if mark.kind == "link found"]
    assert first.first_s + first.tallies * bench.PERIOD_MS / 1000.0 < found.utc_us / 1e6 + 0.05
    assert [part.board for part in between] == [None]
    known_s = last.started_s - between[0].first_s
    print(f"known {1000 * known_s:.0f} ms after the first frame that came")
    assert known_s < KNOWN_S
    assert sum(part.read for part in (*between, last)) == 0


def exchanged(kept: Keeping, before: Board, after: Board, talked: bool = False) -> tuple[float, float]:
    """Keep `before` for a while, pull it, plug `after` in and let it run.

    talked: it runs already, past its early nameplates. How long until it was open, and when it was let run [s UTC].
    """
    kept.plug(before.path)
    kept.opened(before.path)
    before.run()
    kept.heard(lambda found: len(found) > 0, "nothing was kept")
    kept.unplug()
    before.quit()
    if talked:
        after.run()
        listen(after)
    kept.plug(after.path)
    back_s = kept.opened(after.path)
    ran_s = time.time()
    if not talked:
        after.run()
    return back_s, ran_s


def listen(board: Board) -> None:
    """Read a board until its early nameplates are over, so that the next one is some time away."""
    receiver, newest_ms = Receiver(), [0]
    line = os.open(board.path, os.O_RDONLY | os.O_NOCTTY)
    tty.setraw(line)

    def talked() -> bool:
        for item in receiver.feed(os.read(line, 4096)):
            if isinstance(item, Tallies):
                newest_ms[0] = int(item.ms[-1])
        return newest_ms[0] >= TALKED_MS

    until(talked, "the board did not talk")
    os.close(line)


@pytest.mark.long
@pytest.mark.timeout(300)
def test_hundred_exchanges_leave_nothing_behind(tmp_path: Path) -> None:
    """A hundred pulled plugs, two boards in turn: files, threads and memory as half way, every stretch kept."""
    took_s, held = [], []
    with Keeping(tmp_path) as kept:
        for cycle in range(CYCLES):
            master, path = terminal()
            kept.plug(path)
            took_s.append(kept.opened(path))
            os.write(master, b"\0" + greeting((FIRST_ID, STRANGER_ID)[cycle % 2], boot=cycle + 1))
            until(lambda: kept.starts_told[-1:] == [len(took_s)], f"exchange {cycle} was not kept")
            held.append(holdings(kept.pid))
            kept.unplug()
            os.close(master)
        kept.end()
    read = parts(kept.journal, files())
    print(f"open again: median {np.median(took_s):.2f} s, longest {max(took_s[1:]):.2f} s")
    print(f"files, threads, kB: {held[0]} at first, {held[SETTLED]} half way, {held[-1]} at the end")
    assert [part.board for part in read] == [((FIRST_ID, STRANGER_ID)[n % 2], n + 1) for n in range(CYCLES)]
    assert [part.read for part in read] == [TALLIES, 0] * (CYCLES // 2)
    assert held[-1][:2] == held[SETTLED][:2]
    assert held[-1][2] - held[SETTLED][2] < GROWN_KB
    assert max(took_s[1:]) < BACK_S


def terminal() -> tuple[int, str]:
    """A pseudo terminal: what a board writes to, and the path of the other end."""
    master, slave = os.openpty()
    tty.setraw(slave)
    path = os.ttyname(slave)
    os.close(slave)
    return master, path


def greeting(device_id: int, boot: int) -> bytes:
    """What a board sends first: its nameplate and some tallies."""
    plate = Nameplate(0, 10, 0, boot, device_id, 10, 16, bench.FULL_SCALE, 0, 0, 0, 0, "double")
    ms = [10 * n for n in range(2, TALLIES + 2)]
    return pack(plate) + pack(Tallies.of(range(1, TALLIES + 1), ms, 9000, 1500))


def holdings(pid: int) -> tuple[int, int, int]:
    """Open files, threads and resident memory [kB] of a process."""
    (resident,) = [line for line in Path(f"/proc/{pid}/status").read_text().splitlines() if line.startswith("VmRSS")]
    return len(os.listdir(f"/proc/{pid}/fd")), len(os.listdir(f"/proc/{pid}/task")), int(resident.split()[1])
