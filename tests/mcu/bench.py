"""The simulated chip on the simulated bench: what the simulator's detectors hold, put on the chip's converter pins.

One rule: every conversion's millivolts are laid down beforehand, noise and all, so that what the chip must count is
known to the last code, and what was really connected is known beside it.
"""

from __future__ import annotations

import fcntl
import functools
import os
import struct
import subprocess
import sys
import time
from collections.abc import Callable, Sequence
from pathlib import Path

import numpy as np
import numpy.typing as npt

from bridgeio.frames import Tallies
from bridgeio.receiver import Receiver
from bridgeio.sheet import sheet_of
from bridgeio.simulator import detector
from bridgeio.simulator.bench import RATINGS, bench_setups
from calibration.bench import BenchStep
from tests.mcu.board import FULL_CODE, REFERENCE_MV, Board, avr_elf, workshop

__all__ = [
    "DEVICE_ID",
    "FULL_SCALE",
    "PERIOD_MS",
    "ROOT",
    "bench_sheet",
    "bridge_file",
    "counts",
    "end_ms",
    "firmware",
    "held_exclusively",
    "pin_millivolts",
    "received",
    "until",
    "waveform",
    "wrong_bridge_file",
]

Array = npt.NDArray[np.float64]

ROOT = Path(__file__).parents[2]
DEVICE_ID = 0xC41B0A7E
#: The example's tally: conversions a channel, spacing of tallies and of conversions [ms].
SUMMED, PERIOD_MS = 16, 10
SLOTS = 2 * SUMMED
SLOT_MS = PERIOD_MS / SLOTS
FULL_SCALE = SUMMED * FULL_CODE
#: The order of one tally's conversions: 0 forward, 1 reflected.
ORDER = np.tile([0, 1, 1, 0], SUMMED // 2)

#: The simulator's detectors are made for 2.5 V; halved once more, 100 W come to 0.93 V of the chip's 1.1.
DIVIDER = 0.5
#: One step of the converter, rms: enough that a sum of 16 resolves far less than a step.
NOISE_MV = REFERENCE_MV / FULL_CODE
#: Tallies a bench step, and how many of them go by while the detectors settle.
STEP_TALLIES, SETTLING = 50, 10
#: A tally and whatever goes with it are on the line this long after it is complete [ms].
SENDING_MS = 15

TIOCGEXCL = 0x80045440  # Linux: is this terminal held exclusively?


@functools.cache
def firmware() -> Path:
    """The example with an id of its own, as a builder would compile it."""
    return avr_elf(f"DEVICE_ID=0x{DEVICE_ID:08X}UL")


@functools.cache
def raster_ms() -> float:
    """When the first conversion that counts begins, after a start [ms]; the others follow SLOT_MS apart."""
    with Board(firmware=firmware(), stop_after_ms=200) as board:
        board.run()
        return float(board.heard("conversion", nth=2)[0])


def pin_millivolts(ports_v: Sequence[tuple[float, float]], tallies: int, seed: int) -> Array:
    """Millivolts, to a tenth, [conversions, 2] at both pins for RF peaks `ports_v` [V] that last `tallies` each.

    Diode, hold capacitor and divider are the simulator's; noise is added at the pin, which never goes below 0.
    """
    noise = NOISE_MV * np.random.default_rng([seed, 3]).standard_normal((len(ports_v) * tallies * SLOTS, 2))
    t_s = np.arange(len(noise), dtype=np.float64) * (SLOT_MS / 1000.0)
    columns = []
    for side, part in enumerate((detector.FORWARD, detector.REFLECTED)):
        peak_v = np.repeat([pair[side] for pair in ports_v], tallies * SLOTS)
        held_v = detector.Held(part.hold_s).follow(t_s, detector.Table(part, 25.0).dc_v(peak_v))
        columns.append(1000.0 * DIVIDER * detector.pin_v(part, held_v))
    return np.maximum(np.round(np.stack(columns, axis=1) + noise, 1), 0.0)


def waveform(millivolts: Array) -> list[tuple[float, float, float]]:
    """The same as a board takes it; changes come half way between conversions."""
    first_ms = raster_ms() - SLOT_MS / 2
    return [(first_ms + n * SLOT_MS, forward, reflected) for n, (forward, reflected) in enumerate(millivolts.tolist())]


def end_ms(millivolts: Array) -> float:
    """When the last tally of it is over the line [ms]."""
    return raster_ms() + len(millivolts) * SLOT_MS + SENDING_MS


def counts(millivolts: Array) -> npt.NDArray[np.int64]:
    """What the chip has to count, [tallies, 2]: sums of floor(mV * 1023 / Vref) in the order F R R F."""
    tenths = np.rint(10 * millivolts).astype(np.int64)
    codes = np.minimum(tenths * FULL_CODE // (10 * REFERENCE_MV), FULL_CODE).reshape(-1, SLOTS, 2)
    return np.stack([codes[:, side == ORDER, side].sum(axis=1) for side in (0, 1)], axis=1)


def received(data: bytes) -> tuple[Tallies, Receiver]:
    """All tallies among a run's bytes as one block, and the receiver with its counters."""
    receiver = Receiver(from_start=True)
    blocks = [item for item in receiver.feed(data) if isinstance(item, Tallies)]
    seq, ms, forward, reflected, flags = (
        np.concatenate([getattr(block, name) for block in blocks])
        for name in ("seq", "ms", "forward", "reflected", "flags")
    )
    return Tallies(seq, ms, forward, reflected, flags), receiver


@functools.cache
def bridge_file() -> Path:
    """The chip's bridge file: its bench sheet, fitted by the program."""
    sheet = workshop() / "chip.bench.toml"
    sheet.write_text(bench_sheet())
    return _fitted(sheet)


@functools.cache
def wrong_bridge_file() -> Path:
    """A bridge file, fitted likewise, that names no board and was made for a 12-bit converter."""
    return _fitted(ROOT / "tests" / "data" / "shed" / "shed12.bench.toml")


def until(condition: Callable[[], bool], complaint: str, timeout_s: float = 30.0) -> None:
    """Wait for a condition, at most `timeout_s`."""
    deadline = time.monotonic() + timeout_s
    while not condition():
        assert time.monotonic() < deadline, f"{complaint} within {timeout_s} s"
        time.sleep(0.01)


def held_exclusively(path: str) -> bool:
    """Whether a program has opened the port for itself alone; by then it has thrown away what was there before.

    An ordinary user is refused by then, the administrator has to ask.
    """
    try:
        line = os.open(path, os.O_RDONLY | os.O_NOCTTY)
    except OSError:
        return True
    try:
        return bool(struct.unpack("i", fcntl.ioctl(line, TIOCGEXCL, bytes(4)))[0])
    finally:
        os.close(line)


def bench_sheet() -> str:
    """Bench sheet of the chip's bridge: the simulated bench's 73 steps, each counted by the chip."""
    return sheet_of(
        name="chip bridge",
        full_scale=FULL_SCALE,
        diode="schottky",
        ratings=RATINGS,
        steps=_steps(),
        comment="Bench sheet of the firmware's example on a simulated chip, made by simulation, not measured.",
        device_id=DEVICE_ID,
    )


def _steps() -> list[BenchStep]:
    setups = bench_setups()
    millivolts = pin_millivolts([setup.ports_v for setup in setups], STEP_TALLIES, seed=1)
    with Board(waveform(millivolts), firmware=firmware(), stop_after_ms=end_ms(millivolts)) as board:
        tallies, _ = received(board.read_to_end())
    kept = [slice(n * STEP_TALLIES + SETTLING, (n + 1) * STEP_TALLIES) for n in range(len(setups))]
    return [
        setup.step(tallies.forward[rows], tallies.reflected[rows]) for setup, rows in zip(setups, kept, strict=True)
    ]


def _fitted(sheet: Path) -> Path:
    out = workshop() / f"{sheet.name.partition('.')[0]}.bridge.toml"
    words = [sys.executable, "-m", "tui", "fit", str(sheet), "-o", str(out)]
    done = subprocess.run(words, cwd=ROOT, capture_output=True, text=True, timeout=120, check=False)
    assert done.returncode == 0, done.stderr
    return out
