"""Heat in the dummy load and in the resistors of a bench: what they have taken, what room is left, how long to wait.

One rule: a hold-off is never silent. Where a part must cool first, the verdict says so, with seconds.
Model: one lumped thermal capacity that loses heat in proportion to what it holds, as is common practice for parts
rated by a continuous power and a short-time energy: dE/dt = P - E/tau with tau = joules/watts, so that the rated power
for ever just fills it. It knows nothing of the room's temperature, of fans or of what was keyed elsewhere.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from .loads import load_impedance_ohm, load_reflection

__all__ = ["DUMMY_S", "RESISTOR_S", "BenchHeat", "HeatStore", "HeatVerdict", "taken_w"]

#: The energy a dummy load stands unless told: so long at its rated power [s].
DUMMY_S = 30.0
#: The same for a small resistor, which has little mass (common practice, careful side).
RESISTOR_S = 5.0
#: Shorter hold-offs than this [s] are not worth a word.
_NO_WAIT_S = 0.1


@dataclass(slots=True)
class HeatStore:
    """One part: rated continuous `watts` [W] and the `joules` [J] it may hold; `held` [J] is in it now.

    watts None: nobody has told the rating; then joules are counted and nothing is lost or limited.
    """

    watts: float | None
    joules: float | None
    held: float = 0.0

    @property
    def tau_s(self) -> float:
        """Time constant [s] of its cooling; infinite without a rating."""
        return math.inf if self.watts is None or self.joules is None else self.joules / self.watts

    def pass_time(self, power_w: float, seconds: float) -> None:
        """`seconds` [s] went by with `power_w` [W] going in (0: it cools). ValueError where either is negative."""
        if not (power_w >= 0.0 and seconds >= 0.0):
            raise ValueError(f"{power_w} W for {seconds} s; wanted neither below 0")
        self.held = self._after(self.held, power_w, seconds)

    def room_s(self, power_w: float) -> float:
        """How long [s] `power_w` [W] may go in from now; infinite where it may for ever, 0 where the part is full."""
        if self.joules is None or self.watts is None:
            return math.inf
        if self.held > self.joules:
            return 0.0
        if power_w <= self.watts:
            return math.inf
        final = power_w * self.tau_s
        return self.tau_s * math.log((final - self.held) / (final - self.joules))

    def hold_s(self, power_w: float, seconds: float) -> float:
        """How long [s] to wait until `power_w` [W] for `seconds` [s] fits; infinite where it never does."""
        if self.joules is None or self.watts is None:
            return 0.0
        start = self._most_at_start(self.joules, power_w, seconds)
        if self.held <= start:
            return 0.0
        return self.tau_s * math.log(self.held / start) if start > 0.0 else math.inf

    def _most_at_start(self, joules: float, power_w: float, seconds: float) -> float:
        """What it may hold [J] so that it holds `joules` at the end and never more; -inf where not even cold."""
        if power_w * self.tau_s <= joules:
            return joules
        left = math.exp(-seconds / self.tau_s)
        room = joules - power_w * self.tau_s * (1.0 - left)
        return room / left if room >= 0.0 else -math.inf

    def _after(self, held: float, power_w: float, seconds: float) -> float:
        if math.isinf(self.tau_s):
            return held + power_w * seconds
        left = math.exp(-seconds / self.tau_s)
        return held * left + power_w * self.tau_s * (1.0 - left)


@dataclass(frozen=True, slots=True)
class HeatVerdict:
    """Whether a key-down may begin: hold_s [s] to wait (0: now, infinite: never), room_s [s] at that power.

    words: a sentence, never empty. held_part: how full the part is, NaN without a rating.
    """

    hold_s: float
    room_s: float
    held_part: float
    words: str

    @property
    def ready(self) -> bool:
        """Whether the key may go down now."""
        return self.hold_s <= 0.0


class BenchHeat:
    """The heat of a bench: one dummy load (load None) and the resistors by their text. Not for several threads."""

    def __init__(
        self, *, dummy_w: float | None = None, dummy_j: float | None = None, resistor_w: float | None = None
    ) -> None:
        """Ratings as in [bench] of a bridge file [W, J]; `dummy_j` is DUMMY_S at `dummy_w` unless told."""
        joules = dummy_j if dummy_j is not None else None if dummy_w is None else DUMMY_S * dummy_w
        self._dummy = HeatStore(dummy_w, joules)
        self._resistor_w = resistor_w
        self._resistors: dict[str, HeatStore] = {}

    def pass_time(self, seconds: float, *, load: str | None = None, power_w: float = 0.0) -> None:
        """`seconds` [s] went by with `power_w` [W] going into `load` (None: the dummy); all other parts cool."""
        into = self.store(load)
        for part in (self._dummy, *self._resistors.values()):
            part.pass_time(power_w if part is into else 0.0, seconds)

    def store(self, load: str | None) -> HeatStore:
        """The part that takes the power with `load` connected."""
        if load is None:
            return self._dummy
        joules = None if self._resistor_w is None else RESISTOR_S * self._resistor_w
        return self._resistors.setdefault(load.strip().lower(), HeatStore(self._resistor_w, joules))

    def verdict(self, power_w: float, seconds: float, *, load: str | None = None) -> HeatVerdict:
        """Whether `power_w` [W] may go into `load` (None: the dummy) for `seconds` [s] now."""
        part, name = self.store(load), _named(load)
        hold, room = part.hold_s(power_w, seconds), part.room_s(power_w)
        held = math.nan if part.joules is None else part.held / part.joules
        if hold <= _NO_WAIT_S:
            hold = 0.0
        return HeatVerdict(hold, room, held, _words(part, name, power_w, seconds, hold, room))


def taken_w(forward_w: float, load: str | None, z0_ohm: float = 50.0) -> float:
    """What `load` takes [W] of a forward power [W], P (1 - rho^2): all of it for the dummy load (None), nothing for
    open and short. UnitError where the load cannot be read."""
    if load is None:
        return forward_w
    gamma = abs(complex(load_reflection(load_impedance_ohm(load), 1e6, z0_ohm=z0_ohm)))
    return forward_w * max(0.0, 1.0 - gamma * gamma)


def _words(part: HeatStore, name: str, power_w: float, seconds: float, hold: float, room: float) -> str:
    if part.watts is None or part.joules is None:
        return f"{name} has taken {_g(part.held)} J; its rating is not told, so mind its heat"
    full = f"{name} holds {_g(part.held)} of {_g(part.joules)} J"
    if math.isinf(hold):
        return f"{power_w:g} W for {seconds:g} s is too much for {name}, even cold: {_g(part.joules)} J is its limit"
    if hold > 0.0:
        return f"hot: {full}; wait {math.ceil(hold)} s before {power_w:g} W for {seconds:g} s"
    return f"{full}; {power_w:g} W may go on" if math.isinf(room) else f"{full}; {power_w:g} W for up to {room:.0f} s"


def _g(joules: float) -> str:
    """Joules for a sentence: whole ones, or three digits below ten."""
    return f"{joules:.0f}" if joules >= 10.0 else f"{joules:.3g}"


def _named(load: str | None) -> str:
    if load is None:
        return "the dummy load"
    return f"the {load} ohm load" if load[:1].isdigit() else f"the {load}"
