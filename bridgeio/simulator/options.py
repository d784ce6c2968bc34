"""What may stand behind `sim:`: one table, from which parsing, errors and help all come.

One rule: an option exists only as a line of OPTIONS; every fault of a text is reported, all at once.
"""

from __future__ import annotations

import difflib
import math
from collections.abc import Callable
from dataclasses import dataclass, replace

from bridgeio.errors import LinkError

__all__ = ["ANTENNAS", "LINES", "OPTIONS", "Option", "Scenario", "options_table", "parse_options"]

#: Resonant antennas: resistance at resonance [ohm], Q. Our own values, chosen for a dip near SWR 1.2.
ANTENNAS: dict[str, tuple[float, float]] = {"dipole": (62.0, 12.0), "vertical": (41.5, 16.0)}

#: Loads with a name [ohm]. The dummy is near 42 dB return loss, as a good one is.
FIXED_LOADS: dict[str, complex] = {"dummy": 50.7 + 0.3j, "open": 1e9 + 0j, "short": 0j}

#: Feed lines: k1, k2 [dB/100 m with MHz], velocity factor. Common practice; sources differ by 5-20 %.
LINES: dict[str, tuple[float, float, float]] = {
    "rg58": (1.456, 0.0042, 0.66),
    "rg213": (0.622, 0.0046, 0.66),
    "rg8x": (1.142, 0.0058, 0.79),
    "hardline": (0.220, 0.0006, 0.88),
}

MODES = ("tune", "key", "cw", "ssb", "sweep", "off")


@dataclass(frozen=True, slots=True)
class Scenario:
    """Everything that decides what the simulated bridge sends. Two equal scenarios send equal bytes."""

    frequency_hz: float = 14.1e6
    power_w: float = 50.0
    mode: str = "tune"
    antenna: str = "dipole"
    knob: str | None = None
    detune_khz: float = 0.0
    line: tuple[str, float] | None = ("rg213", 18.0)
    temperature_c: float = 25.0
    rate: float = 100.0
    crest: str = "off"
    wire: str = "binary"
    seed: int = 1
    duration_s: float | None = None
    pace: str = "real"
    drop: float = 0.0
    damage: float = 0.0
    silent_s: float | None = None
    unplug_s: float | None = None

    @property
    def turning(self) -> bool:
        """True where somebody turns the tuning knob: unless told, on a steady carrier into a resonant antenna."""
        turning = self.mode == "tune" if self.knob is None else self.knob == "turning"
        return turning and self.antenna in ANTENNAS


@dataclass(frozen=True, slots=True)
class Option:
    """Field in Scenario, default and allowed values in words, meaning, and how text becomes a value."""

    field: str
    default: str
    allowed: str
    meaning: str
    parse: Callable[[str], object]


def parse_options(text: str) -> Scenario:
    """Scenario from the text behind `sim:`, like "power=50&mode=ssb". LinkError names every fault."""
    values: dict[str, object] = {}
    faults: list[str] = []
    for part in filter(None, text.removeprefix("?").split("&")):
        key, _, value = part.partition("=")
        option = OPTIONS.get(key)
        if option is None:
            faults.append(_unknown(key))
            continue
        try:
            values[option.field] = option.parse(value)
        except ValueError:
            faults.append(f"{key}={value} cannot be used; allowed: {option.allowed}")
    scenario = replace(Scenario(), **values)  # type: ignore[arg-type]
    if scenario.knob == "turning" and not scenario.turning:
        faults.append(f"knob=turning needs antenna={' or '.join(ANTENNAS)}")
    if faults:
        raise LinkError(f"sim: {'; '.join(faults)}")
    return scenario


def options_table() -> str:
    """Return all options as lines of text, for `--help` and the guide."""
    head = [("option", "default", "allowed", "meaning")]
    rows = head + [(key, o.default, o.allowed, o.meaning) for key, o in OPTIONS.items()]
    widths = [max(len(row[column]) for row in rows) for column in range(3)]
    return "\n".join("  ".join([*(row[c].ljust(widths[c]) for c in range(3)), row[3]]) for row in rows)


def _unknown(key: str) -> str:
    near = difflib.get_close_matches(key, OPTIONS, n=1)
    hint = f"did you mean {near[0]}?" if near else f"known: {', '.join(OPTIONS)}"
    return f"there is no option {key!r}; {hint}"


def _number(low: float, high: float) -> Callable[[str], float]:
    def parse(text: str) -> float:
        value = float(text)
        if not (math.isfinite(value) and low <= value <= high):
            raise ValueError(text)
        return value

    return parse


def _whole(low: int, high: int) -> Callable[[str], int]:
    def parse(text: str) -> int:
        value = int(text)
        if not low <= value <= high:
            raise ValueError(text)
        return value

    return parse


def _word(*words: str) -> Callable[[str], str]:
    def parse(text: str) -> str:
        if text not in words:
            raise ValueError(text)
        return text

    return parse


def _frequency(text: str) -> float:
    from calibration.errors import UnitError
    from calibration.units import frequency_hz

    try:
        value = frequency_hz(text)
    except UnitError as error:
        raise ValueError(text) from error
    return _number(1.5e6, 60e6)(str(value))


def _antenna(text: str) -> str:
    if text not in ANTENNAS and text not in FIXED_LOADS:
        value = complex(text)
        if not (math.isfinite(abs(value)) and value.real >= 0.0):
            raise ValueError(text)
    return text


def _line(text: str) -> tuple[str, float] | None:
    if text == "none":
        return None
    name, _, length = text.partition(":")
    return _word(*LINES)(name), _number(0.0, 1000.0)(length.removesuffix("m"))


#: key -> the option. The order is the order of the documents.
OPTIONS: dict[str, Option] = {
    "frequency": Option(
        "frequency_hz",
        "14.1M",
        "1.5M to 60M, or a band like 20m",
        "what the transmitter is set to",
        _frequency,
    ),
    "power": Option("power_w", "50", "0.001 to 500 [W]", "forward power into a matched load", _number(1e-3, 500.0)),
    "mode": Option("mode", "tune", ", ".join(MODES), "what the transmitter does", _word(*MODES)),
    "antenna": Option(
        "antenna",
        "dipole",
        f"{', '.join([*ANTENNAS, *FIXED_LOADS])}, ohms (75), or R+Xj (25+40j)",
        "what stands at the end of the line",
        _antenna,
    ),
    "knob": Option(
        "knob",
        "turning if mode=tune",
        "turning, still",
        "an operator turns the antenna's tuning",
        _word("turning", "still"),
    ),
    "detune": Option("detune_khz", "0", "-5000 to 5000 [kHz]", "resonance away from the frequency", _number(-5e3, 5e3)),
    "line": Option(
        "line",
        "rg213:18m",
        f"none, or NAME:LENGTH with {', '.join(LINES)}",
        "feed line, bridge to antenna",
        _line,
    ),
    "temperature": Option("temperature_c", "25", "-20 to 60 [C]", "of the bridge's box", _number(-20.0, 60.0)),
    "rate": Option("rate", "100", "0.1 to 2000", "tallies a second", _number(0.1, 2000.0)),
    "crest": Option(
        "crest",
        "off",
        "off, on, only",
        "crest frames beside or instead of tallies",
        _word("off", "on", "only"),
    ),
    "wire": Option(
        "wire",
        "binary",
        "binary, text, plain",
        "form of the frames; plain: two numbers a line",
        _word("binary", "text", "plain"),
    ),
    "seed": Option("seed", "1", "0 to 4294967295", "decides noise, speech and faults", _whole(0, 2**32 - 1)),
    "duration": Option(
        "duration_s",
        "endless",
        "0.01 to 1e7 [s]",
        "ends the source after this device time",
        _number(0.01, 1e7),
    ),
    "pace": Option("pace", "real", "real, fast", "as time passes, or as fast as it is read", _word("real", "fast")),
    "drop": Option("drop", "0", "0 to 1", "share of frames that never arrive", _number(0.0, 1.0)),
    "damage": Option("damage", "0", "0 to 1", "share of frames with one wrong byte", _number(0.0, 1.0)),
    "silent": Option("silent_s", "never", "0 to 1e7 [s]", "the bridge stops talking after this", _number(0.0, 1e7)),
    "unplug": Option("unplug_s", "never", "0 to 1e7 [s]", "the port is gone after this", _number(0.0, 1e7)),
}
