"""Infidelity over the plane of both errors, side by side on one scale."""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np
from matplotlib.colors import LogNorm
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Rectangle

from shaper.figures import style

CONTOURS = (1e-5, 1e-4, 1e-3)
LOWEST_SHOWN = 1e-7
HIGHEST_SHOWN = 1e-1
_TITLE_WIDTH = 24  # characters over one panel
_PANELS_IN_ROW = 3
# dark lines on the light part of the scale, light lines on the dark part
_SHADES = {1e-5: "#ffffff", 1e-4: "#ffffff", 1e-3: "#101624"}
_DASHES = {1e-5: (0, (1, 1.5)), 1e-4: (0, (5, 2)), 1e-3: "-"}


@style.drawn
def map_figure(
    maps: Mapping,
    *,
    amplitude_tolerance: float = 0.0,
    detuning_tolerance_MHz: float = 0.0,
    measure: str = style.MEASURE,
    theme: style.Theme = style.LIGHT,
) -> Figure:
    """One panel a pulse: log color scale, contours at 1e-5, 1e-4, 1e-3, the job's box.

    Args:
        maps: ``evidence.tables.map_table``.
        amplitude_tolerance, detuning_tolerance_MHz: half sides of the job's box.
        measure: what the infidelity is, see ``Target.measure``.
    """
    names = list(maps["infidelity"])
    columns = min(_PANELS_IN_ROW, len(names))
    rows = math.ceil(len(names) / columns)
    width = style.PAGE_WIDTH * min(1.0, (columns + 0.45) / (_PANELS_IN_ROW + 0.2))
    figure = style.sheet(0.6 + 2.35 * rows, width)
    panels = figure.subplots(rows, columns, sharex=True, sharey=True, squeeze=False)
    detuning = np.asarray(maps["detuning_MHz"])
    factor, unit = style.scaled(float(np.max(np.abs(detuning))), "MHz")
    amplitude = np.asarray(maps["amplitude_error"]) * 100
    has_box = amplitude_tolerance > 0 or detuning_tolerance_MHz > 0
    box = {"color": theme.mark, "linewidth": 1.5, "linestyle": (0, (3, 1.5))} if has_box else {}
    norm = LogNorm(LOWEST_SHOWN, HIGHEST_SHOWN)
    for ax in panels.ravel()[len(names) :]:
        ax.set_visible(False)
    for ax, name in zip(panels.ravel(), names, strict=False):
        values = np.clip(maps["infidelity"][name], LOWEST_SHOWN, HIGHEST_SHOWN)
        mesh = ax.pcolormesh(
            detuning * factor,
            amplitude,
            values,
            norm=norm,
            shading="gouraud",
            cmap=style.infidelity_scale(theme),
            rasterized=True,
        )
        _contours(ax, detuning * factor, amplitude, values)
        if box:
            corner = (-detuning_tolerance_MHz * factor, -amplitude_tolerance * 100)
            ax.add_patch(
                Rectangle(
                    corner,
                    -2 * corner[0],
                    -2 * corner[1],
                    fill=False,
                    **box,
                    zorder=5,
                )
            )
        ax.set_title(style.folded(name, _TITLE_WIDTH))
    for ax in panels[:, 0]:
        ax.set_ylabel("Amplitude error (%)")
    for k in range(columns):
        below = [ax for ax in panels[:, k] if ax.get_visible()]
        below[-1].set_xlabel(f"Detuning ({unit})")
        below[-1].tick_params(labelbottom=True)
    bar = figure.colorbar(mesh, ax=panels, extend="both", aspect=28, pad=0.02)
    bar.set_label(measure)
    bar.ax.minorticks_off()
    bar.ax.yaxis.set_major_formatter(style.decade)
    bar.outline.set_visible(False)
    for level in CONTOURS:  # the bar is the key to the contours
        bar.ax.axhline(level, color=_SHADES[level], linestyle=_DASHES[level], linewidth=1.2)
    if box:
        handle = Line2D([], [], label="tolerance of the job", **box)
        style.legend_above(figure, [handle])
    return figure


def _contours(ax, x, y, values) -> None:
    inside = [level for level in CONTOURS if values.min() < level < values.max()]
    if inside:
        ax.contour(
            x,
            y,
            values,
            levels=inside,
            colors=[_SHADES[level] for level in inside],
            linestyles=[_DASHES[level] for level in inside],
            linewidths=1.0,
            zorder=4,
        )
