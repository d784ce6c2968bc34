"""The law of one detector as a picture: counts against watts, what the fit makes of them, and what it leaves over.

One rule: points are what was measured. A band's coupling moves them along the watts, so that all bands share one law.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from calibration.bench import BenchStep, step_power_w
from calibration.candidates import Candidate
from calibration.fit import Fit

__all__ = ["LawPicture", "law_picture"]

_SIDES = ("forward", "reflected")
#: The kind of step that shows a detector the whole wave.
_KIND = ("power", "reversed")
#: Fewer net counts than this are drawn at the lower edge.
_LEAST_COUNTS = 0.3
_CURVE_POINTS = 160


@dataclass(frozen=True, slots=True)
class LawPicture:
    """side: "forward" or "reflected". points: (log10 W, log10 counts above dark, slip). curve: the same of the law.

    residuals: (log10 W, sd off the fit, slip). coming: where the chosen step would lie, log10 W, log10 counts.
    """

    side: str
    points: tuple[tuple[float, float, bool], ...] = ()
    curve: tuple[tuple[float, float], ...] = ()
    residuals: tuple[tuple[float, float, bool], ...] = ()
    coming: tuple[float, float] | None = None


def law_picture(
    steps: Sequence[BenchStep], fit: Fit | None, plan: Candidate | None, *, side: int, dark: float, z0_ohm: float
) -> LawPicture:
    """The picture of a detector (0 forward, 1 reflected) after `steps`; fit: of these or of fewer of them.

    dark: its dark count where there is no fit yet [counts]. plan: the step in hand or chosen.
    """
    shown = [(n, s, watts) for n, s in enumerate(steps) if s.kind == _KIND[side] and (watts := step_power_w(s, z0_ohm))]
    slips = set() if fit is None else {at for slip in fit.slips for at in slip.steps}
    shift = _Shift(fit, side, [step.frequency_hz for _, step, _ in shown])
    offset = dark if shift.law is None else shift.law.offset
    points = tuple(
        (_log(watts) + shift.of(s.frequency_hz), _log_counts(_count(s, side) - offset), n in slips)
        for n, s, watts in shown
    )
    at = {n: point[0] for (n, _, _), point in zip(shown, points, strict=True)}
    residuals = [] if fit is None else [r for r in fit.residuals if r.what == "power" and r.step in at]
    meant = plan.power_w if plan is not None and plan.kind == _KIND[side] else None
    place = None if meant is None or plan is None else _log(meant) + shift.of(plan.frequency_hz)
    ends = [x for x, _, _ in points] + ([] if place is None else [place])
    return LawPicture(
        _SIDES[side],
        points,
        shift.curve(min(ends), max(ends)) if ends else (),
        tuple((at[r.step], r.sigmas, r.step in slips) for r in residuals),
        None if place is None or shift.law is None else (place, shift.counts(place)),
    )


class _Shift:
    """Puts the powers of all bands on the axis of one: by the gains that the fit has found."""

    def __init__(self, fit: Fit | None, side: int, used: list[float | None]) -> None:
        self.law = None if fit is None else (fit.bridge.forward_law, fit.bridge.reflected_law)[side]
        self._gains = []
        if fit is not None:
            self._gains = [(b.frequency_hz, (b.gain_forward, b.gain_reflected)[side]) for b in fit.bridge.bands]
        common = [hz for hz in used if hz]
        self._main = self._gain(max(common, key=common.count)) if common else self._gain(None)

    def of(self, hz: float | None) -> float:
        """log10 of the watts that this band's watts are worth on the main one."""
        return 2.0 * math.log10(self._gain(hz) / self._main)

    def counts(self, log_w: float) -> float:
        """log10 of the counts above dark at watts of the main band."""
        assert self.law is not None
        square = self._main**2 * 10.0**log_w
        return _log_counts(float(self.law.counts(square)) - self.law.offset)

    def curve(self, low: float, high: float) -> tuple[tuple[float, float], ...]:
        """The law a little beyond the points."""
        if self.law is None:
            return ()
        return tuple((float(x), self.counts(float(x))) for x in np.linspace(low - 0.3, high + 0.3, _CURVE_POINTS))

    def _gain(self, hz: float | None) -> float:
        if not self._gains:
            return 1.0
        return min(self._gains, key=lambda band: abs(math.log(band[0] / hz)))[1] if hz else self._gains[0][1]


def _count(step: BenchStep, side: int) -> float:
    return step.reflected if side else step.forward


def _log(value: float) -> float:
    return math.log10(max(value, 1e-9))


def _log_counts(net: float) -> float:
    return math.log10(max(net, _LEAST_COUNTS))
