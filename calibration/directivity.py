"""What a bridge with leakage and scalar detectors can say about a reflection: an estimate and an interval.

One rule: the angle between the load's reflection and the bridge's own leakage is unknown, so a single look gives
an interval. Forward port 1 + c G, reflected port G + d, M = |G + d|^2 / |1 + c G|^2 = m^2, rho = |G|.

At a given rho and a uniform load angle t, M F - R is (M - d^2) - rho^2 (1 - M c^2) + 2 rho e cos t with
e = |conj(d) - M c|, which is at most |d| + M |c|: both leaks ride on the same angle. The interval is all rho for which
the observed M lies in the central 95 % of that distribution, noise added; without noise it is a quadratic equation.
Sources: C. A. Hoer, IEEE Trans. IM-21, 466 (1972) for the reflectometer's equation (from memory); the inversion
is derived in METHOD terms here: METHOD.md, section "The interval".
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
import numpy.typing as npt

__all__ = [
    "CENTRAL",
    "hard_bound",
    "rho_estimate",
    "rho_interval",
    "seen_directivity_limit",
    "spread_quantile",
]

Array = npt.NDArray[np.float64]

#: The probability an interval holds.
CENTRAL = 0.95
#: Normal deviate that leaves 2.5 % beyond it.
NORMAL_DEVIATE = 1.959963984540054
#: cos(0.025 pi): the central 95 % of a cosine of uniform angle end here, close to its likeliest values, the ends.
_COSINE_DEVIATE = float(np.cos(0.025 * np.pi))
#: Newton's method for an end of an interval: most steps, and the step in rho after which it stops.
_MOST_STEPS, _FINE = 8, 1e-9


def hard_bound(m: npt.ArrayLike, d: npt.ArrayLike, c: npt.ArrayLike) -> tuple[Array, Array]:
    """Lowest and highest rho at measured ratio m = sqrt(R/F), |d| and |c| given; arrays broadcast.

    (m - d)/(1 + c m) <= rho <= (m + d)/(1 - c m), lower end 0 where m < d, upper end infinite where c m >= 1.
    """
    m, d, c = (np.asarray(value, dtype=float) for value in (m, d, c))
    low = np.maximum(m - d, 0.0) / (1.0 + c * m)
    with np.errstate(divide="ignore", invalid="ignore"):
        high = np.where(c * m < 1.0, (m + d) / (1.0 - c * m), np.inf)
    return np.where(np.isnan(m), np.nan, low), np.where(np.isnan(m), np.nan, high)


def seen_directivity_limit(measured: npt.ArrayLike, dummy_rho: npt.ArrayLike) -> Array:
    """Upper limit of |d| where a dummy load of reflection at most `dummy_rho` measured `measured`: (a+b)/(1-ab)."""
    a, b = np.asarray(measured, dtype=float), np.asarray(dummy_rho, dtype=float)
    return np.asarray((a + b) / (1.0 - a * b))


def rho_estimate(ratio: npt.ArrayLike, d: npt.ArrayLike, c: npt.ArrayLike) -> Array:
    """Single-look estimate of rho from M = R/F (any shape): the mean over the unknown angles of the solutions.

    At each angle the rho >= 0 that explain M are summed (none counts as nothing) and averaged over the circle:
    (2/pi) sqrt(h) E(e^2/h)/a with a = 1 - M c^2, e^2 = d^2 + M^2 c^2 (angle between d and c averaged in the
    square), h = a (M - d^2) + e^2 and E the complete elliptic integral; below M = d^2 the same with E = 1. It rises
    evenly from 0 at M = 0 and tends to m - d^2/(4 m) well above the leakage. Negative M gives 0.
    """
    m2 = np.maximum(np.asarray(ratio, dtype=float), 0.0)
    d2, c2 = np.square(np.asarray(d, dtype=float)), np.square(np.asarray(c, dtype=float))
    a = 1.0 - m2 * c2
    e2 = d2 + m2 * m2 * c2
    h = np.maximum(a * (m2 - d2) + e2, 0.0)
    with np.errstate(divide="ignore", invalid="ignore"):
        parameter = np.where(h > 0.0, np.minimum(e2 / h, 1.0), 0.0)
        rho = (2.0 / np.pi) * np.sqrt(h) * _elliptic_e(parameter) / a
    return np.where(np.isnan(np.asarray(ratio, dtype=float)), np.nan, np.where(a > 0.0, rho, np.inf))


def rho_interval(
    ratio_low: npt.ArrayLike,
    ratio_high: npt.ArrayLike,
    noise: npt.ArrayLike,
    d: npt.ArrayLike,
    c: npt.ArrayLike,
    angle_cosine: npt.ArrayLike = -1.0,
    d_least: npt.ArrayLike = 0.0,
) -> tuple[Array, Array]:
    """95 % interval of rho; all arguments broadcast to one shape.

    ratio_low, ratio_high: M less and plus the 95 % limit of what is fixed in it (law, balance). noise: sd of
    M F - R over F (converter). d, c: |d|, |c| at their own 95 % limits. angle_cosine: cos(arg d + arg c) where
    loads behind line have identified it, else -1, the worst. d_least: |d| is not below this; 0 where nobody knows.
    """
    arrays = np.broadcast_arrays(ratio_low, ratio_high, noise, d, c, angle_cosine, d_least)
    low_m, high_m, s, d, c, psi, least = arrays
    # |d| is a limit and the truth may leak less: where little is measured less leakage allows a larger upper end.
    ends = _ends(np.stack([low_m, high_m, high_m]), s, np.stack([d, d, least]), c, psi)
    return ends[0], np.asarray(ends[1:].max(axis=0))


def _swing(m2: Array, d: Array, c: Array, psi: Array) -> Array:
    """Half the swing of M F - R over the load angle, per unit of 2 rho: |conj(d) - M c|."""
    seen = np.maximum(m2, 0.0) * c
    return np.asarray(np.sqrt(np.maximum(d * d + seen * seen - 2.0 * d * seen * psi, 0.0)))


def _ends(m2: Array, s: Array, d: Array, c: Array, psi: Array) -> Array:
    """Lower ends (first row) and upper ends (the others) of rho, by Newton's method for all at once.

    The lower end is the rho where M is the upper quantile, 0 where already rho = 0 explains it; the upper one the
    largest rho where M is the lower quantile, infinite where the forward leak alone can explain M.
    """
    side = np.where(np.arange(len(m2)) == 0, 1.0, -1.0).reshape(-1, *[1] * (m2.ndim - 1))
    lower, unbounded, unknown = side > 0.0, np.isinf(m2), np.isnan(m2)
    m2 = np.where(unbounded, 0.0, m2)
    a, e, excess = 1.0 - m2 * c * c, _swing(m2, d, c, psi), m2 - d * d
    within = np.where(lower, excess > NORMAL_DEVIATE * s, (a > 0.0) & ~unbounded)
    a = np.maximum(a, 1e-12)
    # The lower end starts from no swing and no noise, the upper one from all of both: each lies beyond its root.
    swing, noise = np.where(lower, 0.0, e), np.where(lower, 0.0, NORMAL_DEVIATE * s)
    start = (swing + np.sqrt(np.maximum(swing * swing + a * (excess + noise), 0.0))) / a
    rho = np.where(within, start, 0.0)
    for _ in range(_MOST_STEPS):
        quantile, slope = spread_quantile(2.0 * rho * e, s)
        gap = excess - rho * rho * a - side * quantile
        fall = 2.0 * (rho * a + side * e * slope)
        step = np.where(fall > 0.0, gap / np.where(fall > 0.0, fall, 1.0), 0.0)
        before, rho = rho, np.minimum(np.maximum(rho + step, 0.0), start)
        if _settled(before, rho, within):
            break
    beyond = np.where(lower, 0.0, np.inf)
    return np.where(unknown, np.nan, np.where(within, rho, beyond))


def _settled(before: Array, after: Array, wanted: npt.NDArray[np.bool_]) -> bool:
    """Whether Newton's last step moved no wanted rho by more than what nobody can see; steps shrink as squares."""
    return not np.any((np.abs(after - before) > _FINE) & wanted)


def spread_quantile(swing: npt.ArrayLike, noise: npt.ArrayLike) -> tuple[Array, Array]:
    """97.5 % quantile of swing * cos(uniform angle) + normal noise of sd `noise`, and its slope in swing.

    The quantile is homogeneous in (swing, noise), so one table over noise/(swing + noise) serves all.
    """
    a, s = np.asarray(swing, dtype=float), np.asarray(noise, dtype=float)
    total = a + s
    part = s / np.where(total > 0.0, total, 1.0)
    knots, values, slopes = _quantile_table()
    h = np.interp(part, knots, values)
    dh = np.interp(part, knots, slopes)
    # q = total h(part), d part/d swing = -part/total.
    return np.asarray(total * h), np.asarray(h - part * dh)


@lru_cache(maxsize=1)
def _quantile_table() -> tuple[Array, Array, Array]:
    """Knots p in 0..1, quantile of (1 - p) cos + p normal there, by bisection of the normal's mean tail, and slope."""
    knots = np.linspace(0.0, 1.0, 129) ** 2
    cosines = np.cos((np.arange(2048) + 0.5) * np.pi / 2048.0)
    z, tail = _normal_tail()
    p = knots[1:, None]

    def excess(q: Array) -> Array:
        return np.asarray(np.interp((q[:, None] - (1.0 - p) * cosines) / p, z, tail).mean(axis=1) - 0.025)

    low, high = np.zeros(len(knots) - 1), np.full(len(knots) - 1, NORMAL_DEVIATE + 1.0)
    for _ in range(40):
        middle = (low + high) / 2.0
        above = excess(middle) > 0.0
        low, high = np.where(above, middle, low), np.where(above, high, middle)
    values = np.concatenate([[_COSINE_DEVIATE], (low + high) / 2.0])
    return knots, values, np.gradient(values, knots)


def _normal_tail() -> tuple[Array, Array]:
    """Upper tail of the standard normal on a grid, by the trapezoid rule on its density (error below 1e-8)."""
    z = np.linspace(-9.0, 9.0, 18001)
    density = np.exp(-0.5 * z * z) / np.sqrt(2.0 * np.pi)
    areas = (density[1:] + density[:-1]) / 2.0 * (z[1] - z[0])
    return z, np.concatenate([np.cumsum(areas[::-1])[::-1], [0.0]])


def _elliptic_e(parameter: Array) -> Array:
    """Complete elliptic integral E(parameter) in 0..1 by the arithmetic-geometric mean (Abramowitz & Stegun 17.6)."""
    first, second = np.ones_like(parameter), np.sqrt(1.0 - parameter)
    total, weight = parameter / 2.0, 0.5
    for _ in range(6):
        first, second, gap = (first + second) / 2.0, np.sqrt(first * second), (first - second) / 2.0
        weight *= 2.0
        total = total + weight * gap * gap
    return np.where(parameter >= 1.0 - 1e-12, 1.0, np.pi / (2.0 * first) * (1.0 - total))
