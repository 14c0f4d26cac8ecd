"""Aligned columns for people; numbers come in, text goes out."""

from __future__ import annotations

import math

_TIME = (("s", 1.0), ("ms", 1e-3), ("us", 1e-6), ("ns", 1e-9))
_RATE = (("MHz", 2e6 * math.pi), ("kHz", 2e3 * math.pi), ("Hz", 2 * math.pi))


def time_unit(longest: float) -> tuple[str, float]:
    """Name and size (s) of the unit in which the longest time reads as 1 or more."""
    return next((u for u in _TIME if longest >= u[1]), _TIME[-1])


def rate_unit(largest: float) -> tuple[str, float]:
    """Name and size (rad/s) of the unit in which the largest rate reads as 0.1 or more."""
    return next((u for u in _RATE if largest >= 0.1 * u[1]), _RATE[-1])


def small(value: float | None) -> str:
    """An infidelity in two digits after the point, e.g. 1.24e-05; "-" for none."""
    return "-" if value is None or math.isnan(value) else f"{value:.2e}"


def plain(value: float | None, digits: int = 4) -> str:
    """A number in so many digits; "-" for none."""
    return "-" if value is None or math.isnan(value) else f"{value:.{digits}g}"


def aligned(header: list[str], rows: list[list[str]]) -> str:
    """First column to the left, the others to the right, a rule below the header."""
    widths = [max(len(line[k]) for line in [header, *rows]) for k in range(len(header))]

    def line(cells: list[str]) -> str:
        first, *others = (
            cell.ljust(w) if k == 0 else cell.rjust(w)
            for k, (cell, w) in enumerate(zip(cells, widths, strict=True))
        )
        return "  ".join([first, *others]).rstrip()

    return "\n".join([line(header), "-" * len(line(header)), *map(line, rows)])
