"""A program in a tmux window on a socket of its own: keys in, screens out.

One rule: a screen is waited for by what it shows, never by time.
"""

from __future__ import annotations

import os
import shlex
import signal
import subprocess
import time
from collections.abc import Callable
from pathlib import Path
from types import TracebackType
from typing import Self

__all__ = ["Tmux"]

ROOT = Path(__file__).parents[1]
PATIENCE_S = 20.0


class Tmux:
    """`words` in a window of `size` (columns, lines); its socket is kept in `folder`."""

    def __init__(self, folder: Path, words: list[str], size: tuple[int, int] = (120, 40), **env: str) -> None:
        """Nothing is started yet; env: variables of the program, besides UTF-8 and colour."""
        self._socket = str(folder / "tmux")
        surroundings = {"LC_ALL": "C.UTF-8", **env}
        set_up = ["env", "-u", "NO_COLOR", *(f"{name}={value}" for name, value in surroundings.items())]
        self._pid = 0
        self._command, self._size = "exec " + shlex.join([*set_up, *words]), size

    def __enter__(self) -> Self:
        """Start it; what a program said that could not start stays to be seen."""
        size = ("-x", str(self._size[0]), "-y", str(self._size[1]))
        stay = ("start-server", ";", "set-option", "-g", "remain-on-exit", "on", ";")
        self._tmux(*stay, "new-session", "-d", "-s", "screen", *size, "-c", str(ROOT), self._command)
        self._pid = int(self._tmux("display-message", "-p", "-t", "screen", "#{pane_pid}"))
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        """End it with the server."""
        self._tmux("kill-server")

    def press(self, *keys: str) -> None:
        """Press keys, by tmux's names; a text is typed."""
        self._tmux("send-keys", "-t", "screen", *keys)

    def resize(self, columns: int, lines: int) -> None:
        """Another size."""
        self._tmux("resize-window", "-t", "screen", "-x", str(columns), "-y", str(lines))

    def screen(self) -> str:
        """The screen's text now."""
        return self._tmux("capture-pane", "-p", "-t", "screen")

    def wait(self, condition: str | Callable[[str], bool], patience_s: float = PATIENCE_S) -> str:
        """The screen's text as soon as it holds the words or meets the condition; a failure shows it."""
        met = (lambda text: condition in text) if isinstance(condition, str) else condition
        deadline = time.monotonic() + patience_s
        while not met(text := self.screen()):
            assert time.monotonic() < deadline, f"waited in vain for {condition}:\n{text}"
            time.sleep(0.03)
        return text

    def kill(self) -> None:
        """Kill the program as `kill -9` does, and wait until it is gone."""
        os.kill(self._pid, signal.SIGKILL)
        self.end()

    def end(self) -> None:
        """Wait for the program's end. tmux itself does not always notice it."""
        deadline = time.monotonic() + PATIENCE_S
        while _runs(self._pid):
            assert time.monotonic() < deadline, f"did not end:\n{self.screen()}"
            time.sleep(0.03)

    def _tmux(self, *words: str) -> str:
        command = ["tmux", "-u", "-S", self._socket, "-f", "/dev/null", *words]
        # readline puts the size of pytest's own terminal there, and a program believes it more than its terminal.
        own = {name: value for name, value in os.environ.items() if name not in ("COLUMNS", "LINES", "NO_COLOR")}
        done = subprocess.run(command, capture_output=True, text=True, timeout=PATIENCE_S, check=False, env=own)
        assert done.returncode == 0, done.stderr
        return done.stdout


def _runs(pid: int) -> bool:
    """Whether a process is there and no zombie."""
    try:
        state = Path(f"/proc/{pid}/stat").read_text(encoding="utf-8", errors="replace").rpartition(")")[2].split()[0]
    except FileNotFoundError:
        return False
    return state != "Z"
