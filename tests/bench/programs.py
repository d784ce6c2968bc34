"""The programs that are measured, as processes: on a pipe, or on a terminal of 120 by 40 cells.

One rule: what they write is only taken and kept with its moment while they run, and looked at afterwards, so that
looking costs them nothing.
"""

from __future__ import annotations

import fcntl
import os
import pty
import signal
import struct
import subprocess
import sys
import termios
import threading
import time
from collections.abc import Callable, Sequence
from typing import Any

from .cost import ROOT, cpu_s
from .counts import BRIDGE_FILE, FREQUENCY_HZ
from .eye import Eye

__all__ = ["HEIGHT", "WIDTH", "Program", "Screen", "bridgewright", "reading_options", "script", "until"]

WIDTH, HEIGHT = 120, 40
_ENVIRONMENT = {"TERM": "xterm-256color", "COLORTERM": "truecolor", "LANG": "C.UTF-8"}
_READ_BYTES = 1 << 16


def bridgewright(*words: str) -> list[str]:
    """The command line of our program, started just as its installed command does."""
    start = "import sys; from tui.__main__ import main; sys.exit(main())"
    return [sys.executable, "-c", start, *words]


def reading_options(path: str) -> list[str]:
    """Source and options by which the simulated bridge's counts are read."""
    return [path, "--bridge", str(BRIDGE_FILE), "--frequency", str(FREQUENCY_HZ)]


def script(name: str, *words: str) -> list[str]:
    """The command line of a module beside this one."""
    return [sys.executable, "-m", f"tests.bench.{name}", *words]


def until(condition: Callable[[], bool], what: str, timeout_s: float = 30.0) -> None:
    """Wait for a condition; TimeoutError that says `what` did not come."""
    end_s = time.monotonic() + timeout_s
    while not condition():
        if time.monotonic() > end_s:
            raise TimeoutError(f"{what} did not come within {timeout_s:.0f} s")
        time.sleep(0.005)


class Program:
    """A process whose standard output is kept in `chunks`: moment of reading [s, CLOCK_MONOTONIC] and bytes."""

    def __init__(self, command: Sequence[str]) -> None:
        self.chunks: list[tuple[float, bytes]] = []
        self.lines = 0
        self.started_s = time.monotonic()
        self._process, self._fd = self._start(command)
        self._pump = threading.Thread(target=self._keep, daemon=True)
        self._pump.start()

    def __enter__(self) -> Program:
        return self

    def __exit__(self, *_: Any) -> None:
        self._process.send_signal(signal.SIGINT)
        try:
            self._process.wait(10.0)
        except subprocess.TimeoutExpired:
            self._process.kill()
            self._process.wait()
        self._pump.join(5.0)
        os.close(self._fd)

    @property
    def running(self) -> bool:
        """Whether it has not ended."""
        return self._process.poll() is None

    @property
    def cpu_s(self) -> float:
        """CPU time [s] that it has used since its start."""
        return cpu_s(self._process.pid)

    @property
    def written(self) -> int:
        """Bytes it has written."""
        return sum(len(data) for _, data in self.chunks)

    def text(self) -> bytes:
        """All that it has written."""
        return b"".join(data for _, data in self.chunks)

    def _start(self, command: Sequence[str]) -> tuple[subprocess.Popen[bytes], int]:
        near, far = os.pipe()
        environment = os.environ | _ENVIRONMENT
        process = subprocess.Popen(command, stdout=far, stderr=subprocess.DEVNULL, env=environment, cwd=ROOT)
        os.close(far)
        return process, near

    def _keep(self) -> None:
        while True:
            try:
                data = os.read(self._fd, _READ_BYTES)
            except OSError:  # a terminal whose last program has left
                return
            if not data:
                return
            self.chunks.append((time.monotonic(), data))
            self.lines += data.count(b"\n")


class Screen(Program):
    """A program on a terminal of its own."""

    def __enter__(self) -> Screen:
        return self

    def __exit__(self, *_: Any) -> None:
        os.write(self._fd, b"q")
        super().__exit__()

    def _start(self, command: Sequence[str]) -> tuple[subprocess.Popen[bytes], int]:
        near, far = pty.openpty()
        fcntl.ioctl(far, termios.TIOCSWINSZ, struct.pack("HHHH", HEIGHT, WIDTH, 0, 0))
        environment = os.environ | _ENVIRONMENT
        environment.pop("NO_COLOR", None)
        process = subprocess.Popen(command, stdin=far, stdout=far, stderr=far, env=environment, start_new_session=True)
        os.close(far)
        return process, near

    def await_words(self, words: str, timeout_s: float = 30.0) -> float:
        """Wait until `words` stand on the screen; the moment at which they did [s, CLOCK_MONOTONIC]."""
        eye, done = Eye(WIDTH, HEIGHT), 0
        seen_s: list[float] = []

        def seen() -> bool:
            nonlocal done
            while done < len(self.chunks) and not seen_s:
                at_s, data = self.chunks[done]
                done += 1
                eye.feed(data)
                if eye.find(words):
                    seen_s.append(at_s)
            return bool(seen_s)

        until(seen, f"{words!r} on the screen", timeout_s)
        return seen_s[0]

    def field(self, label: str, end: str) -> list[tuple[float, str]]:
        """Every text that has stood between `label` and `end` and the moment it appeared, in order."""
        eye, found = Eye(WIDTH, HEIGHT), [(0.0, "")]
        for at_s, data in self.chunks:
            for y in eye.feed(data):
                _, there, rest = eye.row(y).partition(label)
                text = rest.partition(end)[0].strip()
                if there and text != found[-1][1]:
                    found.append((at_s, text))
        return found[1:]
