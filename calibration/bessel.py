"""The logarithm of the modified Bessel function I0 and its inverse, with numpy alone.

One rule: always ln I0, never I0 itself, which overflows past x = 709 (a diode detector at about 20 V).
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

__all__ = ["inverse_log_i0", "log_i0", "log_i0_slope"]

Array = npt.NDArray[np.float64]

# Below _SPLIT the integral I0(x) = mean of exp(x cos t) by midpoints, which for a periodic function converges
# faster than any power of their number (96 reach 1e-15 here); above it Hankel's expansion (Abramowitz & Stegun,
# Handbook of Mathematical Functions, 9.7.1), whose ninth term is below 1e-14 there.
_SPLIT = 50.0
_COSINES = np.cos((np.arange(96) + 0.5) * np.pi / 96.0)
_HANKEL = np.cumprod([(2 * k - 1) ** 2 / (8.0 * k) for k in range(1, 9)])
_POWERS = np.arange(1, 9)


def log_i0(x: npt.ArrayLike) -> Array:
    """ln I0(x) for x >= 0, any shape, no unit; NaN in gives NaN out."""
    return _by_size(x, _log_i0_small, _log_i0_large)


def log_i0_slope(x: npt.ArrayLike) -> Array:
    """d ln I0/dx = I1(x)/I0(x) for x >= 0, any shape."""
    return _by_size(x, _slope_small, _slope_large)


def inverse_log_i0(level: npt.ArrayLike) -> Array:
    """The x >= 0 with ln I0(x) = level, for level >= 0, any shape.

    Newton's method in y = x^2, in which ln I0 is nearly a straight line at its foot (y/4 - y^2/64 + ...): in x
    the slope vanishes there and Newton's step drowns in rounding.
    """
    target = np.asarray(level, dtype=float)
    x = _start(target)
    for _ in range(12):
        slope_y = np.where(x < 1e-3, 0.25 - x * x / 32.0, log_i0_slope(x) / (2.0 * np.where(x > 0, x, 1.0)))
        step = (log_i0(x) - target) / slope_y
        new = np.sqrt(np.maximum(x * x - step, 0.0))
        done = np.all(~(np.abs(new - x) > 1e-14 * x))
        x = new
        if done:
            break
    return x


def _start(level: Array) -> Array:
    with np.errstate(divide="ignore", invalid="ignore"):
        large = level + 0.5 * np.log(2.0 * np.pi * level)
    small = 2.0 * np.sqrt(level)
    return np.where(level > 1.0, np.maximum(small, large), small)


def _by_size(x: npt.ArrayLike, small: object, large: object) -> Array:
    values = np.asarray(x, dtype=float)
    out = np.full(values.shape, np.nan)
    low, high = values < _SPLIT, values >= _SPLIT
    out[low] = small(values[low])  # type: ignore[operator]
    out[high] = large(values[high])  # type: ignore[operator]
    return out


def _log_i0_small(x: Array) -> Array:
    # expm1 and log1p keep the digits of a tiny x, where I0 is 1 + x^2/4.
    return np.asarray(np.log1p(np.mean(np.expm1(np.multiply.outer(x, _COSINES)), axis=-1)))


def _slope_small(x: Array) -> Array:
    weights = np.exp(np.multiply.outer(x, _COSINES - 1.0))
    return np.asarray(np.sum(weights * _COSINES, axis=-1) / np.sum(weights, axis=-1))


def _series(x: Array) -> tuple[Array, Array]:
    terms = _HANKEL / np.power.outer(x, _POWERS)
    return 1.0 + terms.sum(axis=-1), -(terms * _POWERS).sum(axis=-1) / x


def _log_i0_large(x: Array) -> Array:
    return np.asarray(x - 0.5 * np.log(2.0 * np.pi * x) + np.log(_series(x)[0]))


def _slope_large(x: Array) -> Array:
    value, slope = _series(x)
    return np.asarray(1.0 - 0.5 / x + slope / value)
