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
    history: Mapping,
    *,
    stop_infidelity: float | None = None,
    measure: str = style.MEASURE,
    theme: style.Theme = style.LIGHT,
) -> Figure:
    """One thin line a start, bold the one that was best in the end.

    Args:
        history: ``infidelity`` [start, iteration], nan where a start had ended; where the search
            has stages that measure differently, ``stage`` [iteration] (lines break between them);
            ``iteration`` [iteration] if not counted from 0.
        stop_infidelity: where the search may stop, drawn if given.
        measure: what the infidelity is, see ``Target.measure``.
    """
    figure = style.sheet(2.8, 0.75 * style.PAGE_WIDTH)
    ax = figure.subplots()
    values = np.atleast_2d(np.asarray(history["infidelity"], dtype=float))
    iteration = np.asarray(history.get("iteration", np.arange(values.shape[1])))
    values = style.positive(values)
    best = _best_in_the_end(values)
    borders = 1 + np.flatnonzero(np.diff(history.get("stage", np.zeros(len(iteration)))))
    front = style.strokes(["shaped"], theme)["shaped"]
    for k, row in enumerate(values):
        if k != best:
            ax.plot(
                *_broken(iteration, row, borders),
                color=theme.quiet,
                alpha=0.55,
                linewidth=0.8,
                zorder=2,
            )
    ax.plot(*_broken(iteration, values[best], borders), zorder=3, **front.line)
    handles = [Line2D([], [], label=f"best start ({best + 1} of {len(values)})", **front.line)]
    if len(values) > 1:
        handles.append(Line2D([], [], label="other starts", color=theme.quiet, linewidth=0.8))
    if len(borders):
        rule = {"color": theme.quiet, "linewidth": 0.8, "linestyle": (0, (1, 1.5))}
        for border in borders:
            ax.axvline(iteration[border] - 0.5, zorder=1, **rule)
        handles.append(Line2D([], [], label="next stage, another measure", **rule))
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
    ax.set_ylabel("Infidelity that was lowered" if len(borders) else measure)
    style.legend_above(figure, handles)
    return figure


def _best_in_the_end(values: np.ndarray) -> int:
    """The start with the lowest value in the last iteration that has any."""
    ended = np.flatnonzero(np.any(np.isfinite(values), axis=0))
    last = values[:, ended[-1]] if len(ended) else values[:, -1]
    return int(np.argmin(np.where(np.isnan(last), np.inf, last)))


def _broken(iteration: np.ndarray, row: np.ndarray, borders: np.ndarray) -> tuple:
    """The line with a gap at each border between stages."""
    return np.insert(iteration.astype(float), borders, np.nan), np.insert(row, borders, np.nan)
