"""From one reading to the texts and places that are shown; every missing value has its word.

One rule: a value is shown with the digits its interval supports, or not at all and then with the reason in words.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from calibration.figures import interval, shown

if TYPE_CHECKING:
    from calibration.meter import Readings

__all__ = ["FLAG_WORDS", "NOTHING", "Field", "Readout", "field", "frequency_text", "read_out", "swr_of_rho"]

#: Flag -> the words beside the reading. In order of weight: a narrow screen shows the first ones.
FLAG_WORDS: dict[str, str] = {
    "stale": "stale",
    "uncalibrated": "uncalibrated",
    "no-carrier": "no carrier",
    "below-reading": "below what can be read",
    "over-unity": "beyond unity",
    "swapped": "forward and reflected look exchanged",
    "clipped": "clipped: a detector is at its end",
    "band-unknown": "frequency unknown: press f",
    "dark-moved": "zero has moved: z takes the new one",
    "unchecked": "unchecked lines",
    "interpolated": "between calibrated bands",
    "no-temperature": "box temperature unknown",
    "simulated": "simulated",
}

#: Said where the value stands, so not said again beside it.
_SAID_IN_PLACE = frozenset({"stale", "uncalibrated", "no-carrier", "below-reading", "over-unity"})


@dataclass(frozen=True, slots=True)
class Field:
    """One quantity: its text and interval, or the word for why it is missing. Values for drawing, NaN unknown."""

    text: str
    interval: str = ""
    word: str = ""
    value: float = math.nan
    low: float = math.nan
    high: float = math.nan


@dataclass(frozen=True, slots=True)
class Readout:
    """All that is shown of one reading. `rho` is placed on the scale, 0 to 1; `remarks` are flags in words."""

    swr: Field
    rho: Field
    forward: Field
    reflected: Field
    net: Field
    remarks: tuple[str, ...] = ()
    stale: bool = False


def read_out(reading: Readings | None, stale: bool = False) -> Readout:
    """Readout of a reading of length one, or of none yet. `stale` where the screen's own clock says so."""
    if reading is None:
        return NOTHING
    from calibration.flags import names  # numpy comes with it: only once there is a reading

    flags = names(reading.flags[0])
    remarks = tuple(words for name, words in FLAG_WORDS.items() if name in flags and name not in _SAID_IN_PLACE)
    stale = stale or "stale" in flags
    if "uncalibrated" in flags:
        return _uncalibrated(reading, remarks, stale)
    return Readout(
        swr=_swr(reading, flags),
        rho=_rho(reading, flags),
        forward=_power(reading, "forward", flags),
        reflected=_power(reading, "reflected", flags),
        net=_power(reading, "net", flags),
        remarks=remarks,
        stale=stale,
    )


def field(value: float, low: float, high: float) -> Field:
    """A value with its interval, same unit; an upper end of NaN is no upper bound."""
    top = high if math.isfinite(high) else value + (value - low)
    return Field(shown(value, low, top), _interval(low, high), "", value, low, high)


def frequency_text(hz: float) -> str:
    """A frequency [Hz] as people write it, in MHz to the kilohertz or finer where it says more: "14.100 MHz"."""
    mhz = f"{hz / 1e6:.6f}"
    while mhz.endswith("0") and len(mhz.partition(".")[2]) > 3:
        mhz = mhz[:-1]
    return f"{mhz} MHz"


def swr_of_rho(rho: float) -> float:
    """SWR of a reflection, (1 + rho)/(1 - rho); infinite from 1 up."""
    return (1.0 + rho) / (1.0 - rho) if rho < 1.0 else math.inf


def _swr(reading: Readings, flags: tuple[str, ...]) -> Field:
    low, high = float(reading.swr_low[0]), float(reading.swr_high[0])
    if "no-carrier" in flags:
        return Field("", "", "no carrier")
    if "below-reading" in flags:
        bound = "no upper bound" if math.isnan(high) else f"SWR at most {shown(high, 1.0, high)}"
        return Field("", bound, "below what can be read", math.nan, low, high)
    if "over-unity" in flags:
        return Field("", "" if math.isnan(low) else f"SWR at least {_bound(low)}", "beyond unity", math.nan, low, high)
    value = float(reading.swr[0])
    if math.isnan(value):
        bound = "" if math.isnan(low) else f"SWR at least {_bound(low)}"
        return Field("", bound, "clipped" if "clipped" in flags else "not known", math.nan, low, high)
    return field(value, low, high)


def _rho(reading: Readings, flags: tuple[str, ...]) -> Field:
    """Places on the scale only: all cut to 0..1, an open upper end at 1."""
    if "no-carrier" in flags:
        return _EMPTY
    value, low, high = (float(column[0]) for column in (reading.rho, reading.rho_low, reading.rho_high))
    if math.isnan(low) and math.isnan(value):
        return _EMPTY
    if "below-reading" in flags:
        value = math.nan
    return Field("", "", "", _cut(value), _cut(low), 1.0 if math.isnan(high) else _cut(high))


def _power(reading: Readings, which: str, flags: tuple[str, ...]) -> Field:
    value = float(getattr(reading, f"{which}_w")[0])
    low = float(getattr(reading, f"{which}_low_w")[0])
    high = float(getattr(reading, f"{which}_high_w")[0])
    if "no-carrier" in flags:
        bound = "" if math.isnan(high) else f"at most {shown(high, 0.0, high)}"
        return Field("", bound, "no carrier", math.nan, 0.0, high)
    if math.isnan(value):
        return Field("", "" if math.isnan(high) else f"at most {shown(high, 0.0, high)}", "not known", value, low, high)
    return field(max(0.0, value), low, high)


def _uncalibrated(reading: Readings, remarks: tuple[str, ...], stale: bool) -> Readout:
    counts = f"counts {_count(reading.forward_counts[0])} / {_count(reading.reflected_counts[0])}"
    missing = Field("", "", "uncalibrated")
    return Readout(Field("", counts, "uncalibrated"), _EMPTY, missing, missing, missing, remarks, stale)


def _count(value: float) -> str:
    """A count as sent; a plain line's fraction is kept to a tenth."""
    number = float(value)
    if math.isnan(number):
        return "-"
    return f"{number:.0f}" if number == round(number) else f"{number:.1f}"


def _interval(low: float, high: float) -> str:
    if math.isnan(high):
        return "" if math.isnan(low) else f"at least {_bound(low)}"
    return interval(low, high)


def _bound(low: float) -> str:
    """A lower bound without an upper one, to three figures."""
    return f"{low:.2f}" if low < 10.0 else f"{low:.3g}"


def _cut(rho: float) -> float:
    return rho if math.isnan(rho) else min(max(rho, 0.0), 1.0)


_EMPTY = Field("", "", "")
_WAITING = Field("", "", "no reading yet")
NOTHING = Readout(_WAITING, _EMPTY, _WAITING, _WAITING, _WAITING)
