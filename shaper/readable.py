"""Units in which a number reads well; for people only, files have fixed units."""

from __future__ import annotations

import math

_TIME = (("s", 1.0), ("ms", 1e-3), ("us", 1e-6), ("ns", 1e-9))
_RATE = (("MHz", 2e6 * math.pi), ("kHz", 2e3 * math.pi), ("Hz", 2 * math.pi))


def time_unit(longest: float) -> tuple[str, float]:
    """Name and size (s) of the unit in which the longest time reads as 1 or more."""
    return next((u for u in _TIME if longest >= u[1] * (1 - 1e-9)), _TIME[-1])


def rate_unit(largest: float) -> tuple[str, float]:
    """Name and size (rad/s) of the unit in which the largest rate reads as 0.1 or more."""
    return next((u for u in _RATE if largest >= 0.1 * u[1] * (1 - 1e-9)), _RATE[-1])


def time(seconds: float, digits: int = 3) -> str:
    """A time with its unit, e.g. "45 us"."""
    name, size = time_unit(seconds)
    return f"{seconds / size:.{digits}g} {name}"


def rate(value: float, digits: int = 3) -> str:
    """A rate (rad/s) as an ordinary frequency with its unit, e.g. "2.5 MHz"."""
    name, size = rate_unit(abs(value))
    return f"{value / size:.{digits}g} {name}"
