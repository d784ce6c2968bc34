"""Counts to powers without a port: the law by its table, and blocks of whole codes."""

from __future__ import annotations

import time
from collections.abc import Callable
from functools import partial

import numpy as np

from calibration.block import BlockReader
from calibration.law_table import LawTable
from calibration.laws import DiodeLaw
from calibration.meter import Meter

from . import counts
from .cost import Figure, Sizes, in_turn, median
from .naive import wave_square

__all__ = ["measure"]

_LEAST_S = 0.05


def measure(sizes: Sizes) -> list[Figure]:
    """The law by table against Newton a sample, and blocks against the live meter's arithmetic."""
    return [_law(sizes), _block(sizes)]


def _law(sizes: Sizes) -> Figure:
    bridge, forward = counts.bridge(), counts.turning(1000)[0].astype(float)
    law = bridge.forward_law
    assert isinstance(law, DiodeLaw)
    table = LawTable(law, bridge.full_scale)
    few = forward[: sizes.newton_samples].tolist()

    def newton() -> None:
        for count in few:
            wave_square(count, law.offset, law.scale, law.load_term)

    ours, default = _rates(sizes, (lambda: table.square(forward), len(forward)), (newton, len(few)))
    return Figure(
        "law",
        "LawTable.square, a second of counts at once",
        "Newton's method a sample",
        "samples per CPU second",
        ours,
        default,
        ours / default,
        100.0,
        at_least=True,
    )


def _block(sizes: Sizes) -> Figure:
    forward, reflected = (column.astype(np.uint16) for column in counts.turning(sizes.block))
    reader, meter = BlockReader(counts.bridge(), counts.band()), Meter(counts.bridge())
    few = max(1, sizes.block // 10)

    def live() -> None:
        readings = meter.read(forward[:few], reflected[:few], frequency_hz=counts.FREQUENCY_HZ)
        _ = readings.swr, readings.net_w

    ours, default = _rates(sizes, (lambda: reader.read(forward, reflected), sizes.block), (live, few))
    return Figure(
        "block",
        "BlockReader.read: rho, SWR, three powers, flags",
        "Meter.read of the same",
        "readings per CPU second",
        ours,
        default,
        ours / 1e6,
        50.0,
        "million a second",
        at_least=True,
        more={"ratio": ours / default},
    )


def _rates(sizes: Sizes, *works: tuple[Callable[[], object], int]) -> list[float]:
    """Medians of how many a CPU second each of `works` (a call, and how many it does) does."""
    for call, _ in works:
        call()
    return [median(found) for found in in_turn(sizes.rounds, *(partial(_rate, *work) for work in works))]


def _rate(call: Callable[[], object], number: int) -> float:
    done, begun_s = 0, time.process_time()
    while (used_s := time.process_time() - begun_s) < _LEAST_S:
        call()
        done += number
    return done / used_s
