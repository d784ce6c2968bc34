"""What a builder could measure next: bench steps within the ratings of transmitter, bridge, dummy load and resistors.

One rule: nothing is proposed that a named rating forbids, and where a rating is not named the careful value stands in.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .bench import BenchStep
from .bridge import BAND_REACH
from .loads import load_impedance_ohm, load_reflection
from .units import band_name

__all__ = [
    "CAREFUL_OPEN_W",
    "CAREFUL_RESISTOR_W",
    "KEY_DOWN_S",
    "Candidate",
    "Limits",
    "band_words",
    "candidates",
    "first_steps",
    "has_enough",
]

#: A bench step keeps the key down about this long [s]: what its heat is reckoned with (common practice).
KEY_DOWN_S = 10.0
#: Without `resistor_w` a known load gets no more than a small resistor stands [W].
CAREFUL_RESISTOR_W = 0.25
#: Open and short never see more than this [W], or than the least power the transmitter has.
CAREFUL_OPEN_W = 1.0
#: From this reflection magnitude on nothing takes the power.
_ALL_RETURNED = 0.99
#: A detector law has a scale, a load term and a gain.
_FIRST_POWERS = 3
#: Powers of a round number of watts: 1 and 3 in every decade.
_SERIES = tuple(factor * 10.0**decade for decade in range(-3, 4) for factor in (1.0, 3.0))
#: Two pairs of resistors, one on either side of 50 ohm, made of 50 and 100 ohm parts; open and short.
_LOADS = ("25", "100", "16.67", "150", "open", "short")
#: Line between bridge and load [degrees]: 20-45 show the leaks' imaginary parts, a quarter wave does not.
_LINE_DEG = 45.0


@dataclass(frozen=True, slots=True)
class Limits:
    """What the bench stands, None where nobody has said: all [W], `dummy_j` [J]. Names as in the bridge file."""

    dummy_w: float | None = None
    dummy_j: float | None = None
    resistor_w: float | None = None
    power_min_w: float | None = None
    power_max_w: float | None = None
    max_w: float | None = None

    @property
    def bridge_w(self) -> float:
        """The most that transmitter and bridge allow [W]."""
        return min(_or_infinite(self.power_max_w), _or_infinite(self.max_w))

    @property
    def into_dummy_w(self) -> float:
        """The most that may go into the dummy load [W], for KEY_DOWN_S."""
        return min(self.bridge_w, _or_infinite(self.dummy_w), _or_infinite(self.dummy_j) / KEY_DOWN_S)

    def into_load_w(self, load: str, z0_ohm: float) -> float:
        """The most forward power [W] towards a known load: its resistor takes what is not reflected."""
        rho = abs(complex(load_reflection(load_impedance_ohm(load), 0.0, z0_ohm=z0_ohm)))
        if rho >= _ALL_RETURNED:
            return min(self.bridge_w, max(CAREFUL_OPEN_W, self.power_min_w or 0.0))
        if self.resistor_w is None:
            return min(self.bridge_w, CAREFUL_RESISTOR_W)
        return min(self.bridge_w, self.resistor_w / (1.0 - rho * rho))


@dataclass(frozen=True, slots=True)
class Candidate:
    """A step that could be taken: kind as in a bench step, frequency [Hz], forward power [W], load, line [degrees]."""

    kind: str
    frequency_hz: float | None = None
    power_w: float | None = None
    load: str | None = None
    line_deg: float = 0.0

    @property
    def brief(self) -> str:
        """The step in a few words, where its band is understood."""
        watts = f"{self.power_w:g} W " if self.power_w else ""
        behind = f" behind {self.line_deg:g} degrees" if self.line_deg else ""
        if self.kind == "load":
            return f"{watts}into {_load_words(self.load)}{behind}"
        return {"dark": "dark", "power": f"{watts}into the dummy", "reversed": f"{watts}turned end for end"}[self.kind]

    @property
    def words(self) -> str:
        """What to do, in a line for the builder."""
        if self.kind == "dark":
            return "transmitter off: take the dark counts"
        unlike = " unlike the others" if self.kind == "power" else ""
        watts = f"a known power{unlike}" if self.power_w is None else f"{self.power_w:g} W"
        where = f"{watts} on {band_words(self.frequency_hz)}"
        if self.kind == "power":
            return f"{where} into the dummy load, read the wattmeter"
        if self.kind == "reversed":
            return f"bridge turned end for end, {where} into the dummy load, read the wattmeter"
        behind = f" behind {self.line_deg:g} degrees of 50 ohm line" if self.line_deg else ""
        return f"{where} into {_load_words(self.load)}{behind}"


def candidates(
    steps: list[BenchStep], limits: Limits, *, bands_hz: list[float] | None = None, z0_ohm: float = 50.0
) -> list[Candidate]:
    """All steps worth considering after `steps`, within `limits`, on `bands_hz` [Hz] (None: those of the sheet).

    Powers are round numbers within power_min_w..power_max_w; without both of these only powers already in the sheet.
    """
    found = [Candidate("dark")]
    frequencies = bands_hz or sorted(set(_frequencies(steps)))
    powers = _powers(steps, limits)
    into_dummy = [watts for watts in powers if watts <= limits.into_dummy_w]
    for hz in frequencies:
        found += [Candidate(kind, hz, watts) for kind in ("power", "reversed") for watts in into_dummy]
        for load in _loads(steps):
            allowed = [watts for watts in powers if watts <= limits.into_load_w(load, z0_ohm)]
            # More power only lifts the reflected count out of its noise: the highest allowed serves best.
            lines = (0.0, _line_deg(steps, hz))
            found += [Candidate("load", hz, max(allowed), load, line) for line in lines if allowed]
    return found


def has_enough(steps: list[BenchStep]) -> bool:
    """Whether a fit can be tried: a dark step, three power steps, and one of them on every band that has steps."""
    powered = _frequencies(steps, "power")
    lit = all(any(_one_band(hz, other) for other in powered) for hz in _frequencies(steps))
    return any(s.kind == "dark" for s in steps) and len(powered) >= _FIRST_POWERS and lit


def first_steps(
    steps: list[BenchStep], limits: Limits, *, wanted_hz: tuple[float, ...] = (), z0_ohm: float = 50.0
) -> list[Candidate]:
    """What `steps` lack of a plain bench, in an order that suits any bridge.

    Dark; three powers across the range on one band; one power on every other band of the sheet and of `wanted_hz` [Hz];
    the bridge turned; two resistors, then the same behind line. A power is None where nothing tells one.
    """
    powered = _frequencies(steps, "power")
    main_hz = _most_used(powered or _frequencies(steps) or list(wanted_hz))
    powers = [watts for watts in _powers(steps, limits) if watts <= limits.into_dummy_w]
    middle = _spread(powers, 1)[0]
    lacking = max(_FIRST_POWERS - len(powered), 0)
    kinds = {step.kind for step in steps}
    found = [] if "dark" in kinds else [Candidate("dark")]
    fresh = [watts for watts in powers if not any(step.power_w and _near(watts, step.power_w) for step in steps)]
    found += [Candidate("power", main_hz, watts) for watts in _spread(fresh, lacking)]
    lit = [*powered, *([main_hz] if lacking and main_hz else [])]
    for hz in [*_frequencies(steps), *wanted_hz]:
        if not any(_one_band(hz, other) for other in lit):
            found.append(Candidate("power", hz, middle))
            lit.append(hz)
    found += [] if "reversed" in kinds else [Candidate("reversed", main_hz, middle)]
    return found + _first_loads(steps, limits, main_hz, powers, z0_ohm)


def _first_loads(
    steps: list[BenchStep], limits: Limits, hz: float | None, powers: list[float], z0_ohm: float
) -> list[Candidate]:
    """The first two loads, directly and then behind line, less those taken and those no power is allowed for."""
    taken = {(step.load, step.line_deg > 0.0) for step in steps if step.kind == "load"}
    found = []
    for line, load in ((line, load) for line in (0.0, _LINE_DEG) for load in _LOADS[:2]):
        allowed = [watts for watts in powers if watts <= limits.into_load_w(load, z0_ohm)]
        if allowed and (load, line > 0.0) not in taken:
            found.append(Candidate("load", hz, max(allowed), load, line))
    return found


def _frequencies(steps: list[BenchStep], kind: str | None = None) -> list[float]:
    return [step.frequency_hz for step in steps if step.frequency_hz and kind in (None, step.kind)]


def _most_used(frequencies: list[float]) -> float | None:
    return max(frequencies, key=frequencies.count) if frequencies else None


def _spread(powers: list[float], count: int) -> list[float | None]:
    """`count` of the powers, from lowest to highest, for one alone the middle; None where they do not suffice."""
    if len(powers) < count:
        return [None] * count
    places = np.linspace(0, len(powers) - 1, count) if count > 1 else [(len(powers) - 1) / 2.0] * count
    return [powers[round(float(place))] for place in places]


def _near(watts: float, other: float) -> bool:
    """Whether two powers are too much alike to show a law's shape."""
    return bool(abs(np.log(watts / other)) < 0.35)


def _one_band(hz: float, other: float) -> bool:
    return bool(abs(np.log(hz / other)) <= np.log(1.0 + BAND_REACH))


def _powers(steps: list[BenchStep], limits: Limits) -> list[float]:
    if limits.power_min_w is None or limits.power_max_w is None:
        known = {float(f"{step.power_w:.2g}") for step in steps if step.power_w}
        return sorted(watts for watts in known if watts <= limits.bridge_w)
    low, high = limits.power_min_w, limits.bridge_w
    ends = [low] if high < low else [low, high]
    inside = [watts for watts in _SERIES if low * 1.2 < watts < high / 1.2]
    found = [watts for watts in sorted({*ends, *inside}) if watts <= high]
    if len(found) >= _FIRST_POWERS or low >= high:
        return found
    return [low, float(f"{np.sqrt(low * high):.2g}"), high]


def _loads(steps: list[BenchStep]) -> list[str]:
    """The builder's own loads, and what everybody can make of 50 and 100 ohm parts where none is like it."""
    own = list(dict.fromkeys(s.load for s in steps if s.kind == "load" and s.load))
    return own + [load for load in _LOADS if not any(_alike(load, other) for other in own)]


def _line_deg(steps: list[BenchStep], hz: float) -> float:
    """The piece of line that the builder has used on the band at `hz` [Hz], else the one of choice [degrees]."""
    own = [s.line_deg for s in steps if s.line_deg and s.frequency_hz and _one_band(s.frequency_hz, hz)]
    return own[-1] if own else _LINE_DEG


def _alike(load: str, other: str) -> bool:
    one, two = (load_reflection(load_impedance_ohm(text), 0.0) for text in (load, other))
    return bool(np.abs(one - two) < 0.05)


def _or_infinite(value: float | None) -> float:
    return np.inf if value is None else value


def band_words(hz: float | None) -> str:
    """A frequency [Hz] as people say it: the band's name, else MHz; None is any band."""
    if hz is None:
        return "the band you use most"
    name = band_name(hz)
    return f"{name[:-1]} m" if name else f"{hz / 1e6:.3f} MHz"


def _load_words(load: str | None) -> str:
    return f"an {load}" if load == "open" else f"a {load}" if load == "short" else f"{load} ohm"
