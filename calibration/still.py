"""A window of counts judged: does it scatter, wander or drift more than a bench step may, and in which words.

One rule: what is significant and does not matter is let pass; what matters and cannot be excluded is not.
Sources: least squares slope and its sd, textbook; drift is held to be small only where its upper limit is (two
one-sided tests: D. J. Schuirmann, A comparison of the two one-sided tests procedure and the power approach, 1987, from
memory); wandering by J. von Neumann, Distribution of the ratio of the mean square successive difference to the
variance, 1941, with its normal approximation; a converter's step as noise of 1/sqrt(12) count: B. Widrow, I. Kollar,
Quantization Noise, 2008 (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .look import CLIPPED_PART, counting_sd

__all__ = ["Converter", "Window", "moved_between", "why_not_steady"]

Array = npt.NDArray[np.float64]

#: Drift that matters [of the counts above dark, per second], and the most that may be left open.
_DRIFT, _DRIFT_OPEN = 0.002, 0.003
#: Where counts are few, a drift below their scatter cannot be seen: over a window so many sd may be left open.
_DRIFT_OPEN_SD = 2.0
#: Limits of the tests [sd]: a slope is real; its upper limit; wandering is real; two windows differ.
_REAL_SD, _UPPER_SD, _WANDER_SD, _DIFFER_SD = 2.5, 2.0, 4.0, 3.0
#: Slow wandering matters above this part of the expected scatter or of the counts above dark.
_WANDER_NOISE, _WANDER_PART = 0.5, 0.001
#: A scatter is too much above so many times what the converter gives, and above this part of the counts above dark.
_SCATTER_TIMES, _SCATTER_PART = 5.0, 0.01
#: The scatter of an unknown converter [of full scale], and the least of any [counts].
_UNKNOWN_SD, _LEAST_SD = 5e-4, 0.5
#: What the converter's step leaves even where every count is the same [counts].
_STEP_SD = 1.0 / np.sqrt(12.0)
#: Wire flags that forbid a taking: forward or reflected clipped; reference out of range.
_CLIPPED_BITS, _REFERENCE_BIT = 0b0011, 0b1000
_SIDES = ("forward", "reflected")


@dataclass(frozen=True, slots=True)
class Converter:
    """What is known of both channels before a step: arrays [2] of dark counts (None unknown) and expected scatter."""

    full_scale: float
    dark: Array | None
    sd: Array

    @classmethod
    def of(cls, full_scale: float, dark: tuple[float, float] | None, dark_sd: tuple[float, float] | None) -> Converter:
        """Dark counts and the scatter of single ones, (forward, reflected) [counts], as far as known."""
        unknown = (max(1.0, _UNKNOWN_SD * full_scale),) * 2
        known = None if dark is None else np.array(dark, dtype=float)
        return cls(full_scale, known, np.maximum(unknown if dark_sd is None else dark_sd, _LEAST_SD))


@dataclass(frozen=True, slots=True)
class Window:
    """n tallies, both channels as arrays [2]: mean, net (above dark), drift [counts/s] and its sd, scatter [counts].

    slow: the part of the scatter that is no difference of neighbours [counts]; wander: how sure that is [sd].
    """

    samples: int
    seconds: float
    mean: Array
    net: Array
    drift: Array
    drift_sd: Array
    scatter: Array
    slow: Array
    wander: Array
    clipped: bool
    reference: bool

    @classmethod
    def of(cls, rows: Array, converter: Converter) -> Window:
        """The statistics of rows [n >= 3, 4]: device time [s], forward, reflected [counts], wire flags."""
        t, counts = rows[:, 0] - rows[:, 0].mean(), rows[:, 1:3]
        n, spread = len(rows), float((t * t).sum())
        mean = counts.mean(axis=0)
        drift = t @ (counts - mean) / spread
        left = counts - mean - np.outer(t, drift)
        variance = (left * left).sum(axis=0) / (n - 2)
        # Half the mean square of successive differences: the scatter without what is slow.
        fast = (np.diff(left, axis=0) ** 2).mean(axis=0) / 2.0
        ratio = np.divide(fast, variance, out=np.ones(2), where=variance > 0.0)
        bits = rows[:, 3].astype(np.int64)
        return cls(
            samples=n,
            seconds=float(rows[-1, 0] - rows[0, 0]),
            mean=mean,
            net=np.zeros(2) if converter.dark is None else np.maximum(mean - converter.dark, 0.0),
            drift=drift,
            drift_sd=np.sqrt((variance + _STEP_SD**2) / spread),
            scatter=np.sqrt(variance),
            slow=np.sqrt(np.maximum(variance - fast, 0.0)),
            wander=(1.0 - ratio) / np.sqrt((n - 2) / (n * n - 1.0)),
            clipped=bool((counts >= CLIPPED_PART * converter.full_scale).any() or (bits & _CLIPPED_BITS).any()),
            reference=bool((bits & _REFERENCE_BIT).any()),
        )

    @property
    def mean_sd(self) -> Array:
        """Sd of the means [2, counts]; what is slow in a window does not average out."""
        fast = [float(counting_sd(float(sd), self.samples)) for sd in self.scatter]
        return np.hypot(fast, self.slow)


def why_not_steady(window: Window, converter: Converter) -> str:
    """In words why a window is not steady; "" where it is."""
    if window.clipped:
        return "a detector is at full scale: wanted less power"
    if window.reference:
        return "the converter's reference is out of range"
    for side, name in enumerate(_SIDES):
        expected = float(converter.sd[side])
        why = _scatters(window, side, expected) or _wanders(window, side, expected) or _drifts(window, side, expected)
        if why:
            return f"{name} {why}"
    return ""


def moved_between(first: Window, second: Window) -> str:
    """In words which channel's means differ by more than their noise; "" where both agree."""
    differs = np.abs(second.mean - first.mean) > _DIFFER_SD * np.hypot(first.mean_sd, second.mean_sd)
    return f"{_SIDES[int(np.argmax(differs))]} moved from one window to the next" if differs.any() else ""


def _scatters(window: Window, side: int, expected: float) -> str:
    most = max(_SCATTER_TIMES * expected, _SCATTER_PART * window.net[side])
    found = window.scatter[side]
    return f"scatters {found:.1f} counts; the converter should give at most {most:.1f}" if found > most else ""


def _wanders(window: Window, side: int, expected: float) -> str:
    least = max(_WANDER_NOISE * expected, _WANDER_PART * window.net[side])
    real = window.wander[side] > _WANDER_SD and window.slow[side] > least
    return f"wanders by {window.slow[side]:.1f} counts" if real else ""


def _drifts(window: Window, side: int, expected: float) -> str:
    """A drift that matters is found, or cannot be excluded."""
    drift, sd, net = abs(window.drift[side]), window.drift_sd[side], window.net[side]
    noise = np.hypot(window.scatter[side], _STEP_SD)
    left_open = max(_DRIFT_OPEN * net, _DRIFT_OPEN_SD * noise / window.seconds)
    found = drift > _REAL_SD * sd and drift > max(_DRIFT * net, _STEP_SD / window.seconds)
    if not found and drift + _UPPER_SD * sd <= left_open:
        return ""
    part = f" ({100.0 * window.drift[side] / net:+.1f} %)" if net > expected else ""
    return f"drifts {window.drift[side]:+.1f} counts a second{part}"
