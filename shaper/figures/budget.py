"""Where the error comes from: one bar a source, on a decade axis."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from shaper.figures import style

_LOWEST_SHOWN = 1e-12  # no bench can tell it from nothing


@style.drawn
def budget_figure(
    budget: Mapping, *, measure: str = style.MEASURE, theme: style.Theme = style.LIGHT
) -> Figure:
    """Infidelity by source for each pulse: a stem to a marker, the number beside it.

    Args:
        budget: ``source`` [k] names, and ``pulses``: name to [k] infidelity (0 or nan: none).
        measure: what the infidelity is, see ``Target.measure``.
    """
    sources, pulses = list(budget["source"]), budget["pulses"]
    pen = style.strokes(list(pulses), theme)
    figure = style.sheet(0.95 + len(sources) * (0.14 + 0.17 * len(pulses)), 0.85 * style.PAGE_WIDTH)
    ax = figure.subplots()
    seen = np.concatenate([np.ravel(style.positive(v)) for v in pulses.values()])
    room = np.array([0.5, 4.0])  # for the stem of the smallest and the number beside the largest
    lowest, _ = style.log_infidelity_axis(ax, np.outer(seen, room), "x", _LOWEST_SHOWN)
    gap = 0.7 / len(pulses)
    for j, (name, values) in enumerate(pulses.items()):
        where = np.arange(len(sources)) + (j - (len(pulses) - 1) / 2) * gap
        shown = style.positive(values)
        shown[shown <= lowest] = np.nan  # told in words
        ax.hlines(
            where,
            lowest,
            shown,
            color=pen[name].color,
            linestyle=pen[name].dash,
            linewidth=pen[name].width,
            zorder=2,
        )
        ax.plot(
            shown,
            where,
            linestyle="none",
            marker=pen[name].marker,
            markersize=5,
            color=pen[name].color,
            zorder=3,
        )
        for y, value in zip(where, np.asarray(values, dtype=float), strict=True):
            if value > lowest:
                text, x = style.scientific(value), value
            else:
                text, x = f"below {style.decade(lowest)}" if value > 0 else "none", lowest
            ax.annotate(
                text, (x, y), xytext=(6, 0), textcoords="offset points", va="center", fontsize=7.5
            )
    ax.set_yticks(np.arange(len(sources)), sources)
    ax.set_ylim(len(sources) - 0.45, -0.55)
    ax.tick_params(axis="y", length=0)
    ax.spines["left"].set_visible(False)
    ax.set_xlabel(measure)
    handles = [
        Line2D([], [], label=name, marker=pen[name].marker, markersize=5, **pen[name].line)
        for name in pulses
    ]
    style.legend_above(figure, handles)
    return figure
