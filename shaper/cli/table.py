"""Aligned columns for people; numbers come in, text goes out."""

from __future__ import annotations

import math


def small(value: float | None) -> str:
    """An infidelity in two digits after the point, e.g. 1.24e-05; "-" for none."""
    return "-" if value is None or math.isnan(value) else f"{value:.2e}"


def plain(value: float | None, digits: int = 4) -> str:
    """A number in so many digits; "-" for none."""
    return "-" if value is None or math.isnan(value) else f"{value:.{digits}g}"


def aligned(header: list[str], rows: list[list[str]], text_columns: tuple[int, ...] = (0,)) -> str:
    """Text columns to the left, numbers to the right, a rule below the header."""
    widths = [max(len(line[k]) for line in [header, *rows]) for k in range(len(header))]

    def line(cells: list[str]) -> str:
        placed = (
            cell.ljust(width) if k in text_columns else cell.rjust(width)
            for k, (cell, width) in enumerate(zip(cells, widths, strict=True))
        )
        return "  ".join(placed).rstrip()

    return "\n".join([line(header), "-" * (sum(widths) + 2 * len(widths) - 2), *map(line, rows)])
