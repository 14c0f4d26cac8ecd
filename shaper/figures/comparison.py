"""The picture of ``shaper compare --figure``: waveforms at the left, both cuts at the right."""

from __future__ import annotations

from collections.abc import Mapping

from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from shaper.figures import style
from shaper.figures.cuts import cut_handles, draw_cuts
from shaper.figures.waveform import small_waveform

_ROW = 0.62  # inches a waveform row
_LEAST = 4.6  # inches: what the two cuts need


@style.drawn
def comparison_figure(
    waveforms: Mapping[str, Mapping],
    cuts: Mapping,
    *,
    rabi_max_MHz: float,
    amplitude_tolerance: float = 0.0,
    detuning_tolerance_MHz: float = 0.0,
    title: str = "",
    measure: str = style.MEASURE,
    theme: style.Theme = style.LIGHT,
) -> Figure:
    """Every pulse as a row on one time axis; infidelity of all against detuning and amplitude.

    Args:
        waveforms: name to ``evidence.tables.waveform_table``, in the order of the rows.
        cuts: ``evidence.tables.cut_table`` of the same names.
        rabi_max_MHz: the bound.
        amplitude_tolerance, detuning_tolerance_MHz: half sides of the job's box, shaded.
        title: heading.
        measure: what the infidelity is, see ``Target.measure``.
    """
    names = list(waveforms)
    figure = style.sheet(max(_LEAST, 0.9 + _ROW * len(names)))
    left, right = figure.subfigures(1, 2, width_ratios=(1.15, 1))
    pen = style.strokes(names, theme)
    last = max(table["edge_ns"][-1] for table in waveforms.values())
    time_factor, time_unit = style.scaled(last, "ns")
    factor, unit = style.scaled(rabi_max_MHz, "MHz")
    rows = left.subplots(len(names), 1, sharex=True, squeeze=False)[:, 0]
    for ax, name in zip(rows, names, strict=True):
        table = waveforms[name]
        small_waveform(
            ax,
            table,
            pen[name],
            rabi_max=rabi_max_MHz,
            factor=factor,
            time_factor=time_factor,
            theme=theme,
        )
        end = table["edge_ns"][-1] * time_factor
        ax.set_title(f"{name}, {end:.4g} {time_unit}", color=pen[name].color, fontsize=8.5)
        ax.set_yticks((-rabi_max_MHz * factor, 0, rabi_max_MHz * factor))
    rows[-1].set_xlim(0, last * time_factor)
    rows[-1].set_xlabel(f"Time ({time_unit})")
    left.supylabel(f"I (filled) and Q (dashed) drive, W/2π ({unit})", fontsize=8.5)
    axes = right.subplots(2, 1, sharey=True)
    draw_cuts(axes, cuts, amplitude_tolerance, detuning_tolerance_MHz, measure, theme)
    handles: list[Line2D] = cut_handles(names, theme)
    style.legend_above(figure, handles, title=title)
    return figure
