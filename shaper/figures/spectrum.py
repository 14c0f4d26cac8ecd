"""What the waveform asks of the line: energy density against frequency from the carrier."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from shaper.figures import style

_SHOWN_DB = 60
_MARK_DASHES = ((0, (1, 1.2)), (0, (4, 1.5)), (0, (4, 1.5, 1, 1.5)))


@style.drawn
def spectrum_figure(
    spectrum: Mapping,
    *,
    band_MHz: float | None = None,
    marks_MHz: Mapping[str, float] | None = None,
    theme: style.Theme = style.LIGHT,
) -> Figure:
    """Energy density, one panel a pulse; what the line passes on is left clear, the rest shaded.

    Args:
        spectrum: ``evidence.tables.spectrum_table``.
        band_MHz: half width of the line's band around the carrier.
        marks_MHz: frequencies worth naming, such as the second transition of a transmon.
    """
    names = list(spectrum["pulses"])
    figure = style.sheet(0.8 + 1.15 * len(names), 0.85 * style.PAGE_WIDTH)
    rows = figure.subplots(len(names), 1, sharex=True, sharey=True, squeeze=False)[:, 0]
    frequency = np.asarray(spectrum["frequency_MHz"])
    factor, unit = style.scaled(float(np.max(np.abs(frequency))), "MHz")
    pen = style.strokes(names, theme)
    left, right = frequency[0] * factor, frequency[-1] * factor
    handles = []
    for ax, name in zip(rows, names, strict=True):
        density = np.asarray(spectrum["pulses"][name]["density_dB"])
        ax.fill_between(
            frequency * factor, density, -_SHOWN_DB, color=pen[name].color, alpha=0.22, linewidth=0
        )
        ax.plot(frequency * factor, density, color=pen[name].color, linewidth=0.9, zorder=3)
        ax.set_title(name, color=pen[name].color)
        ax.grid(axis="y")
        ax.set_axisbelow(True)
        handles = _mark_band(ax, band_MHz, (left, right), factor, theme)
        handles += _mark_frequencies(ax, marks_MHz or {}, factor, theme)
    rows[-1].set_xlim(left, right)
    rows[-1].set_ylim(-_SHOWN_DB, 3)
    rows[-1].set_yticks(range(-_SHOWN_DB, 1, 20))
    rows[-1].set_xlabel(f"Frequency from the carrier ({unit})")
    figure.supylabel("Energy density (dB of the largest)", fontsize=8.5)
    if handles:
        style.legend_above(figure, handles)
    return figure


def _mark_band(ax: Axes, band_MHz, ends, factor, theme) -> list[Line2D]:
    if band_MHz is None:
        return []
    edge = band_MHz * factor
    for a, b in ((ends[0], -edge), (edge, ends[1])):
        if a < b:
            ax.axvspan(
                a, b, facecolor="none", edgecolor=theme.rule, hatch="////", linewidth=0, zorder=0
            )
            ax.axvline(a if a == edge else b, color=theme.quiet, linewidth=0.9, zorder=1)
    return [Line2D([], [], label="edge of the line's band", color=theme.quiet, linewidth=0.9)]


def _mark_frequencies(ax: Axes, marks_MHz, factor, theme) -> list[Line2D]:
    handles = []
    for (name, where), dash in zip(marks_MHz.items(), _MARK_DASHES, strict=False):
        line = {"color": theme.ink, "linewidth": 1.1, "linestyle": dash}
        ax.axvline(where * factor, zorder=4, **line)
        handles.append(Line2D([], [], label=name, **line))
    return handles
