"""How many digits of a value deserve to be shown.

One rule: a shown value is rounded to 10^floor(log10(half its interval)); digits finer than that would claim
what the interval denies.
"""

from __future__ import annotations

import math

__all__ = ["decimals", "interval", "shown"]

_MOST_DECIMALS = 6


def decimals(low: float, high: float) -> int:
    """Decimal places that the interval [low, high] supports; negative means tens, hundreds.

    Where an end is unknown or the interval is empty, two places (nothing better is known).
    """
    half = (high - low) / 2.0
    if not math.isfinite(half) or half <= 0.0:
        return 2
    return min(_MOST_DECIMALS, -math.floor(math.log10(half)))


def shown(value: float, low: float, high: float) -> str:
    """`value` with the digits that its interval [low, high] supports, same unit. NaN shows as "-"."""
    return _text(value, decimals(low, high))


def interval(low: float, high: float) -> str:
    """The interval as "low-high" with the digits it supports; an unknown end shows as "-" or "oo"."""
    places = decimals(low, high)
    if math.isnan(low):
        return f"at most {_text(high, places)}" if math.isfinite(high) else "-"
    if not math.isfinite(high):
        return f"at least {_text(low, 2)}"
    return f"{_text(low, places)}-{_text(high, places)}"


def _text(value: float, places: int) -> str:
    if not math.isfinite(value):
        return "-"
    rounded = round(value, places) + 0.0  # + 0.0 turns -0.0 into 0.0
    return f"{rounded:.{max(0, places)}f}"
