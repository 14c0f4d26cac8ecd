"""Speed: the engine against other ways of computing the same, and infidelity against waiting."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.ticker import LogLocator, NullFormatter

from shaper.figures import style

_LABELS = {
    "engine": "shaper",
    "plain_scan": "JAX, plain scan",
    "numpy": "NumPy and SciPy by hand",
    "expm": "SciPy expm, differences",
}
_MOST_SIZES = 6  # rows of the left panel that stay legible


@style.drawn
def benchmark_figure(
    engine: Mapping[str, Mapping[str, Mapping[str, float]]],
    reach: Mapping[str, Mapping[str, float | None]],
    trail: Sequence[tuple[float, float]],
    *,
    theme: style.Theme = style.LIGHT,
) -> Figure:
    """Two panels from the output of the benchmark.

    Args:
        engine: size to way ("engine", "plain_scan", "numpy", "expm") to ``ns`` per slice and
            grid point.
        reach: infidelity (as text) to ``shaper_s``, seconds or None where it was not reached.
        trail: (seconds, best worst-case infidelity) of the search written by hand.
    """
    figure = style.sheet(3.1)
    left, right = figure.subplots(1, 2)
    ways = list(dict.fromkeys(way for row in engine.values() for way in row))
    others = [way for way in ways if way != "engine"]
    pen = {"engine": style.strokes(["shaped"], theme)["shaped"], **style.strokes(others, theme)}
    _engine_panel(left, engine, ways, pen)
    reached = [(v["shaper_s"], float(k)) for k, v in reach.items() if v["shaper_s"] is not None]
    right.step(*zip(*trail, strict=True), where="post", zorder=3, **pen["numpy"].line)
    if reached:
        right.step(
            *zip(*sorted(reached, key=lambda point: -point[1]), strict=True),
            where="post",
            marker=pen["engine"].marker,
            markersize=4,
            zorder=4,
            **pen["engine"].line,
        )
    right.set_xscale("log")
    right.xaxis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0)))
    right.xaxis.set_major_formatter(lambda seconds, _: f"{seconds:g}")
    right.xaxis.set_minor_formatter(NullFormatter())
    seen = [best for _, best in trail] + [goal for _, goal in reached]
    style.log_infidelity_axis(right, seen)
    right.set_title("Waiting for quality")
    right.set_xlabel("Whole process (s)")
    right.set_ylabel("Worst infidelity over the box")
    handles = [
        Line2D([], [], label=_LABELS[way], marker=pen[way].marker, markersize=4.5, **pen[way].line)
        for way in ways
    ]
    style.legend_above(figure, handles)
    return figure


def _engine_panel(ax, engine: Mapping, ways: list[str], pen: Mapping) -> None:
    """Sizes down the side, time along: one marker a way."""
    sizes = list(engine)[:_MOST_SIZES]
    for way in ways:
        rows = [k for k, size in enumerate(sizes) if way in engine[size]]
        stroke = pen[way]
        ax.plot(
            [engine[sizes[k]][way]["ns"] for k in rows],
            rows,
            color=stroke.color,
            marker=stroke.marker,
            markersize=5.5,
            linestyle="none",
            zorder=3,
        )
    ax.set_xscale("log")
    ax.xaxis.set_major_locator(LogLocator(numticks=6))
    ax.xaxis.set_major_formatter(style.decade)
    ax.xaxis.set_minor_formatter(NullFormatter())
    ax.grid(axis="both", which="major")
    ax.set_axisbelow(True)
    ax.set_yticks(range(len(sizes)), [size.replace("x", " × ") for size in sizes])
    ax.set_ylim(len(sizes) - 0.5, -0.5)
    ax.set_title("Cost and gradient, one core")
    ax.set_xlabel("ns per slice and grid point")
    ax.set_ylabel("Slices × grid points")
