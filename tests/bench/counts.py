"""The counts that are sent in every measurement, in the forms in which a bridge sends them.

One rule: ours and the default get the same counts. They are those of the simulated bridge, so that its bridge file
reads them.
"""

from __future__ import annotations

from functools import cache

import numpy as np
import numpy.typing as npt

from bridgeio.bridge_file import BridgeFile, load_bridge_file
from bridgeio.frames import Nameplate, Tallies
from bridgeio.framing import pack
from bridgeio.simulator import BRIDGE_FILE
from calibration.bridge import Band, Bridge, band_at
from calibration.meter import Meter
from tui.readout import read_out

__all__ = [
    "BRIDGE_FILE",
    "FREQUENCY_HZ",
    "Counts",
    "band",
    "bridge",
    "frames",
    "lines",
    "nameplate",
    "tuning",
    "turning",
    "watts_texts",
]

FREQUENCY_HZ = 14.1e6

Array = npt.NDArray[np.int64]
Counts = tuple[Array, Array]

#: Forward powers [W] of one tick after the other while somebody tunes: all shown as different texts.
_WATTS = (50.0, 52.0, 54.0, 56.0, 55.0, 53.0, 51.0, 49.0)
_TICKS_HZ = 20.0
_NAMEPLATE_S = 2.0


@cache
def file() -> BridgeFile:
    """The bridge file of the simulated bridge."""
    return load_bridge_file(BRIDGE_FILE)


def bridge() -> Bridge:
    """Its calibration."""
    return file().calibrated()


def band() -> Band:
    """The band in use."""
    found = band_at(FREQUENCY_HZ, bridge().bands)
    assert found is not None
    return found


def counts_at(forward_w: npt.ArrayLike, rho: npt.ArrayLike) -> Counts:
    """Whole counts at a forward power [W] and a reflection."""
    square = np.asarray(forward_w) * band().gain_forward ** 2
    back = np.asarray(forward_w) * np.square(rho) * band().gain_reflected ** 2
    forward, reflected = bridge().forward_law.counts(square), bridge().reflected_law.counts(back)
    return np.rint(forward).astype(np.int64), np.rint(reflected).astype(np.int64)


def turning(n: int) -> Counts:
    """n pairs of counts of a knob being turned: no two neighbours alike, so that nothing is spared."""
    place = np.arange(n)
    watts = 50.0 + 20.0 * np.sin(place / 97.0) + 0.05 * (place % 7)
    return counts_at(watts, 0.25 + 0.2 * np.sin(place / 41.0) + 0.001 * (place % 5))


def tuning(n: int, rate_hz: float, start_s: float = 0.0) -> Counts:
    """n pairs of counts, `rate_hz` a second, of a tune-up whose power is another text on the screen every 1/20 s."""
    at_s = start_s + np.arange(n) / rate_hz
    watts = np.array(_WATTS)[np.rint(np.floor(at_s * _TICKS_HZ + 1e-6)).astype(np.int64) % len(_WATTS)]
    return counts_at(watts, 0.3 + 0.1 * np.sin(at_s) + 0.02 * np.sin(7.0 * at_s))


def watts_texts(counts: Counts) -> list[str]:
    """Forward power as the screen shows it, of each pair of counts."""
    pairs = list(zip(*(column.tolist() for column in counts), strict=True))
    different = list(dict.fromkeys(pairs))
    readings = Meter(bridge()).read(*np.array(different).T, frequency_hz=FREQUENCY_HZ)
    texts = {pair: read_out(readings[place]).forward.text for place, pair in enumerate(different)}
    return [texts[pair] for pair in pairs]


def frames(counts: Counts, first: int = 0, rate_hz: float = 1000.0) -> list[bytes]:
    """What a bridge sends for each pair, in binary: its frame, and every two seconds the nameplate before it.

    `first` is the number of the first tally since the bridge's start.
    """
    every, period_ms, made = round(_NAMEPLATE_S * rate_hz), 1000.0 / rate_hz, []
    for number, (forward, reflected) in enumerate(zip(*counts, strict=True), first):
        seq = number + number // every + 1
        plate = nameplate(seq - 1, int(number * period_ms), round(period_ms)) if number % every == 0 else b""
        made.append(plate + pack(Tallies.of(seq, int(number * period_ms), forward, reflected)))
    return made


def lines(counts: Counts) -> list[bytes]:
    """The same as text lines of two whole numbers."""
    return [b"%d %d\n" % pair for pair in zip(*(column.tolist() for column in counts), strict=True)]


def nameplate(seq: int, ms: int, period_ms: int) -> bytes:
    """The frame by which the bridge is known, so that its file may be used."""
    known = file()
    return pack(
        Nameplate(
            seq=seq % 256,
            ms=ms,
            minor=0,
            boot=7,
            device_id=known.device_id or 0,
            period_ms=period_ms,
            summed=16,
            full_scale=known.full_scale,
            reference_mv=0,
            features=0,
            bridge_file_id=known.fit_id or 0,
            firmware_version=1,
            name="bench bridge",
        )
    )
