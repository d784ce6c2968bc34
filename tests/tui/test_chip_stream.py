"""From executing firmware to an honest reading: a simulated antenna, the chip, its serial line, `bridgewright stream`.

The chip is calibrated as any bridge is: a bench taken through it, fitted by the program. What it is then read by was
never told the truth that the readings are held against.
"""

from __future__ import annotations

import functools
import json
import subprocess
import sys
import tempfile
import tomllib
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from bridgeio.simulator.options import Scenario
from bridgeio.simulator.station import Station
from tests.mcu import bench
from tests.mcu.board import Board, needs_board, workshop

pytestmark = needs_board

Array = npt.NDArray[np.float64]

#: Seconds of carrier and tallies of each; the first of them is without any.
PLATEAUS, TALLIES = 31, 100
#: How many tallies of a plateau the detectors settle in: 3.3 ms of hold, from 0.9 V to under a tenth of a step.
SETTLING = 5
PATIENCE_S = 30.0


@functools.cache
def stations() -> list[Station]:
    """Half a minute at the transmitter: nothing, then 30 powers from 0.5 to 90 W, the antenna's tuning all over."""
    chance = np.random.default_rng(12)
    powers_w = chance.permutation(np.geomspace(0.5, 90.0, PLATEAUS - 1))
    detunings_khz = chance.permutation(np.linspace(-900.0, 900.0, PLATEAUS - 1))
    silence = Station(Scenario(mode="off", knob="still"))
    return [silence] + [
        Station(Scenario(power_w=power_w, detune_khz=detune_khz, knob="still"))
        for power_w, detune_khz in zip(powers_w.tolist(), detunings_khz.tolist(), strict=True)
    ]


@functools.cache
def millivolts() -> Array:
    """What the chip's pins carry in that half minute."""
    at_s = np.zeros(1)
    peaks = [station.envelope(at_s) * np.stack(station.port_peaks_v(at_s), axis=0) for station in stations()]
    return bench.pin_millivolts([(float(f), float(r)) for f, r in np.concatenate(peaks, axis=1).T], TALLIES, seed=2)


@dataclass(frozen=True)
class Streamed:
    """What `stream` printed, what it said, and the bytes it had."""

    rows: list[dict[str, Any]]
    said: str
    raw: bytes

    def column(self, name: str) -> Array:
        """A column as numbers, NaN for null."""
        return np.array([np.nan if row[name] is None else row[name] for row in self.rows], dtype=float)


@functools.cache
def streamed(bridge: Path) -> Streamed:
    """The half minute through chip, pseudo terminal and `bridgewright stream` with that bridge file."""
    raw = Path(tempfile.mkdtemp(dir=workshop())) / "raw"
    count = PLATEAUS * TALLIES
    with Board(
        bench.waveform(millivolts()), firmware=bench.firmware(), stop_after_ms=bench.end_ms(millivolts())
    ) as board:
        words = ["stream", board.path, "--bridge", bridge, "--frequency", "14.1M", "--count", count, "--raw", raw]
        with subprocess.Popen(
            [sys.executable, "-m", "tui", *map(str, words)],
            cwd=bench.ROOT,
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        ) as program:
            try:
                bench.until(
                    lambda: bench.held_exclusively(board.path) or program.poll() is not None, "the port was not opened"
                )
                board.run()
                out, said = program.communicate(timeout=PATIENCE_S)
            finally:
                program.kill()
    assert program.returncode == 0, said
    return Streamed([json.loads(line) for line in out.splitlines()], said, raw.read_bytes())


def settled() -> npt.NDArray[np.bool_]:
    """Which tallies lie wholly within a plateau with carrier."""
    at = np.arange(PLATEAUS * TALLIES)
    return (at >= TALLIES) & (at % TALLIES >= SETTLING)


def true_values(name: str) -> Array:
    """A column of the truth, tally by tally."""
    return np.repeat([float(getattr(station.at(0.0), name)) for station in stations()], TALLIES)


def share_held(name: str, truth: Array) -> float:
    """Share of settled readings whose interval holds the truth; null above is no upper bound, null below is a miss."""
    result = streamed(bench.bridge_file())
    stem, _, unit = name.partition("_")
    low, high = (result.column("_".join(filter(None, (stem, end, unit)))) for end in ("low", "high"))
    held = (low <= truth) & ((truth <= high) | np.isnan(high))
    return float(held[settled()].mean())


def test_chip_is_calibrated_through_its_own_converter() -> None:
    """The sheet taken through the chip holds every step of the bench, and no residual of its fit is beyond 4 sd."""
    file = tomllib.loads(bench.bridge_file().read_text())
    assert len(file["step"]) == 73
    assert (file["bridge"]["device_id"], file["bridge"]["full_scale"]) == (f"{bench.DEVICE_ID:08X}", 16368)
    assert max(abs(row["sigmas"]) for row in file["fit"]["residual"]) < 4.0


def test_every_tally_of_half_a_minute_arrives() -> None:
    """More than 3000 tallies, each with the counts of its injected millivolts, in order: none lost and none damaged."""
    result = streamed(bench.bridge_file())
    assert len(result.rows) == PLATEAUS * TALLIES > 3000
    counted = np.stack([result.column("forward_counts"), result.column("reflected_counts")], axis=1)
    np.testing.assert_array_equal(counted, bench.counts(millivolts()))
    assert not any(set(row["flags"]) & {"uncalibrated", "unchecked", "clipped", "over-unity"} for row in result.rows)


def test_line_carries_every_frame_by_sequence() -> None:
    """By `seq` and `ms` of the bytes that `stream` kept, no frame is missing, and none of them is damaged."""
    tallies, receiver = bench.received(streamed(bench.bridge_file()).raw)
    counters = receiver.counters
    assert (counters.lost, counters.bad_crc, counters.malformed, counters.bad_lines, counters.dropped_flag) == (0,) * 5
    assert set(np.diff(tallies.ms.astype(np.int64)).tolist()) == {bench.PERIOD_MS}


def test_stream_of_a_sound_line_says_nothing() -> None:
    """Standard error is empty: nothing was lost, damaged or left uncalibrated."""
    assert streamed(bench.bridge_file()).said == ""


def test_swr_intervals_hold_the_truth() -> None:
    """Off the transitions the SWR interval holds the true SWR in at least 95 % of the readings."""
    assert share_held("swr", true_values("swr")) >= 0.95


def test_forward_intervals_hold_the_truth() -> None:
    """Off the transitions the forward power's interval holds the true power in at least 95 % of the readings."""
    assert share_held("forward_w", true_values("forward_w")) >= 0.95


def test_intervals_are_narrow_enough_to_be_of_use() -> None:
    """Holding the truth is not bought by width: above 5 W and SWR 1.5, SWR within a quarter, power within a sixth."""
    result = streamed(bench.bridge_file())
    strong = settled() & (true_values("forward_w") > 5.0) & (true_values("swr") > 1.5)
    for name, widest in (("swr", 0.5), ("forward", 0.33)):
        unit = "_w" if name == "forward" else ""
        low, high, value = (result.column(f"{name}{end}{unit}")[strong] for end in ("_low", "_high", ""))
        assert np.median((high - low) / value) < widest


def test_silent_transmitter_reads_as_no_carrier() -> None:
    """The first second, without carrier, gives no SWR: flag, null, and 0 W."""
    rows = streamed(bench.bridge_file()).rows[:TALLIES]
    assert {(tuple(row["flags"]), row["swr"], row["forward_w"]) for row in rows} == {(("no-carrier",), None, 0.0)}


def test_wrong_bridge_file_gives_counts_only() -> None:
    """With the bridge file of a 12-bit converter the same run has the same counts, and no watts or SWR in any row."""
    wrong, right = streamed(bench.wrong_bridge_file()), streamed(bench.bridge_file())
    blank = [name for name in wrong.rows[0] if name.endswith(("_w", "_db")) or name.startswith(("swr", "rho"))]
    assert {value for row in wrong.rows for value in map(row.get, blank)} == {None}
    assert {tuple(row["flags"]) for row in wrong.rows} == {("uncalibrated",)}
    for name in ("forward_counts", "reflected_counts"):
        np.testing.assert_array_equal(wrong.column(name), right.column(name))


def test_wrong_bridge_file_is_told_with_both_full_scales() -> None:
    """Standard error says once what the board counts to and what the file was made for."""
    said = streamed(bench.wrong_bridge_file()).said
    assert len(said.splitlines()) == 1
    assert "16368" in said
    assert "4095" in said
    assert "counts only" in said
