"""How the search went: best infidelity of every start against iteration."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.ticker import MaxNLocator

from shaper.figures import style


@style.drawn
def history_figure(
    history: Mapping, *, stop_infidelity: float | None = None, theme: style.Theme = style.LIGHT
) -> Figure:
    """One thin line a start, the best one bold.

    Args:
        history: ``infidelity`` [start, iteration] and, if not counted from 0, ``iteration``
            [iteration]; nan where a start had ended.
        stop_infidelity: where the search may stop, drawn if given.
    """
    figure = style.sheet(2.8, 0.75 * style.PAGE_WIDTH)
    ax = figure.subplots()
    values = np.atleast_2d(np.asarray(history["infidelity"], dtype=float))
    iteration = np.asarray(history.get("iteration", np.arange(values.shape[1])))
    values = style.positive(values)
    best = int(np.argmin(np.min(np.where(np.isnan(values), np.inf, values), axis=1)))
    front = style.strokes(["shaped"], theme)["shaped"]
    for k, row in enumerate(values):
        if k != best:
            ax.plot(iteration, row, color=theme.quiet, alpha=0.55, linewidth=0.8, zorder=2)
    ax.plot(iteration, values[best], zorder=3, **front.line)
    handles = [Line2D([], [], label=f"best start ({best + 1} of {len(values)})", **front.line)]
    if len(values) > 1:
        handles.append(Line2D([], [], label="other starts", color=theme.quiet, linewidth=0.8))
    seen = list(values.ravel())
    if stop_infidelity:
        goal = {"color": theme.mark, "linewidth": 1.1, "linestyle": (0, (5, 2))}
        ax.axhline(stop_infidelity, zorder=1, **goal)
        handles.append(Line2D([], [], label="stop_infidelity", **goal))
        seen.append(stop_infidelity / 2)
    style.log_infidelity_axis(ax, seen)
    ax.set_xlim(iteration[0], max(iteration[-1], iteration[0] + 1))
    ax.xaxis.set_major_locator(MaxNLocator(integer=True))
    ax.set_xlabel("Iteration")
    ax.set_ylabel("Average gate infidelity")
    style.legend_above(figure, handles)
    return figure
