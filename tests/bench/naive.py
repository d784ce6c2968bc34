"""The chain as it is written at first: a line, two Newton iterations and one JSON object a reading; and, where it is to
be kept, one row and one commit.

One rule: nothing in it is slowed down on purpose, and nothing is done by arrays. It knows no interval.
"""

from __future__ import annotations

import json
import math
import sqlite3
import sys
from datetime import UTC, datetime
from typing import Any

import numpy as np
import serial

from calibration.laws import DiodeLaw
from tests.bench import counts
from tests.bench.counts import FREQUENCY_HZ

__all__ = ["NaiveChain", "NaiveJournal", "wave_square"]


def wave_square(count: float, offset: float, scale: float, load_term: float) -> float:
    """Square of the wave by the diode law ln I0(x) = u + ln(1 + u/b), u = (count - offset)/scale, by Newton's method.

    The slope is taken by a small step: numpy has I0, but not its derivative.
    """
    u = (count - offset) / scale
    if u <= 0.0:
        return 0.0
    level = u + math.log1p(u / load_term)
    x = max(2.0 * math.sqrt(level), level)
    for _ in range(50):
        value = _log_i0(x)
        slope = (_log_i0(x * (1.0 + 1e-6)) - value) / (1e-6 * x)
        step = (value - level) / slope
        x -= step
        if abs(step) < 1e-9 * x:
            break
    return x * x


class NaiveChain:
    """From a line of text to a reading, and to a line of JSON."""

    def __init__(self) -> None:
        bridge, band = counts.bridge(), counts.band()
        self._forward, self._reflected = (
            (law.offset, law.scale, law.load_term)
            for law in (bridge.forward_law, bridge.reflected_law)
            if isinstance(law, DiodeLaw)
        )
        self._gains = band.gain_forward, band.gain_reflected
        self._name = bridge.name

    def answer(self, line: bytes) -> str:
        """The JSON object for `line`."""
        return json.dumps(self.reading(line))

    def reading(self, line: bytes) -> dict[str, Any]:
        """All that is said of `line`."""
        forward, reflected = (int(word) for word in line.split())
        forward_w = wave_square(forward, *self._forward) / self._gains[0] ** 2
        reflected_w = wave_square(reflected, *self._reflected) / self._gains[1] ** 2
        return self._reading(forward, reflected, forward_w, reflected_w)

    def _reading(self, forward: int, reflected: int, forward_w: float, reflected_w: float) -> dict[str, Any]:
        rho = math.sqrt(reflected_w / forward_w) if forward_w else 0.0
        now = datetime.now(UTC)
        return {
            "time": now.strftime("%Y-%m-%dT%H:%M:%S.") + f"{now.microsecond // 1000:03d}Z",
            "forward_w": forward_w,
            "reflected_w": reflected_w,
            "net_w": forward_w - reflected_w,
            "rho": rho,
            "swr": (1.0 + rho) / (1.0 - rho) if rho < 1.0 else None,
            "return_loss_db": -20.0 * math.log10(rho) if rho else None,
            "forward_counts": float(forward),
            "reflected_counts": float(reflected),
            "frequency_hz": FREQUENCY_HZ,
            "averaged": 1,
            "bridge": self._name,
            "flags": [],
        }


class NaiveJournal:
    """A table with a row a reading, each committed."""

    _COLUMNS = ("time", "forward_counts", "reflected_counts", "forward_w", "reflected_w", "net_w", "rho", "swr")

    def __init__(self, path: str, *settings: str) -> None:
        """Make it; settings: words of PRAGMA, in place of SQLite's own (a rollback journal, FULL)."""
        self._link = sqlite3.connect(path)
        for setting in settings:
            self._link.execute(f"PRAGMA {setting}")
        self._link.execute(f"CREATE TABLE reading ({', '.join(self._COLUMNS)})")
        self._insert = f"INSERT INTO reading VALUES ({', '.join('?' * len(self._COLUMNS))})"

    def keep(self, reading: dict[str, Any]) -> None:
        """One row, one commit."""
        self._link.execute(self._insert, [reading[name] for name in self._COLUMNS])
        self._link.commit()


def _log_i0(x: float) -> float:
    """ln I0(x); beyond what I0 can hold by the first terms of its expansion."""
    if x < 700.0:
        return float(np.log(np.i0(x)))
    return x - 0.5 * math.log(2.0 * math.pi * x) + 0.125 / x


def main() -> None:
    """Print readings from the port named by the first argument until stopped; kept in the file named by the second."""
    chain = NaiveChain()
    journal = NaiveJournal(*sys.argv[2:]) if len(sys.argv) > 2 else None
    with serial.Serial(sys.argv[1], 115200) as port:
        while True:
            reading = chain.reading(port.readline())
            if journal is not None:
                journal.keep(reading)
            print(json.dumps(reading), flush=True)


if __name__ == "__main__":
    try:
        main()
    except KeyboardInterrupt:
        sys.exit(130)
