"""The simulated microcontroller: converts what the detectors hold, adds up, and says it in frames.

One rule: what is sent, and when, follows from scenario and start number alone; no clock is read here.
"""

from __future__ import annotations

import heapq
import itertools
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from operator import itemgetter

import numpy as np
import numpy.typing as npt

from bridgeio import framing
from bridgeio.codes import (
    FEATURE_CONDITIONS,
    FEATURE_CRESTS,
    FEATURE_KEY,
    FLAG_FORWARD_CLIPPED,
    FLAG_KEY,
    FLAG_REFLECTED_CLIPPED,
)
from bridgeio.frames import Conditions, Crest, Item, Nameplate, Tallies

from . import detector
from .hands import Hands
from .options import Scenario
from .station import Station

__all__ = ["DEVICE_ID", "FULL_SCALE", "NAME", "Board", "transmissions"]

Array = npt.NDArray[np.float64]
#: Makes the frame once its sequence number is known.
Maker = Callable[[int], Item]

NAME = "sim bridge"
DEVICE_ID = 0x51B0B41D
FULL_SCALE = detector.TOP_CODE * detector.SUMMED
FIRMWARE_VERSION = 0x0100
SUPPLY_MV = 4980
BLOCK_S = 0.5  # computed at a time: long enough for arrays to pay, short enough to start quickly
HANDS_BLOCK_S = 0.1  # and where somebody keys by hand, who wants to see it
CONVERSION_S = 0.000625  # spacing of conversions at 100 tallies a second and below


@dataclass(frozen=True, slots=True)
class Block:
    """Conversions of n tallies: end times [s] of shape [n], codes of shape [n, conversions], key down [n]."""

    t_s: Array
    forward: Array
    reflected: Array
    key: npt.NDArray[np.bool_]


class Board:
    """Detectors and converter of one scenario. Ask for blocks in order: the hold capacitor remembers."""

    def __init__(self, scenario: Scenario, boot: int = 1, station: Station | Hands | None = None) -> None:
        self._rate = scenario.rate
        self._station = station or Station(scenario)
        self._channels = [
            (part, detector.Table(part, scenario.temperature_c), detector.Held(part.hold_s))
            for part in (detector.FORWARD, detector.REFLECTED)
        ]
        self._noise = np.random.default_rng([scenario.seed, boot])

    def block(self, first: int, count: int) -> Block:
        """Conversions of tallies `first` to `first + count - 1`; tally n ends at (n + 1)/rate.

        Below 100 tallies a second the conversions are a burst at the end of each period.
        """
        t_s = np.arange(first + 1, first + count + 1) / self._rate
        spacing = min(1.0 / (self._rate * detector.SUMMED), CONVERSION_S)
        each_s = t_s[:, None] - spacing * np.arange(detector.SUMMED - 1, -1, -1)
        key = self._station.envelope(each_s)
        noise = self._noise.standard_normal((*each_s.shape, 2))
        codes = []
        for side, peak_v in enumerate(self._station.port_peaks_v(t_s)):
            part, table, held = self._channels[side]
            dc_v = table.dc_v(key * peak_v[:, None])
            held_v = held.follow(each_s.ravel(), dc_v.ravel()).reshape(each_s.shape)
            codes.append(detector.convert(part, held_v, noise[:, :, side]))
        return Block(t_s, codes[0], codes[1], key[:, -1] > 0.0)


def transmissions(scenario: Scenario, boot: int = 1, hands: Hands | None = None) -> Iterator[tuple[float, bytes]]:
    """Wire bytes of frame after frame, each with the device time [s] it is sent at.

    Ends with duration or silence. Equal arguments give equal bytes. Frames that `drop` takes leave their gap
    in the sequence numbers. hands: who works at the bench; what is sent then follows from what they do, too.
    """
    plates = _at(itertools.chain((0.0, 0.3, 0.6), itertools.count(2.0, 2.0)), _nameplate(scenario, boot))
    surroundings = _at(itertools.count(0.0, 1.0), _conditions(scenario, hands))
    schedule = heapq.merge(plates, surroundings, _counts(scenario, boot, hands), key=itemgetter(0))
    end_s = min(scenario.duration_s or np.inf, np.inf if scenario.silent_s is None else scenario.silent_s)
    faults = np.random.default_rng([scenario.seed, boot, 1])
    if scenario.wire == "binary":
        yield 0.0, b"\0"
    for seq, (due_s, make) in enumerate(schedule):
        if due_s > end_s + 1e-9:
            return
        wire = _PACKERS[scenario.wire](make(seq & 0xFF))
        if scenario.drop or scenario.damage:
            wire = _with_faults(wire, scenario, faults)
        if wire:
            yield due_s, wire


def _at(times_s: Iterator[float], make_at: Callable[[float], Maker]) -> Iterator[tuple[float, Maker]]:
    return ((due_s, make_at(due_s)) for due_s in times_s)


def _counts(scenario: Scenario, boot: int, hands: Hands | None) -> Iterator[tuple[float, Maker]]:
    board = Board(scenario, boot, hands)
    count = max(1, round(scenario.rate * (BLOCK_S if hands is None else HANDS_BLOCK_S)))
    for first in itertools.count(0, count):
        block = board.block(first, count)
        flags = _flags(block)
        if scenario.crest == "off":
            yield from _tallies(block, flags)
        elif scenario.crest == "only":
            yield from _crests(block, flags)
        else:
            yield from heapq.merge(_tallies(block, flags), _crests(block, flags), key=itemgetter(0))


def _tallies(block: Block, flags: list[int]) -> Iterator[tuple[float, Maker]]:
    ms = np.asarray([_ms(due_s) for due_s in block.t_s.tolist()], dtype=np.uint32)
    forward, reflected = block.forward.sum(axis=1), block.reflected.sum(axis=1)
    bits = np.asarray(flags, dtype=np.uint8)

    def maker(n: int) -> Maker:
        one = slice(n, n + 1)

        def make(seq: int) -> Tallies:
            return Tallies(np.asarray([seq], dtype=np.uint8), ms[one], forward[one], reflected[one], bits[one])

        return make

    return ((due_s, maker(n)) for n, due_s in enumerate(block.t_s.tolist()))


def _crests(block: Block, flags: list[int]) -> Iterator[tuple[float, Maker]]:
    """Crest frames: the mean, and the highest conversion in the unit of a tally (times those added up)."""
    rows = np.arange(len(block.t_s))
    top = block.forward.argmax(axis=1)
    columns = [
        block.forward.sum(axis=1),
        block.reflected.sum(axis=1),
        block.forward[rows, top] * detector.SUMMED,
        block.reflected[rows, top] * detector.SUMMED,
        np.full(len(rows), detector.SUMMED),
        np.asarray(flags),
    ]
    values = np.stack(columns, axis=1).astype(int).tolist()

    def maker(n: int, due_s: float) -> Maker:
        return lambda seq: Crest(seq, _ms(due_s), *values[n])

    return ((due_s, maker(n, due_s)) for n, due_s in enumerate(block.t_s.tolist()))


def _flags(block: Block) -> list[int]:
    bits = np.where(block.key, FLAG_KEY, 0)
    bits |= np.where(block.forward.max(axis=1) >= detector.TOP_CODE, FLAG_FORWARD_CLIPPED, 0)
    bits |= np.where(block.reflected.max(axis=1) >= detector.TOP_CODE, FLAG_REFLECTED_CLIPPED, 0)
    return [int(value) for value in bits]


def _nameplate(scenario: Scenario, boot: int) -> Callable[[float], Maker]:
    fixed = {
        "minor": 0,
        "boot": boot & 0xFF,
        "device_id": DEVICE_ID,
        "period_ms": min(round(1000.0 / scenario.rate), 0xFFFF),
        "summed": detector.SUMMED,
        "full_scale": FULL_SCALE,
        "reference_mv": round(1000.0 * detector.REFERENCE_V),
        "features": FEATURE_CONDITIONS | FEATURE_KEY | (FEATURE_CRESTS if scenario.crest != "off" else 0),
        "bridge_file_id": 0,
        "firmware_version": FIRMWARE_VERSION,
    }
    return lambda due_s: lambda seq: Nameplate(seq, _ms(due_s), **fixed, name=NAME)


def _conditions(scenario: Scenario, hands: Hands | None) -> Callable[[float], Maker]:
    station = hands or Station(scenario)
    centi_c = round(100.0 * scenario.temperature_c)

    def make_at(due_s: float) -> Maker:
        def make(seq: int) -> Conditions:
            # Asked when it is sent: hands may have changed the band since the frame was planned.
            hertz = round(float(station.frequency_hz(np.asarray(due_s))))
            return Conditions(seq, _ms(due_s), centi_c, SUPPLY_MV, hertz)

        return make

    return make_at


def _ms(due_s: float) -> int:
    return int(due_s * 1000.0 + 1e-6) & 0xFFFFFFFF


def _with_faults(wire: bytes, scenario: Scenario, faults: np.random.Generator) -> bytes:
    """The frame, nothing, or the frame with one byte changed; its last byte, the delimiter, stays."""
    lost, hurt = faults.random(2)
    where, change = int(faults.integers(0, max(len(wire) - 1, 1))), int(faults.integers(1, 256))
    if lost < scenario.drop:
        return b""
    if hurt >= scenario.damage or not wire:
        return wire
    return wire[:where] + bytes([wire[where] ^ change]) + wire[where + 1 :]


def _plain(frame: Item) -> bytes:
    """Two numbers a line, as a sketch would print them; only tallies can be said so."""
    return framing.pack_plain(frame) if isinstance(frame, Tallies) else b""


#: wire=... -> how a frame becomes bytes.
_PACKERS: dict[str, Callable[[Item], bytes]] = {
    "binary": framing.pack,
    "text": framing.pack_text,
    "plain": _plain,
}
