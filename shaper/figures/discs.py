"""The way of a Bloch vector on two flat discs, one a hemisphere.

Lambert's azimuthal equal-area projection: equal areas on the sphere are equal areas on paper.
Source:
    J. H. Lambert, Beyträge zum Gebrauche der Mathematik und deren Anwendung III (1772).
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Circle

from shaper.figures import style

_LATITUDES = (30, 60)
_ARROWS = 9  # per path
_ON_EQUATOR = 0.02  # |z| below which a start or end is marked on both discs


def on_disc(bloch: np.ndarray, north: bool) -> np.ndarray:
    """Points of a hemisphere on its disc, the equator being the unit circle.

    The south disc is seen from outside below and mirrored, so that x points right and y up on
    both and a vector crossing the equator leaves one disc where it enters the other.

    Args:
        bloch: [point, 3] unit vectors.
    Returns:
        [point, 2].
    """
    x, y, z = np.moveaxis(np.asarray(bloch, dtype=float), -1, 0)
    stretch = 1 / np.sqrt(1 + np.maximum(z if north else -z, 0.0))
    return np.stack([x * stretch, y * stretch], axis=-1)


@style.drawn
def disc_figure(
    paths: Mapping[str, Mapping[str, Mapping]], *, theme: style.Theme = style.LIGHT
) -> Figure:
    """A row of two discs for each pulse; each start state has its color, dash and marker.

    Args:
        paths: ``evidence.tables.path_table``: pulse, then start label, then ``bloch``
            [point, 3].
    """
    figure = style.sheet(0.45 + 3.0 * len(paths), 0.86 * style.PAGE_WIDTH)
    rows = figure.subplots(len(paths), 2, squeeze=False)
    labels = list(dict.fromkeys(label for starts in paths.values() for label in starts))
    pen = style.strokes([f"start {label}" for label in labels], theme)
    for row, (name, starts) in zip(rows, paths.items(), strict=True):
        for ax, north in zip(row, (True, False), strict=True):
            _empty_disc(ax, north, theme)
            for label, table in starts.items():
                _draw_path(ax, np.asarray(table["bloch"]), north, pen[f"start {label}"], theme)
        row[0].set_title(f"{name}: north, |0⟩ in the middle")
        row[1].set_title("south, |1⟩ in the middle")
    handles = [
        Line2D(
            [],
            [],
            label=f"from {label}",
            marker=pen[f"start {label}"].marker,
            markersize=5,
            **pen[f"start {label}"].line,
        )
        for label in labels
    ]
    handles.append(
        Line2D(
            [],
            [],
            label="end",
            marker="x",
            linestyle="none",
            color=theme.ink,
            markersize=6,
            markeredgewidth=1.6,
        )
    )
    style.legend_above(figure, handles)
    return figure


def _empty_disc(ax: Axes, north: bool, theme: style.Theme) -> None:
    ax.set_aspect("equal")
    ax.set_axis_off()
    ax.set_xlim(-1.22, 1.22)
    ax.set_ylim(-1.22, 1.22)
    ax.add_patch(Circle((0, 0), 1, fill=False, edgecolor=theme.quiet, linewidth=0.9))
    for latitude in _LATITUDES:
        height = np.sin(np.radians(latitude))
        radius = np.sqrt(1 - height**2) / np.sqrt(1 + height)
        ax.add_patch(Circle((0, 0), radius, fill=False, edgecolor=theme.rule, linewidth=0.7))
        ax.annotate(
            f"{'' if north else '−'}{latitude}°",
            (radius * 0.707, -radius * 0.707),
            fontsize=6.5,
            color=theme.quiet,
            ha="center",
            va="center",
            bbox={"facecolor": theme.paper, "edgecolor": "none", "pad": 0.6},
        )
    for angle in range(0, 180, 45):
        c, s = np.cos(np.radians(angle)), np.sin(np.radians(angle))
        ax.plot((-c, c), (-s, s), color=theme.rule, linewidth=0.7, zorder=0)
    for text, x, y in (("+x", 1.12, 0), ("−x", -1.12, 0), ("+y", 0, 1.1), ("−y", 0, -1.1)):
        ax.text(x, y, text, ha="center", va="center", fontsize=8, color=theme.ink)


def _draw_path(ax: Axes, bloch: np.ndarray, north: bool, stroke: style.Stroke, theme) -> None:
    points = on_disc(bloch, north)
    inside = bloch[:, 2] >= -1e-9 if north else bloch[:, 2] <= 1e-9
    shown = np.where(inside[:, None], points, np.nan)
    ax.plot(*shown.T, zorder=3, **stroke.line)
    heights = bloch[:, 2] if north else -bloch[:, 2]
    if heights[0] > -_ON_EQUATOR:
        ax.plot(*points[0], marker=stroke.marker, markersize=6.5, color=stroke.color, zorder=5)
    if heights[-1] > -_ON_EQUATOR:
        ax.plot(
            *points[-1],
            marker="x",
            markersize=6.5,
            markeredgewidth=1.8,
            color=stroke.color,
            zorder=6,
        )
    travelled = np.concatenate([[0], np.cumsum(np.linalg.norm(np.diff(bloch, axis=0), axis=1))])
    for share in (np.arange(_ARROWS) + 0.5) / _ARROWS:
        k = int(np.searchsorted(travelled, share * travelled[-1]))
        if 0 < k < len(bloch) and inside[k - 1] and inside[k]:
            step = points[k] - points[k - 1]
            length = np.hypot(*step)
            if length > 1e-9:
                ax.annotate(
                    "",
                    points[k] + 0.03 * step / length,
                    points[k] - 0.03 * step / length,
                    zorder=4,
                    arrowprops={
                        "arrowstyle": "-|>",
                        "color": stroke.color,
                        "linewidth": 0,
                        "mutation_scale": 12,
                    },
                )
