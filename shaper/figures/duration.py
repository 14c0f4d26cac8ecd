"""The price of time: best infidelity against duration."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from shaper.figures import style


@style.drawn
def duration_figure(
    curve: Mapping,
    *,
    limit_ns: float | None = None,
    stop_infidelity: float | None = None,
    others: Mapping[str, tuple[float, float]] | None = None,
    measure: str = style.MEASURE,
    theme: style.Theme = style.LIGHT,
) -> Figure:
    """Best infidelity found at each duration, the time-optimal limit and other pulses as points.

    Args:
        curve: ``duration_ns`` [k] and ``infidelity`` [k].
        limit_ns: no pulse can be shorter; the ground before it is hatched.
        stop_infidelity: what the job asks for.
        others: pulse name to (duration_ns, infidelity).
        measure: what the infidelity is, see ``Target.measure``.
    """
    figure = style.sheet(2.9, 0.75 * style.PAGE_WIDTH)
    ax = figure.subplots()
    order = np.argsort(curve["duration_ns"])
    duration = np.asarray(curve["duration_ns"], dtype=float)[order]
    values = style.positive(np.asarray(curve["infidelity"], dtype=float)[order])
    others = dict(others or {})
    pen = style.strokes(["shaped", *others], theme)
    longest = max([duration[-1], *(d for d, _ in others.values())])
    factor, unit = style.scaled(longest, "ns")
    stroke = pen["shaped"]
    ax.plot(duration * factor, values, marker=stroke.marker, markersize=4, zorder=4, **stroke.line)
    handles = [
        Line2D(
            [], [], label="shaped, best found", marker=stroke.marker, markersize=4, **stroke.line
        )
    ]
    for name, (when, value) in others.items():
        point = {
            "color": pen[name].color,
            "marker": pen[name].marker,
            "linestyle": "none",
            "markersize": 5.5,
        }
        ax.plot(when * factor, value, zorder=5, **point)
        handles.append(Line2D([], [], label=name, **point))
    if limit_ns is not None:
        ax.axvspan(
            0,
            limit_ns * factor,
            facecolor="none",
            edgecolor=theme.rule,
            hatch="////",
            linewidth=0,
            zorder=0,
        )
        ax.axvline(limit_ns * factor, color=theme.quiet, linewidth=1.0, zorder=1)
        handles.append(Line2D([], [], label="time-optimal limit", color=theme.quiet, linewidth=1.0))
    if stop_infidelity:
        goal = {"color": theme.mark, "linewidth": 1.1, "linestyle": (0, (5, 2))}
        ax.axhline(stop_infidelity, zorder=1, **goal)
        handles.append(Line2D([], [], label="stop_infidelity", **goal))
    seen = [*values, *(v for _, v in others.values())]
    seen += [stop_infidelity / 2] if stop_infidelity else []
    style.log_infidelity_axis(ax, seen)
    ax.set_xlim(0, 1.04 * longest * factor)
    ax.set_xlabel(f"Duration ({unit})")
    ax.set_ylabel(measure)
    style.legend_above(figure, handles)
    return figure
