"""What the transmitter's envelope does over time: one function a mode, amplitude 0..1 against seconds.

One rule: an envelope is a pure function of time and seed, so any instant can be asked for, in any order.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import numpy.typing as npt

__all__ = ["SWEEP_POINTS", "SWEEP_STEP_S", "Envelope", "envelope"]

Array = npt.NDArray[np.float64]
Envelope = Callable[[Array], Array]

EDGE_S = 0.005  # rise and fall of a keyed carrier
DOT_S = 0.05  # 24 words a minute
OVER_S, PAUSE_S = 6.0, 3.0  # an over of speech and the listening after it
SWEEP_STEP_S, SWEEP_POINTS = 4.5, 11

_MORSE = {"C": "-.-.", "Q": "--.-", "T": "-", "E": ".", "S": "...", "K": "-.-"}
_MESSAGE = "CQ CQ TEST CQ TEST K"


def envelope(mode: str, seed: int) -> Envelope:
    """Return the envelope of a mode of `sim:`. KeyError for a mode that is not in the table."""
    return _MODES[mode](seed)


def _steady(_seed: int) -> Envelope:
    return lambda t_s: np.ones_like(t_s)


def _off(_seed: int) -> Envelope:
    return lambda t_s: np.zeros_like(t_s)


def _by_hand(_seed: int) -> Envelope:
    """Key down for 8 s, up for 4 s."""
    return _keyed([(1.0, 9.0)], 12.0)


def _sweep(_seed: int) -> Envelope:
    """Key up while the frequency is changed, then down for 3 s."""
    return _keyed([(1.0, 4.0)], SWEEP_STEP_S)


def _morse(_seed: int) -> Envelope:
    """A call in Morse, then listening. Dash 3 dots, space within a letter 1, between letters 3, words 7."""
    spans: list[tuple[float, float]] = []
    at = 0.5
    for letter in _MESSAGE:
        for mark in _MORSE.get(letter, ""):
            length = DOT_S * (3 if mark == "-" else 1)
            spans.append((at, at + length))
            at += length + DOT_S
        at += DOT_S * (2 if letter in _MORSE else 4)
    return _keyed(spans, at + PAUSE_S)


def _speech(seed: int) -> Envelope:
    """Syllables, ripple at a voice's pitch, held at 1 as level control does; in overs."""
    turns = np.random.default_rng(seed).uniform(0.0, 2.0 * np.pi, 4)
    over = _keyed([(0.3, OVER_S)], OVER_S + PAUSE_S)

    def speak(t_s: Array) -> Array:
        syllables = sum(np.sin(2.0 * np.pi * hz * t_s + turns[n]) for n, hz in enumerate((1.3, 2.9, 4.3)))
        pitch_hz = 118.0 + 3.0 * np.sin(2.0 * np.pi * 0.4 * t_s)
        ripple = 0.55 + 0.45 * np.abs(np.cos(np.pi * pitch_hz * t_s + turns[3]))
        loud = np.maximum(0.25 + 0.55 * np.asarray(syllables), 0.0)
        return np.asarray(np.minimum(loud * ripple, 1.0) * over(t_s))

    return speak


def _keyed(spans: list[tuple[float, float]], cycle_s: float) -> Envelope:
    """Carrier on during `spans` (start, end [s]) of a repeating cycle, with raised-cosine edges."""
    knots = np.array([[start, start + EDGE_S, end, end + EDGE_S] for start, end in spans]).ravel()
    heights = np.tile([0.0, 1.0, 1.0, 0.0], len(spans))

    def keyed(t_s: Array) -> Array:
        ramp = np.interp(np.mod(t_s, cycle_s), knots, heights, left=0.0, right=0.0)
        return np.asarray(np.sin(0.5 * np.pi * ramp) ** 2)

    return keyed


#: mode -> maker of its envelope.
_MODES: dict[str, Callable[[int], Envelope]] = {
    "tune": _steady,
    "key": _by_hand,
    "cw": _morse,
    "ssb": _speech,
    "sweep": _sweep,
    "off": _off,
}
