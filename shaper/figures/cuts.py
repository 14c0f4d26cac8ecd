"""Infidelity against detuning and against amplitude error."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.ticker import MaxNLocator

from shaper.figures import style

LOWEST_SHOWN = 1e-9  # what lies below is beyond any bench and would only squeeze the axis
_MARKS = 7  # markers along a cut


@style.drawn
def cuts_figure(
    cuts: Mapping,
    *,
    amplitude_tolerance: float = 0.0,
    detuning_tolerance_MHz: float = 0.0,
    measure: str = style.MEASURE,
    theme: style.Theme = style.LIGHT,
) -> Figure:
    """Both cuts side by side on one infidelity axis.

    Args:
        cuts: ``evidence.tables.cut_table``.
        amplitude_tolerance, detuning_tolerance_MHz: half sides of the job's box, shaded.
        measure: what the infidelity is, see ``Target.measure``.
    """
    figure = style.sheet(2.9)
    axes = figure.subplots(1, 2, sharey=True)
    draw_cuts(axes, cuts, amplitude_tolerance, detuning_tolerance_MHz, measure, theme)
    axes[1].set_ylabel("")
    style.legend_above(figure, cut_handles(list(cuts["pulses"]), theme))
    return figure


def cut_handles(names: list[str], theme: style.Theme) -> list[Line2D]:
    """Legend entries of the pulses."""
    pen = style.strokes(names, theme)
    return [
        Line2D([], [], label=name, marker=pen[name].marker, markersize=3.5, **pen[name].line)
        for name in names
    ]


def draw_cuts(
    axes: tuple[Axes, Axes],
    cuts: Mapping,
    amplitude_tolerance: float,
    detuning_tolerance_MHz: float,
    measure: str,
    theme: style.Theme,
) -> None:
    """The cut against detuning on the first axes, against amplitude on the second."""
    pen = style.strokes(list(cuts["pulses"]), theme)
    detuning = np.asarray(cuts["detuning_MHz"])
    factor, unit = style.scaled(float(np.max(np.abs(detuning))), "MHz")
    panels = (
        (
            axes[0],
            detuning * factor,
            "against_detuning",
            detuning_tolerance_MHz * factor,
            f"Detuning ({unit})",
        ),
        (
            axes[1],
            np.asarray(cuts["amplitude_error"]) * 100,
            "against_amplitude",
            amplitude_tolerance * 100,
            "Amplitude error (%)",
        ),
    )
    seen = [table[key] for table in cuts["pulses"].values() for _, _, key, _, _ in panels]
    seen = np.concatenate([np.ravel(values) for values in seen])
    for ax, x, key, half_width, label in panels:
        if half_width > 0:
            ax.axvspan(-half_width, half_width, color=theme.rule, alpha=0.55, linewidth=0, zorder=0)
        for k, (name, table) in enumerate(cuts["pulses"].items()):
            step = max(1, len(x) // _MARKS)
            first = (step // 2 + k * step // max(1, len(cuts["pulses"]))) % step
            ax.plot(
                x,
                style.positive(table[key]),
                marker=pen[name].marker,
                markersize=3.2,
                markevery=(first, step),
                zorder=4 - 0.1 * k,
                **pen[name].line,
            )
        style.log_infidelity_axis(ax, seen, lowest_shown=LOWEST_SHOWN)
        ax.set_xlim(x[0], x[-1])
        ax.xaxis.set_major_locator(MaxNLocator(5))
        ax.set_xlabel(label)
        ax.set_ylabel(measure)
