"""Waveforms as the DAC holds them: steps of I, Q, amplitude and phase."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from shaper.figures import style

_BEHIND = 0.16  # opacity of the area of the pulse behind


@style.drawn
def waveform_figure(
    pulses: Mapping[str, Mapping],
    *,
    rabi_max_MHz: float,
    bound: str = "circle",
    title: str = "",
    theme: style.Theme = style.LIGHT,
) -> Figure:
    """I, Q, amplitude and phase of a few pulses on one time axis, the first one in front.

    Args:
        pulses: name to ``evidence.tables.waveform_table``.
        rabi_max_MHz: the bound.
        bound: "circle" or "box".
        title: heading.
    """
    figure = style.sheet(5.6)
    axes = figure.subplots(4, 1, sharex=True, height_ratios=(1, 1, 0.8, 0.8))
    factor, unit = style.scaled(rabi_max_MHz, "MHz")
    last = max(table["edge_ns"][-1] for table in pulses.values())
    time_factor, time_unit = style.scaled(last, "ns")
    pen = style.strokes(list(pulses), theme)
    rows = ("drive_x_MHz", "drive_y_MHz", "amplitude_MHz", "phase_deg")
    for k, (name, table) in reversed(list(enumerate(pulses.items()))):
        edges = np.asarray(table["edge_ns"]) * time_factor
        for ax, key in zip(axes, rows, strict=True):
            values = np.asarray(table[key]) * (1 if key == "phase_deg" else factor)
            _steps(
                ax,
                edges,
                values,
                pen[name],
                zorder=3 - 0.1 * k,
                filled=k > 0 and key != "phase_deg",
                wraps=key == "phase_deg",
            )
    for ax in axes[:2]:
        _bound_lines(ax, (-rabi_max_MHz * factor, rabi_max_MHz * factor), theme)
        ax.axhline(0, color=theme.rule, linewidth=0.7, zorder=0)
        ax.set_ylim(-1.15 * rabi_max_MHz * factor, 1.15 * rabi_max_MHz * factor)
    corner = np.sqrt(2) if bound == "box" else 1.0  # in a box both lines may be at full scale
    _bound_lines(axes[2], (corner * rabi_max_MHz * factor,), theme)
    axes[2].set_ylim(0, 1.15 * corner * rabi_max_MHz * factor)
    axes[3].set_ylim(-190, 190)
    axes[3].set_yticks((-180, -90, 0, 90, 180))
    axes[3].grid(axis="y")
    axes[3].set_axisbelow(True)
    for ax, label in zip(axes, ("I, Wx/2π", "Q, Wy/2π", "Amplitude"), strict=False):
        ax.set_ylabel(f"{label}\n({unit})")
    axes[3].set_ylabel("Phase\n(degrees)")
    axes[3].set_xlabel(f"Time ({time_unit})")
    axes[3].set_xlim(0, last * time_factor)
    figure.align_ylabels(axes)
    handles = [Line2D([], [], label=name, **pen[name].line) for name in pulses]
    handles.append(Line2D([], [], label=f"bound ({bound})", **_bound_line(theme)))
    style.legend_above(figure, handles, title=title)
    return figure


def small_waveform(
    ax: Axes,
    table: Mapping,
    stroke: style.Stroke,
    *,
    rabi_max: float,
    factor: float,
    time_factor: float,
    theme: style.Theme,
) -> None:
    """I (solid, filled) and Q (thin) of one pulse in a panel of its own, for rows of pulses."""
    edges = np.asarray(table["edge_ns"]) * time_factor
    x, y = (np.asarray(table[key]) * factor for key in ("drive_x_MHz", "drive_y_MHz"))
    ax.stairs(x, edges, fill=True, color=stroke.color, alpha=0.30, linewidth=0)
    ax.stairs(x, edges, baseline=None, color=stroke.color, linewidth=1.2)
    ax.stairs(y, edges, baseline=None, color=theme.ink, linewidth=0.9, linestyle=(0, (2, 1)))
    ax.axhline(0, color=theme.rule, linewidth=0.7, zorder=0)
    _bound_lines(ax, (-rabi_max * factor, rabi_max * factor), theme)
    ax.set_ylim(-1.2 * rabi_max * factor, 1.2 * rabi_max * factor)


def _bound_line(theme: style.Theme) -> dict:
    return {"color": theme.quiet, "linewidth": 0.8, "linestyle": (0, (1, 2.2))}


def _bound_lines(ax: Axes, levels: tuple[float, ...], theme: style.Theme) -> None:
    for level in levels:
        ax.axhline(level, zorder=1, **_bound_line(theme))


def _steps(ax: Axes, edges, values, stroke: style.Stroke, *, zorder, filled, wraps) -> None:
    if filled:
        ax.stairs(
            np.nan_to_num(values),
            edges,
            fill=True,
            color=stroke.color,
            alpha=_BEHIND,
            linewidth=0,
            zorder=zorder - 1,
        )
    if not wraps:
        ax.stairs(values, edges, baseline=None, zorder=zorder, **stroke.line)
        return
    # a phase that steps across +-180 degrees is no jump: leave the riser out
    t, v = np.repeat(edges, 2)[1:-1], np.repeat(values, 2)
    jump = 1 + 2 * np.flatnonzero(np.abs(np.diff(values)) > 180)
    t, v = np.insert(t, jump + 1, np.nan), np.insert(v, jump + 1, np.nan)
    ax.plot(t, v, zorder=zorder, **stroke.line)
