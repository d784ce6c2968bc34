"""A simulated board: the firmware kit compiled for the ATmega328P and run on simavr behind a pseudo terminal.

One rule: a `Board` is a context manager, every wait in it has a time-out, and leaving it ends the child process.
Firmware and harness are compiled once a test session, into a folder that goes with it.

    with Board([(0, 800, 100), (500, 400, 50)], stop_after_ms=2000) as board:
        ...open board.path...
        board.run()

Time in a board is simulated: flat out it runs some hundred times faster than real, `paced=True` holds it to the
clock. While nobody reads the line it stands still.
"""

from __future__ import annotations

import atexit
import functools
import os
import select
import shutil
import subprocess
import tempfile
import termios
import threading
import time
import tty
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from pathlib import Path
from types import TracebackType
from typing import Self

import pytest

__all__ = [
    "BROWN_OUT",
    "FULL_CODE",
    "HARNESS_FLAGS",
    "KIT",
    "POWER_ON",
    "REFERENCE_MV",
    "RESET_PIN",
    "WATCHDOG",
    "Board",
    "avr_elf",
    "code",
    "harness",
    "needs_board",
    "needs_gcc",
    "run_tool",
    "workshop",
]

HERE = Path(__file__).parent
KIT = HERE.parents[1] / "bridgeio" / "firmware"

APT = "apt install gcc-avr avr-libc libsimavr-dev libelf-dev"
SIMAVR = Path("/usr/include/simavr")
HARNESS_FLAGS = ("-std=gnu11", "-O2", "-Wall", "-Wextra", "-Werror", f"-I{SIMAVR}")
AVR_FLAGS = ("-mmcu=atmega328p", "-DF_CPU=16000000UL", "-std=gnu99", "-Os", "-Wall", "-Wextra", "-Werror")
AVR_SECTIONS = ("-ffunction-sections", "-fdata-sections", "-Wl,--gc-sections")

#: Longest wait for the harness to say or do anything [s].
PATIENCE_S = 20.0
#: The example's reference [mV] and the converter's top code.
REFERENCE_MV, FULL_CODE = 1100, 1023
#: Bits of MCUSR, the chip's note of what started it.
POWER_ON, RESET_PIN, BROWN_OUT, WATCHDOG = 1, 2, 4, 8

_HAVE_GCC = shutil.which("gcc") is not None
_HAVE_BOARD = _HAVE_GCC and shutil.which("avr-gcc") is not None and SIMAVR.is_dir()

needs_gcc = pytest.mark.skipif(not _HAVE_GCC, reason="no C compiler: apt install gcc")
needs_board = pytest.mark.skipif(not _HAVE_BOARD, reason=f"no simulated board: {APT}")


def code(millivolts: float) -> int:
    """What the simulated converter makes of a voltage [mV, to a tenth] against the example's reference."""
    return min(round(10 * millivolts) * FULL_CODE // (10 * REFERENCE_MV), FULL_CODE)


def run_tool(*words: str | Path) -> str:
    """Run a compiler or binary tool, return what it printed; its complaints become the test's message."""
    done = subprocess.run([str(w) for w in words], capture_output=True, text=True, timeout=60, check=False)
    assert done.returncode == 0, f"{' '.join(map(str, words))}\n{done.stdout}{done.stderr}"
    return done.stdout


@functools.cache
def workshop() -> Path:
    """The session's folder for what is compiled."""
    folder = tempfile.mkdtemp(prefix="bridgewright-mcu-")
    atexit.register(shutil.rmtree, folder, ignore_errors=True)
    return Path(folder)


@functools.cache
def harness() -> Path:
    """The compiled simulator harness."""
    out = workshop() / "mcu"
    run_tool("gcc", *HARNESS_FLAGS, HERE / "mcu.c", "-o", out, "-lsimavr", "-lutil", "-lelf")
    return out


@functools.cache
def avr_elf(*defines: str, source: str = "bridge.c") -> Path:
    """The firmware (or another C file of the kit or of this folder) for the ATmega328P, `defines` as NAME=VALUE."""
    path = KIT / source if (KIT / source).exists() else HERE / source
    handle, out = tempfile.mkstemp(".elf", path.stem, workshop())
    os.close(handle)
    told = [f"-D{define}" for define in defines]
    run_tool("avr-gcc", *AVR_FLAGS, *AVR_SECTIONS, *told, f"-I{KIT}", path, KIT / "bridgewire.c", "-o", out)
    return Path(out)


class Board:
    """A running chip. `waveform` holds (ms, forward_mv, reflected_mv), each in force until the next; mV to a tenth.

    It is held until `run()`, so that a reader can open `path` first and miss nothing; after `stop_after_ms` of
    simulated time it falls silent and stays so until it is left. `cause` is what the chip notes of its first start.
    """

    path: str

    def __init__(
        self,
        waveform: Iterable[tuple[float, float, float]] = (),
        *,
        firmware: Path | None = None,
        paced: bool = False,
        stop_after_ms: float = 0,
        reset_after_ms: float = 0,
        cause: int = POWER_ON,
    ) -> None:
        self._firmware, self._waveform = firmware, list(waveform)
        self._options = ["--hold", "--stop-after", str(stop_after_ms), "--reset-after", str(reset_after_ms)]
        self._options += ["--cause", str(cause), *["--paced"] * paced]
        self._said: list[str] = []
        self._news = threading.Condition()

    def __enter__(self) -> Self:
        elf = self._firmware or avr_elf()
        with tempfile.NamedTemporaryFile("w", dir=workshop(), suffix=".wave", delete=False) as file:
            file.writelines(f"{ms:.6f} {forward:.1f} {reflected:.1f}\n" for ms, forward, reflected in self._waveform)
        self._child = subprocess.Popen(
            [harness(), *self._options, "--waveform", file.name, elf],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            text=True,
        )
        self._ears = threading.Thread(target=self._listen, daemon=True)
        self._ears.start()
        self.path = self.heard("pty")[0]
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        assert self._child.stdin is not None
        try:
            self._child.stdin.close()
            self._child.wait(PATIENCE_S)
        finally:
            self._child.kill()
            self._child.wait(PATIENCE_S)
            self._ears.join(PATIENCE_S)
            if self._child.stdout is not None:
                self._child.stdout.close()

    @property
    def pid(self) -> int:
        """Process id of the harness."""
        return self._child.pid

    def run(self) -> None:
        """Let simulated time run."""
        self._tell("run")

    def reset(self) -> None:
        """Reset the chip where it is; its EEPROM stays."""
        self._tell("reset")

    def quit(self) -> None:
        """Pull the plug: the line hangs up."""
        self._tell("quit")
        self._child.wait(PATIENCE_S)

    def heard(self, word: str, timeout_s: float = PATIENCE_S, nth: int = 1) -> list[str]:
        """What the harness said after its nth `word`, once it has (see mcu.c: pty, baud, conversion, reset, end)."""

        def lines() -> list[str]:
            return [line for line in self._said if line.split()[:1] == [word]]

        with self._news:
            told = self._news.wait_for(lambda: len(lines()) >= nth, timeout_s)
            assert told, f"the board never said {word!r} (number {nth}), only {self._said[-5:]}"
            return lines()[nth - 1].split()[1:]

    def cycles(self) -> list[int]:
        """Cycles between marks, so far."""
        with self._news:
            return [int(line.split()[1]) for line in self._said if line.startswith("cycles ")]

    def read_to_end(self, timeout_s: float = 2 * PATIENCE_S) -> bytes:
        """Run to the end of `stop_after_ms` and return every byte that came over the line."""
        deadline = time.monotonic() + timeout_s
        with self._reader() as line:
            self.run()
            data = bytearray()
            while len(data) < self._total():
                assert time.monotonic() < deadline, f"{len(data)} bytes, and no end after {timeout_s} s"
                if select.select([line], [], [], 0.05)[0]:
                    data += os.read(line, 65536)
        return bytes(data)

    def _total(self) -> float:
        with self._news:
            ends = [line for line in self._said if line.startswith("end ")]
        return float(ends[0].split()[2]) if ends else float("inf")

    @contextmanager
    def _reader(self) -> Iterator[int]:
        line = os.open(self.path, os.O_RDONLY | os.O_NOCTTY)
        try:
            tty.setraw(line, termios.TCSANOW)
            yield line
        finally:
            os.close(line)

    def _tell(self, command: str) -> None:
        assert self._child.stdin is not None
        self._child.stdin.write(command + "\n")
        self._child.stdin.flush()

    def _listen(self) -> None:
        assert self._child.stdout is not None
        for line in self._child.stdout:
            with self._news:
                self._said.append(line.strip())
                self._news.notify_all()
