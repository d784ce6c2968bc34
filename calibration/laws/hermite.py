"""Piecewise cubics through knots with given slopes, with numpy alone.

One rule: they are kept as knots, values and slopes, whoever has chosen the slopes; beyond the end knots they go on
straight.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

__all__ = ["basis", "evaluate"]

Array = npt.NDArray[np.float64]


def evaluate(x: npt.ArrayLike, knots: Array, values: Array, slopes: Array) -> tuple[Array, Array]:
    """Value and slope at x, any shape; knots [K] rising, values and slopes [..., K] give shape (..., *x)."""
    weights, slope_weights, d_weights, d_slope_weights = basis(x, knots)
    value = np.tensordot(values, weights, axes=(-1, -1)) + np.tensordot(slopes, slope_weights, axes=(-1, -1))
    slope = np.tensordot(values, d_weights, axes=(-1, -1)) + np.tensordot(slopes, d_slope_weights, axes=(-1, -1))
    return np.asarray(value), np.asarray(slope)


def basis(x: npt.ArrayLike, knots: Array) -> tuple[Array, Array, Array, Array]:
    """Weights of values and of slopes at x, and of their derivatives, each of shape (*x, K)."""
    at = np.asarray(x, dtype=float)
    inside = np.clip(at, knots[0], knots[-1])
    place = np.clip(np.searchsorted(knots, inside, side="right") - 1, 0, len(knots) - 2)
    width = knots[place + 1] - knots[place]
    t = (inside - knots[place]) / width
    beyond = at - inside
    # The four Hermite polynomials and their derivatives in x (Abramowitz & Stegun 25.2, from memory).
    value = ((1 + 2 * t) * (1 - t) ** 2, t * t * (3 - 2 * t))
    slope = (t * (1 - t) ** 2 * width, t * t * (t - 1) * width)
    d_value = (6 * t * (t - 1) / width, 6 * t * (1 - t) / width)
    d_slope = ((1 - t) * (1 - 3 * t), t * (3 * t - 2))
    ends = [
        (left + beyond * d_left, right + beyond * d_right)
        for (left, right), (d_left, d_right) in ((value, d_value), (slope, d_slope))
    ]
    return tuple(_spread(pair, place, len(knots)) for pair in (*ends, d_value, d_slope))  # type: ignore[return-value]


def _spread(pair: tuple[Array, Array], place: npt.NDArray[np.intp], count: int) -> Array:
    out = np.zeros((*place.shape, count))
    np.put_along_axis(out, place[..., None], pair[0][..., None], axis=-1)
    np.put_along_axis(out, place[..., None] + 1, pair[1][..., None], axis=-1)
    return out
