"""Steadiness of counts found by itself: when a bench step may be taken, and what it is then.

One rule: one window alone never decides. A window of tallies that neither drifts, wanders nor scatters must be
confirmed by the next one, and the tallies at the edges of a key-down belong to neither.
The statistics and their sources: `still`.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import pairwise
from typing import Literal

import numpy as np
import numpy.typing as npt

from .look import NO_CARRIER_SD
from .still import Converter, Window, moved_between, why_not_steady

__all__ = ["Steadiness", "Steady", "Taking"]

Array = npt.NDArray[np.float64]
Bools = npt.NDArray[np.bool_]
Phase = Literal["waiting", "moving", "steady", "taken"]
Pair = tuple[float, float]

#: A window holds at least so many tallies and lasts at least this long [s]: slow hum and hands on knobs show in it.
_FEWEST, _LEAST_S = 50, 1.0
#: No window holds more tallies, however fast they come, and so many are looked at in one go: memory stays bounded.
_MOST = 20_000
#: A bridge silent for this long [s] may have seen anything meanwhile.
_GAP_S = 2.0
#: Key down above so many sd of dark, key up within the few that a reading calls no carrier.
_DOWN_SD = 2.0 * NO_CARRIER_SD


@dataclass(frozen=True, slots=True)
class Taking:
    """What a bench step would hold: means and scatter of single readings [counts] of `samples` tallies.

    temperature_c: as last told [degrees Celsius], None where nobody has. from_s, to_s: device time [s].
    """

    forward: float
    forward_sd: float
    reflected: float
    reflected_sd: float
    samples: int
    temperature_c: float | None
    from_s: float
    to_s: float


@dataclass(frozen=True, slots=True)
class Steadiness:
    """How things stand after the newest tally.

    phase: "waiting" for the key (down, or up for a dark step), "moving" (`why` says in words what moves), "steady"
    since `since_s` [s] and waiting for the next window, or "taken". carrier: the key is seen down. drift: (forward,
    reflected) [counts/s] of the newest window, NaN before there is one. progress: 0-1, how much of two windows is
    there.
    """

    phase: Phase
    carrier: bool
    why: str
    drift: Pair = (np.nan, np.nan)
    since_s: float | None = None
    progress: float = 0.0
    taking: Taking | None = None


class Steady:
    """Watches the counts of one bench step until it is taken. Not for several threads at once."""

    def __init__(
        self,
        *,
        full_scale: float,
        dark: Pair | None = None,
        dark_sd: Pair | None = None,
        carrier: bool = True,
    ) -> None:
        """Wait for a step with (`carrier`) or without power; counts run to `full_scale`.

        dark, dark_sd: (forward, reflected) dark counts and the scatter of single ones [counts]. Only a first dark step
        can do without: then no key is seen, and all counts are taken for dark. ValueError for a carrier without dark.
        """
        if carrier and dark is None:
            raise ValueError("a carrier is told from dark counts; wanted dark=(forward, reflected)")
        self._wanted = carrier
        self._converter = Converter.of(full_scale, dark, dark_sd)
        self._keyed: bool | None = None
        self._temperature_c: float | None = None
        self._begin()
        self._state = Steadiness("waiting", False, self._waiting_for)

    @property
    def state(self) -> Steadiness:
        """How things stand."""
        return self._state

    def push(
        self,
        forward: npt.ArrayLike,
        reflected: npt.ArrayLike,
        at_s: npt.ArrayLike,
        *,
        wire_flags: npt.ArrayLike = 0,
        temperature_c: float | None = None,
    ) -> Steadiness:
        """n tallies [counts, n] with their device times [s, n], in order; wire_flags: one or n. How things stand then.

        Once taken it stays taken, and only the key is still watched.
        """
        f, r, t = (np.atleast_1d(np.asarray(column, dtype=float)) for column in (forward, reflected, at_s))
        bits = np.broadcast_to(np.asarray(wire_flags, dtype=float), f.shape)
        self._temperature_c = self._temperature_c if temperature_c is None else temperature_c
        rows = np.stack([t, f, r, bits], axis=1)
        # What is no number would pass every test.
        rows = rows[np.isfinite(rows).all(axis=1)]
        for start in range(0, len(rows), _MOST):
            self._take_in(rows[start : start + _MOST])
        return self._state

    @property
    def _waiting_for(self) -> str:
        return "waiting for the key to go down" if self._wanted else "waiting for the key to come up"

    def _begin(self) -> None:
        """Forget the stretch so far. The next tally is an edge, or not known not to be one, and is left out."""
        self._rows = np.empty((0, 4))
        self._edge_ahead = True

    def _take_in(self, rows: Array) -> None:
        keyed = self._keys(rows[:, 1:3])
        before = np.concatenate([[keyed[0] if self._keyed is None else self._keyed], keyed[:-1]])
        gaps = np.diff(rows[:, 0], prepend=self._rows[-1, 0] if len(self._rows) else rows[0, 0])
        breaks = (keyed != before) | (gaps > _GAP_S) | (gaps < 0.0)
        cuts = [0, *(int(place) for place in np.flatnonzero(breaks) if place), len(rows)]
        for start, stop in pairwise(cuts):
            if breaks[start]:
                self._begin()
            self._go_on(rows[start:stop], bool(keyed[start]))
        self._keyed = bool(keyed[-1])

    def _keys(self, counts: Array) -> Bools:
        """Where the key is down [n]; between the two thresholds it is as before. Reversed, the wave is reflected's."""
        if self._converter.dark is None:
            return np.zeros(len(counts), dtype=bool)
        away = ((counts - self._converter.dark) / self._converter.sd).max(axis=1)
        said = np.where(away > _DOWN_SD, 1, np.where(away < NO_CARRIER_SD, 0, -1))
        place = np.maximum.accumulate(np.where(said >= 0, np.arange(len(said)), -1))
        return np.asarray(np.where(place >= 0, said[place] == 1, bool(self._keyed)))

    def _go_on(self, rows: Array, keyed: bool) -> None:
        """A stretch in which the key did not move."""
        if self._state.taking is not None:
            self._state = replace(self._state, carrier=keyed)
        elif keyed is not self._wanted:
            self._begin()
            self._state = Steadiness("waiting", keyed, self._waiting_for)
        else:
            if self._edge_ahead:
                self._state = Steadiness("moving", keyed, "the first window is not full yet")
            self._rows = np.concatenate([self._rows, rows[1:] if self._edge_ahead else rows])
            self._edge_ahead = False
            while self._look():
                pass
            self._state = replace(self._state, carrier=keyed, progress=self._progress())

    def _look(self) -> bool:
        """Judge what is there; False when more tallies are wanted. The newest may be an edge and is in no window."""
        first = self._window_end(0)
        if first >= len(self._rows):
            return False
        window = self._window(slice(0, first))
        why = why_not_steady(window, self._converter)
        if why:
            return self._move_on(first, window, why)
        self._state = replace(
            self._state,
            phase="steady",
            why="steady; the next window must agree",
            drift=_pair(window.drift),
            since_s=float(self._rows[0, 0]),
        )
        second = self._window_end(first)
        if second >= len(self._rows):
            return False
        why, both = self._against(window, first, second)
        if why:
            return self._move_on(first, both, why)
        self._state = replace(
            self._state, phase="taken", why="taken", drift=_pair(both.drift), taking=self._taking(both, second)
        )
        return False

    def _against(self, window: Window, first: int, second: int) -> tuple[str, Window]:
        """Why the window that follows does not confirm this one ("" where it does), and both as one."""
        following, both = self._window(slice(first, second)), self._window(slice(0, second))
        why = moved_between(window, following) or why_not_steady(following, self._converter)
        return why or why_not_steady(both, self._converter), both

    def _move_on(self, first: int, window: Window, why: str) -> bool:
        """Leave a quarter of a window behind."""
        self._rows = self._rows[max(1, first // 4) :]
        self._state = replace(self._state, phase="moving", why=why, drift=_pair(window.drift), since_s=None)
        return True

    def _window_end(self, start: int) -> int:
        """Row after the window that begins at `start`; may lie beyond what is there."""
        times = self._rows[start:, 0]
        if not len(times):
            return start + _FEWEST
        by_time = int(np.searchsorted(times, times[0] + _LEAST_S * (1.0 - 1e-9))) + 1
        return start + min(max(_FEWEST, by_time), _MOST)

    def _progress(self) -> float:
        if self._state.taking is not None:
            return 1.0
        if not len(self._rows):
            return 0.0
        seconds = float(self._rows[-1, 0] - self._rows[0, 0])
        return min(1.0, len(self._rows) / (2 * _FEWEST), seconds / (2.0 * _LEAST_S))

    def _window(self, rows: slice) -> Window:
        return Window.of(self._rows[rows], self._converter)

    def _taking(self, window: Window, stop: int) -> Taking:
        rows = self._rows[:stop]
        sd = rows[:, 1:3].std(axis=0, ddof=1)
        return Taking(
            forward=float(window.mean[0]),
            forward_sd=float(sd[0]),
            reflected=float(window.mean[1]),
            reflected_sd=float(sd[1]),
            samples=window.samples,
            temperature_c=self._temperature_c,
            from_s=float(rows[0, 0]),
            to_s=float(rows[-1, 0]),
        )


def _pair(values: Array) -> Pair:
    return float(values[0]), float(values[1])
