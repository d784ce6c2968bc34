"""A journal read again: counts to timed readings, as rows like a live reading's or as columns by the million.

One rule: both ways of reading give the same values; rows have the intervals, columns have the speed.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Sequence
from dataclasses import replace
from functools import lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt

from bridgeio.bridge_file import BridgeFile
from bridgeio.desk import TimedReadings
from bridgeio.journal import Journal
from bridgeio.shelf import Calibration
from calibration import flags as flag
from calibration.block import Block, BlockReader
from calibration.bridge import Band, Bridge, band_at
from calibration.meter import Meter, uncalibrated
from calibration.readings import Readings
from calibration.warmth import warmed

from .passages import Passage, Passages
from .told import temperature_steps

__all__ = ["ColumnReader", "Replay", "reading_at"]

Bits = npt.NDArray[np.uint32]

_US = 1_000_000
#: Rows of one reading: a second, as live, and never more than so many.
_MOST_ROWS = 10_000
_MOST_CODE = 65535
_POWERS = ("forward_w", "reflected_w", "net_w", "rho", "swr")


class Replay:
    """Reads a journal by its own bridge files or by others. Each of `readings` and `columns` is one walk through it."""

    def __init__(
        self,
        journal: Journal,
        files: Sequence[BridgeFile] = (),
        *,
        from_us: int | None = None,
        to_us: int | None = None,
    ) -> None:
        """As `Passages`. FileError where a file has no fit, or two are for one board."""
        self._passages = Passages(journal, files, from_us=from_us, to_us=to_us)
        #: Why tallies stayed counts, and what their boards say against the files, each sentence once.
        self.notes: list[str] = []

    @property
    def frames(self) -> dict[int, int]:
        """Frames by number of kind, -1 for tallies, as far as it was read."""
        return self._passages.frames

    def readings(self) -> Iterator[tuple[TimedReadings, str | None]]:
        """Readings with all their intervals, and the name of their bridge, a second at a time."""
        before: tuple[Calibration, Readings] | None = None
        for passage in self._passages:
            self._note(passage)
            for part in _seconds(passage):
                after = before[1] if before and before[0] is passage.calibration else None
                if passage.wanted:
                    readings = _read(part, after)
                    before = (passage.calibration, readings) if passage.calibration else None
                    time_s = part.counts.utc_us / _US
                    yield TimedReadings(readings, time_s, np.ones(len(time_s), dtype=np.intp)), passage.bridge_name
                if passage.calibration is not None:
                    at_s = float(part.counts.utc_us[-1]) / _US
                    passage.calibration.dark.push(part.counts.forward, part.counts.reflected, at_s)

    def columns(self) -> Iterator[tuple[Passage, Block]]:
        """Passages with rho, SWR and the three powers, without intervals: nothing is spent on what is not shown."""
        readers: dict[int, ColumnReader] = {}
        for passage in self._passages:
            if not passage.wanted:
                continue
            self._note(passage)
            if passage.calibration is None:
                yield passage, _nothing(len(passage.counts), _outside_bits(passage) | _bit("uncalibrated"))
                continue
            meter = passage.calibration.meter
            if id(meter) not in readers:
                readers[id(meter)] = ColumnReader(meter)
            yield passage, readers[id(meter)].read(passage)

    def _note(self, passage: Passage) -> None:
        calibration = passage.calibration
        words = passage.note if calibration is None else calibration.caution(passage.stretch.nameplate)
        if words and words not in self.notes:
            self.notes.append(words)


def reading_at(passage: Passage, row: int) -> Readings:
    """The full reading, of length one, of one tally of a passage."""
    rows = slice(row, row + 1)
    return _read(replace(passage, frequency_hz=passage.frequency_hz[rows], counts=passage.counts.part(rows)), None)


class ColumnReader:
    """Reads passages of one bridge by look-up, at the temperatures and bands that they are of."""

    def __init__(self, meter: Meter) -> None:
        """Tables are made when first wanted; a bounded number of them is kept."""
        self._meter, self._bridge = meter, meter.bridge
        self._places = {id(band): place for place, band in enumerate(self._bridge.bands)}
        # Whether this bench spans so much that a reading wants a temperature is the meter's to say.
        self._no_temperature = meter.read(0.0, 0.0).flags[0] & _bit("no-temperature")
        self._reader_at = lru_cache(maxsize=32)(self._make_reader)

    def read(self, passage: Passage) -> Block:
        """The columns of a passage that is read by this bridge."""
        counts = passage.counts
        if not _codes(counts.forward, self._bridge) or not _codes(counts.reflected, self._bridge):
            return _by_meter(self._meter, passage)
        hz = passage.frequency_hz
        if len(hz) and ((np.isnan(hz[0]) and np.isnan(hz).all()) or (hz == hz[0]).all()):
            block = self._at(float(hz[0]), passage, slice(None))
        else:
            block = _nothing(len(hz), np.uint32(0))
            for one in np.unique(hz):
                rows = np.isnan(hz) if np.isnan(one) else hz == one
                _put(block, rows, self._at(float(one), passage, rows))
        block.flags[:] |= _outside_bits(passage)
        if passage.temperature_c is None:
            block.flags[:] |= self._no_temperature
        block.flags[block.rho > 1.0] |= _bit("over-unity")
        return block

    def _at(self, hz: float, passage: Passage, rows: Any) -> Block:
        """Rows of one frequency [Hz]; where it is not known, the mean over all bands, as the meter's."""
        counts, c = passage.counts, passage.temperature_c
        columns = counts.forward[rows], counts.reflected[rows], counts.flags[rows]
        warm_c = None if c is None else float(temperature_steps(c, self._bridge))
        if np.isnan(hz):
            blocks = [self._reader_at(place, None, warm_c).read(*columns) for place in range(len(self._bridge.bands))]
            return blocks[0] if len(blocks) == 1 else _mean(blocks)
        band = band_at(hz, self._bridge.bands)
        if band is None:
            return _nothing(len(columns[0]), _bit("uncalibrated"))
        place = self._places.get(id(band))
        block = self._reader_at(place, hz if place is None else None, warm_c).read(*columns)
        if band.interpolated:
            block.flags[:] |= _bit("interpolated")
        return block

    def _make_reader(self, place: int | None, hz: float | None, warm_c: float | None) -> BlockReader:
        bridge = self._bridge
        band = bridge.bands[place] if place is not None else band_at(hz or 0.0, bridge.bands)
        assert band is not None
        return BlockReader(*_warm(bridge, band, warm_c))


def _warm(bridge: Bridge, band: Band, warm_c: float | None) -> tuple[Bridge, Band]:
    """A bridge and a band of it at a temperature [degrees Celsius]; a diode that nobody has named does not change."""
    if warm_c is None or warm_c == bridge.temperature_c or bridge.diode is None:
        return bridge, band
    (forward, gain_f), (reflected, gain_r) = (
        warmed(law, bridge.diode, bridge.temperature_c, warm_c) for law in (bridge.forward_law, bridge.reflected_law)
    )
    warm = replace(bridge, forward_law=forward, reflected_law=reflected)
    return warm, replace(band, gain_forward=band.gain_forward * gain_f, gain_reflected=band.gain_reflected * gain_r)


def _read(passage: Passage, after: Readings | None) -> Readings:
    """Full readings of a passage of one frequency."""
    counts, calibration, simulated = passage.counts, passage.calibration, passage.stretch.simulated
    if calibration is None:
        return uncalibrated(counts.forward, counts.reflected, checked=counts.checked, simulated=simulated)
    hz = float(passage.frequency_hz[0])
    return calibration.meter.read(
        counts.forward,
        counts.reflected,
        frequency_hz=None if np.isnan(hz) else hz,
        wire_flags=counts.flags,
        temperature_c=passage.temperature_c,
        moved_zero=calibration.dark.moved,
        after=after,
        checked=counts.checked,
        simulated=simulated,
    )


def _seconds(passage: Passage) -> Iterator[Passage]:
    """A passage in parts of one second and one frequency."""
    second, hz = passage.counts.utc_us // _US, np.nan_to_num(passage.frequency_hz, nan=-1.0)
    changed = (second[1:] != second[:-1]) | (hz[1:] != hz[:-1])
    edges = {0, len(second), *(np.flatnonzero(changed) + 1).tolist(), *range(0, len(second), _MOST_ROWS)}
    places = sorted(edges)
    for at, end in itertools.pairwise(places):
        rows = slice(at, end)
        yield replace(passage, frequency_hz=passage.frequency_hz[rows], counts=passage.counts.part(rows))


def _by_meter(meter: Meter, passage: Passage) -> Block:
    """Columns of counts that are no codes of 16 bits: wide ones, and means with a fraction."""
    block = _nothing(len(passage.counts), np.uint32(0))
    for at in range(0, len(passage.counts), _MOST_ROWS):
        rows = slice(at, at + _MOST_ROWS)
        counts = passage.counts.part(rows)
        found = meter.read(
            counts.forward,
            counts.reflected,
            frequency_hz=passage.frequency_hz[rows],
            wire_flags=counts.flags,
            temperature_c=passage.temperature_c,
            checked=counts.checked,
            simulated=passage.stretch.simulated,
        )
        _put(block, rows, found)
    return block


def _codes(counts: npt.NDArray[Any], bridge: Bridge) -> bool:
    return bridge.full_scale <= _MOST_CODE and (
        counts.dtype == np.uint16 or (counts.dtype.kind == "u" and bool((counts <= _MOST_CODE).all()))
    )


def _put(block: Block, rows: Any, found: Block | Readings) -> None:
    for name in (*_POWERS, "flags"):
        getattr(block, name)[rows] = getattr(found, name)


def _mean(blocks: Sequence[Block]) -> Block:
    """Bands that may all be meant as one: means of what they say, and all that they say of it."""
    power, rho = (np.mean([getattr(block, name) for block in blocks], axis=0) for name in ("forward_w", "rho"))
    share = np.mean([_share(block) for block in blocks], axis=0)
    bits = np.bitwise_or.reduce([block.flags for block in blocks]) | _bit("band-unknown")
    with np.errstate(divide="ignore", invalid="ignore"):
        swr = np.where(rho < 1.0, (1.0 + rho) / (1.0 - rho), np.nan)
    reflected = power * share**2
    return Block(power, reflected, power - reflected, rho, swr, bits)


def _share(block: Block) -> npt.NDArray[np.float32]:
    """Rho by the powers, also where it is not shown."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(np.sqrt(np.where(block.forward_w > 0.0, block.reflected_w / block.forward_w, 0.0)))


def _nothing(n: int, bits: np.uint32) -> Block:
    """n rows of which nothing is known but flags."""
    forward, reflected, net, rho, swr = np.full((5, n), np.nan, dtype=np.float32)
    return Block(forward, reflected, net, rho, swr, np.full(n, bits, dtype=np.uint32))


def _outside_bits(passage: Passage) -> np.uint32:
    """Flags by where tallies come from."""
    bits = np.uint32(0 if passage.counts.checked else flag.bit("unchecked"))
    return bits | (_bit("simulated") if passage.stretch.simulated else np.uint32(0))


def _bit(name: str) -> np.uint32:
    return np.uint32(flag.bit(name))
