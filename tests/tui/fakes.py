"""Readings, feeds and eyes for the tests of the screens."""

import asyncio
import math
import time
from collections.abc import Callable
from dataclasses import dataclass, field
from types import SimpleNamespace

import numpy as np

from calibration.flags import bit
from tui.messages import Snapshot

OPEN = SimpleNamespace(phase="open", words="open")

_COLUMNS = [
    "forward_counts",
    "reflected_counts",
    "frequency_hz",
    "forward_w",
    "rho",
    "swr",
    "forward_low_w",
    "forward_high_w",
]
_COLUMNS += ["reflected_w", "reflected_low_w", "reflected_high_w", "net_w", "net_low_w", "net_high_w", "return_loss_db"]
_COLUMNS += ["rho_low", "rho_high", "swr_low", "swr_high"]


def swr(rho):
    """SWR of a reflection, NaN from 1 up."""
    return (1 + rho) / (1 - rho) if rho < 1 else math.nan


def reading(rho=0.1736, *flags, forward=49.4, half=0.025, power_pct=5.0, columns=None):
    """A reading of length one with the columns of the real one; `columns` replaces any."""
    low, high = max(0.0, rho - half), rho + half
    less, more = 1 - power_pct / 100, 1 + power_pct / 100
    values = dict.fromkeys(_COLUMNS, math.nan)
    values |= {
        "forward_counts": 1234.0,
        "reflected_counts": 56.0,
        "forward_w": forward,
        "forward_low_w": forward * less,
        "forward_high_w": forward * more,
        "reflected_w": forward * rho**2,
        "reflected_low_w": forward * less * low**2,
        "reflected_high_w": forward * more * high**2,
        "net_w": forward * (1 - rho**2),
        "net_low_w": forward * less * (1 - min(high, 1) ** 2),
        "net_high_w": forward * more * (1 - low**2),
        "rho": rho,
        "rho_low": low,
        "rho_high": high,
        "swr": swr(rho),
        "swr_low": swr(low),
        "swr_high": swr(high),
    }
    values |= columns or {}
    bits = sum(bit(name) for name in flags)
    return SimpleNamespace(flags=np.array([bits], dtype=np.uint32), **{k: np.array([v]) for k, v in values.items()})


def together(*made):
    """Readings that came in one batch."""
    names = ("flags", "rho", "forward_w")
    return SimpleNamespace(**{name: np.concatenate([getattr(each, name) for each in made]) for name in names})


def no_carrier():
    """Nothing but the dark counts."""
    gone = {name: math.nan for name in _COLUMNS if name.startswith(("rho", "swr", "reflected_", "net_"))}
    gone |= {"net_low_w": 0.0, "net_high_w": 0.004, "reflected_counts": 11.0, "forward_counts": 12.0}
    gone |= {"forward_w": 0.0, "forward_low_w": 0.0, "forward_high_w": 0.004}
    return reading(0.0, "no-carrier", columns=gone)


def below(rho_high=0.043):
    """A reflection that can only be bounded."""
    bound = {"rho": math.nan, "swr": math.nan, "rho_low": 0.0, "swr_low": 1.0}
    bound |= {"rho_high": rho_high, "swr_high": swr(rho_high)}
    return reading(0.01, "below-reading", columns=bound)


def uncalibrated(forward=1234.0, reflected=56.0):
    """Counts only."""
    columns = dict.fromkeys(_COLUMNS, math.nan) | {"forward_counts": forward, "reflected_counts": reflected}
    return reading(0.1, "uncalibrated", columns=columns)


@dataclass
class HandFeed:
    """A feed that sends what the test hands it."""

    started_with: str | None = None
    stops: int = 0
    frequencies: list[float] = field(default_factory=list)
    zeros: list[bool] = field(default_factory=list)
    look: Callable[[], str] = lambda: ""
    post: Callable[[Snapshot], None] | None = None

    def start(self, post):
        self.started_with = self.look()
        self.post = post

    def stop(self):
        self.stops += 1

    def set_frequency(self, hz):
        self.frequencies.append(hz)

    def use_live_dark(self, live):
        self.zeros.append(live)


def snapshot(reading=None, **more):
    """A snapshot of a bridge that is well."""
    known = {"link": OPEN, "bridge": "garden shed bridge", "frequency_hz": 14.1e6, "rate_hz": 20.0, "period_ms": 50.0}
    return Snapshot(reading=reading, **known | more)


def picture(app):
    """The text on the screen, line by line, blanks at the end left off."""
    return [strip.text.rstrip() for strip in app.screen._compositor.render_strips()]


async def until(pilot, condition, timeout_s=5.0):
    """Wait for a condition."""
    end_s = time.monotonic() + timeout_s
    while not condition():
        assert time.monotonic() < end_s, "\n".join(picture(pilot.app))
        await pilot.pause()
        await asyncio.sleep(0.005)
