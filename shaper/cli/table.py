"""Aligned columns for people; numbers come in, text goes out."""

from __future__ import annotations

import math


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

    return "\n".join([line(header), "-" * (sum(widths) + 2 * len(widths) - 2), *map(line, rows)])
