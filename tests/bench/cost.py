"""What is measured and how it is judged: CPU time of processes, medians of interleaved rounds, figures.

One rule: every figure stands beside a named default measured in the same run, in turn with it, round by round.
"""

from __future__ import annotations

import math
import os
import statistics
import subprocess
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from pathlib import Path

__all__ = ["QUICK", "ROOT", "Figure", "Sizes", "Start", "cpu_s", "in_turn", "loads", "median", "run_once"]

#: The repository: where every program is started.
ROOT = Path(__file__).parents[2]


@dataclass(frozen=True, slots=True)
class Sizes:
    """How much is measured. rounds: of each figure; the others [s, 1/s or plain numbers] say what a round holds."""

    rounds: int = 5
    chain_round_s: float = 12.0
    screen_lead_s: float = 60.0
    screen_round_s: float = 6.0
    latency_ticks: int = 60
    stream_s: float = 3.0
    frames: int = 100_000
    lines: int = 2_000
    newton_samples: int = 200
    block: int = 1_000_000
    starts: int = 3


QUICK = Sizes(
    chain_round_s=1.0,
    screen_lead_s=3.0,
    screen_round_s=2.0,
    latency_ticks=20,
    stream_s=1.0,
    frames=30_000,
    lines=500,
    newton_samples=40,
    block=200_000,
    starts=1,
)


@dataclass(frozen=True, slots=True)
class Figure:
    """One measured thing.

    ours, default: medians in `unit`; default NaN where there is none to compare with. value: what is judged, in
    `judged` ("ratio" or a unit). goal: its limit, which it must reach (at_least) or not pass. more: absolute figures
    beside it, the unit in each name.
    """

    name: str
    what: str
    default_name: str
    unit: str
    ours: float
    default: float
    value: float
    goal: float
    judged: str = "ratio"
    at_least: bool = False
    more: dict[str, float] = field(default_factory=dict)

    @property
    def reached(self) -> bool:
        """Whether the goal is met; what could not be measured (NaN) meets none."""
        return self.value >= self.goal if self.at_least else self.value <= self.goal


def cpu_s(pid: int) -> float:
    """CPU time [s, user and system, all threads, to the nanosecond] of a process by Linux's clock for it."""
    return time.clock_gettime(~pid << 3 | 2)


@dataclass(frozen=True, slots=True)
class Start:
    """What one run of a command took: CPU time and wall time [s]."""

    cpu_s: float
    wall_s: float


def run_once(command: Sequence[str]) -> Start:
    """Run a command to its end, its output thrown away."""
    begun_s = time.monotonic()
    process = subprocess.Popen(command, stdout=subprocess.DEVNULL, cwd=ROOT)
    _, status, usage = os.wait4(process.pid, 0)
    process.returncode = os.waitstatus_to_exitcode(status)
    if process.returncode:
        raise RuntimeError(f"{command[0]} ended with {process.returncode}")
    return Start(usage.ru_utime + usage.ru_stime, time.monotonic() - begun_s)


def in_turn(rounds: int, *measures: Callable[[], float]) -> list[list[float]]:
    """Results of each of `measures`, taken A B A B."""
    taken: list[list[float]] = [[] for _ in measures]
    for _ in range(rounds):
        for found, measure in zip(taken, measures, strict=True):
            found.append(measure())
    return taken


def median(values: Sequence[float]) -> float:
    """The median; NaN of nothing."""
    return statistics.median(values) if values else math.nan


def loads() -> list[float]:
    """Load averages over 1, 5 and 15 minutes."""
    return [round(load, 2) for load in os.getloadavg()]
