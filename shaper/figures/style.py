"""The one visual language of every figure: colors, line styles, markers, units, file output.

Ink on paper: no frames, thin left and bottom axes, headings at the left. What the eye must tell
apart differs in color, lightness, line style and marker at once, so that it survives a
black-and-white print and color-blind eyes. Figures take tables and draw them; nothing global is
set, and no window system is asked for.
"""

from __future__ import annotations

import contextlib
import functools
import math
import os
import re
import tempfile
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from io import BytesIO
from pathlib import Path

import matplotlib
import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import LinearSegmentedColormap
from matplotlib.figure import Figure
from matplotlib.ticker import LogLocator, NullFormatter

from shaper.errors import InputError

SUFFIXES = (".svg", ".pdf", ".png")
PAGE_WIDTH = 7.2  # inches: the text width of a page
MEASURE = "Average gate infidelity"  # what an infidelity is, unless the target says otherwise
_DPI = {".png": 200, ".svg": 120, ".pdf": 200}  # of a vector file: only of its maps, smooth anyway
_LEGEND_HANDLE = 0.65  # inches a legend entry takes beside its text
_LEGEND_LETTER = 0.072  # inches a letter


@dataclass(frozen=True)
class Theme:
    """Colors on paper of one kind.

    Attributes:
        paper, ink, quiet, rule: background, text and axes, second-rank text, grid lines.
        series: the shaped pulse, the sandwich, then every other pulse in turn.
        scale: infidelity, from small (good) to large.
        mark: outline on top of the infidelity scale.
    """

    name: str
    paper: str
    ink: str
    quiet: str
    rule: str
    series: tuple[str, ...]
    scale: tuple[str, ...]
    mark: str


LIGHT = Theme(
    name="light",
    paper="#ffffff",
    ink="#1c2230",
    quiet="#59606e",
    rule="#dde1e7",
    series=("#0d4f9e", "#bc5208", "#00756a", "#8a2a7b", "#7a6a00", "#5b6470"),
    scale=("#14224d", "#2a5d8f", "#5f9fa8", "#b9cf9f", "#f5ecc6"),
    mark="#bc5208",
)
DARK = Theme(
    name="dark",
    paper="#14181f",
    ink="#e8ebf0",
    quiet="#a4acb9",
    rule="#323945",
    series=("#79b4ff", "#ff9d57", "#4fd0bd", "#e592d6", "#d9c64a", "#aab3c0"),
    scale=("#0b1330", "#24507f", "#5795a3", "#b4cb9b", "#f5ecc6"),
    mark="#ff9d57",
)

_DASHES = ("-", (0, (5, 2)), (0, (7, 2, 1.5, 2)), (0, (1.5, 1.5)), (0, (9, 3)), (0, (3, 1, 1, 1)))
_MARKERS = ("o", "s", "^", "D", "v", "P")
_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
_ALWAYS = ("shaped", "sandwich")  # these two look the same in every figure


@dataclass(frozen=True)
class Stroke:
    """How one pulse is drawn, everywhere in a figure."""

    color: str
    dash: str | tuple
    marker: str
    width: float

    @property
    def line(self) -> dict:
        """Keywords for a line without markers."""
        return {"color": self.color, "linestyle": self.dash, "linewidth": self.width}


def strokes(names: Sequence[str], theme: Theme = LIGHT) -> dict[str, Stroke]:
    """One stroke for each pulse; "shaped" and "sandwich" never change theirs."""
    others = [name for name in names if name not in _ALWAYS]
    place = {name: k for k, name in enumerate(_ALWAYS)}
    place |= {name: k + len(_ALWAYS) for k, name in enumerate(others)}
    chosen = {}
    for name in names:
        k = place[name]
        turn = k // len(theme.series)  # second time round: same color, another dash and marker
        chosen[name] = Stroke(
            color=theme.series[k % len(theme.series)],
            dash=_DASHES[(k + turn) % len(_DASHES)],
            marker=_MARKERS[(k + turn) % len(_MARKERS)],
            width=1.7 if name == "shaped" else 1.3,
        )
    return chosen


def infidelity_scale(theme: Theme) -> LinearSegmentedColormap:
    """Small is dark, large is light, lightness rising all the way."""
    return LinearSegmentedColormap.from_list("shaper-infidelity", list(theme.scale))


def _settings(theme: Theme) -> dict:
    return {
        "font.family": "DejaVu Sans",
        "font.size": 8.5,
        "axes.titlesize": 9.0,
        "axes.titleweight": "bold",
        "axes.titlelocation": "left",
        "axes.titlecolor": theme.ink,
        "axes.labelsize": 8.5,
        "axes.labelcolor": theme.ink,
        "axes.edgecolor": theme.quiet,
        "axes.facecolor": theme.paper,
        "axes.linewidth": 0.7,
        "axes.spines.top": False,
        "axes.spines.right": False,
        "axes.unicode_minus": True,
        "axes.grid": False,
        "figure.facecolor": theme.paper,
        "savefig.facecolor": theme.paper,
        "text.color": theme.ink,
        "xtick.color": theme.quiet,
        "ytick.color": theme.quiet,
        "xtick.labelcolor": theme.ink,
        "ytick.labelcolor": theme.ink,
        "xtick.labelsize": 8.0,
        "ytick.labelsize": 8.0,
        "xtick.direction": "out",
        "ytick.direction": "out",
        "grid.color": theme.rule,
        "grid.linewidth": 0.6,
        "legend.frameon": False,
        "legend.fontsize": 8.5,
        "legend.handlelength": 2.6,
        "lines.solid_capstyle": "butt",
        "hatch.linewidth": 0.5,
        "svg.fonttype": "path",
        "svg.hashsalt": "shaper",
        "pdf.fonttype": 42,
        "path.simplify": True,
    }


def drawn(make: Callable[..., Figure]) -> Callable[..., Figure]:
    """Run a figure function under the style of its ``theme``, leaving global settings alone."""

    @functools.wraps(make)
    def styled(*args, theme: Theme = LIGHT, **kwargs) -> Figure:
        with _styled(theme):
            figure = make(*args, theme=theme, **kwargs)
            FigureCanvasAgg(figure)
            figure.draw_without_rendering()  # fixes text and layout while the style holds
            figure.set_layout_engine("none")  # laid out once: every saving gives the same bytes
            return figure

    return styled


def sheet(height: float, width: float = PAGE_WIDTH) -> Figure:
    """An empty figure, sizes in inches."""
    return Figure(figsize=(width, height), layout="constrained")


def legend_above(figure: Figure, handles: list, title: str = "") -> None:
    """Heading and one legend for the whole figure, in as many columns as fit above the panels."""
    longest = max(len(handle.get_label()) for handle in handles)
    columns = int((figure.get_figwidth() - 0.2) / (_LEGEND_HANDLE + _LEGEND_LETTER * longest))
    figure.legend(
        handles=handles,
        loc="outside upper left",
        ncols=max(1, min(columns, len(handles))),
        title=title or None,
        alignment="left",
        title_fontproperties={"weight": "bold", "size": 9.5},
        borderaxespad=0.2,
    )


def folded(name: str, width: int) -> str:
    """A long name on several lines, broken at its hyphens."""
    lines = [""]
    for part in re.findall(r"[^-]+-?", name):
        if lines[-1] and len(lines[-1] + part) > width:
            lines.append("")
        lines[-1] += part
    return "\n".join(lines)


def scientific(value: float) -> str:
    """Two digits and a power of ten, for labels.

    >>> scientific(0.000236)
    '2.4×10⁻⁴'
    """
    digits, exponent = f"{value:.1e}".split("e")
    return f"{digits}×10" + str(int(exponent)).translate(_SUPERSCRIPT)


def scaled(largest: float, unit: str) -> tuple[float, str]:
    """A factor and a unit that bring ``largest`` between 1 and 1000.

    Args:
        largest: largest magnitude shown, in ``unit``.
        unit: "ns" or "MHz".
    Returns:
        ``(factor, shown)``: multiply the numbers by ``factor`` and label them ``shown``.

    >>> scaled(0.005, "MHz")
    (1000.0, 'kHz')
    >>> scaled(20_000, "ns")
    (0.001, 'µs')
    """
    ladder = {"ns": ("ns", "µs", "ms", "s"), "MHz": ("GHz", "MHz", "kHz", "Hz")}[unit]
    place = ladder.index(unit)
    factor = 1.0
    down = unit == "MHz"  # small frequencies need a smaller unit, long times a larger one
    while down and 0 < largest * factor < 1 and place < len(ladder) - 1:
        factor, place = factor * 1e3, place + 1
    while down and largest * factor >= 1e3 and place > 0:
        factor, place = factor / 1e3, place - 1
    while not down and largest * factor >= 1e4 and place < len(ladder) - 1:
        factor, place = factor / 1e3, place + 1
    return factor, ladder[place]


def log_infidelity_axis(
    ax: Axes, values: Sequence[float], axis: str = "y", lowest_shown: float = 1e-32
) -> tuple[float, float]:
    """A decade axis that holds all ``values`` above zero: whole decades, few labels.

    Args:
        values: [k] what is drawn; zero, nan and what lies below ``lowest_shown`` do not count.
    Returns:
        Ends of the axis.
    """
    seen = np.asarray(values, dtype=float).ravel()
    seen = np.clip(seen[seen > 0], lowest_shown, 1.0)
    low, high = (seen.min(), seen.max()) if len(seen) else (1e-6, 1.0)
    top = min(10.0 ** np.ceil(np.log10(high)), 1.0)
    bottom = min(10.0 ** np.floor(np.log10(low)), top / 10)
    getattr(ax, f"set_{axis}scale")("log")
    getattr(ax, f"set_{axis}lim")(bottom, top)
    side = getattr(ax, f"{axis}axis")
    side.set_major_locator(LogLocator(numticks=7))
    side.set_minor_locator(LogLocator(subs=(1.0,), numticks=99))  # every decade, unlabeled
    side.set_major_formatter(decade)
    side.set_minor_formatter(NullFormatter())
    ax.grid(axis=axis, which="major")
    ax.set_axisbelow(True)
    return bottom, top


def decade(value: float, _position: int | None = None) -> str:
    """A whole power of ten as a tick label: 1e-4 as 10⁻⁴. Plain characters: no math to set."""
    return "10" + str(round(math.log10(value))).translate(_SUPERSCRIPT)


def positive(values: Sequence[float]) -> np.ndarray:
    """Values for a log axis: zero and below become gaps."""
    values = np.asarray(values, dtype=float)
    return np.where(values > 0, values, np.nan)


def encoded(figure: Figure, suffix: str, theme: Theme = LIGHT) -> bytes:
    """The figure as the bytes of an SVG, PDF or PNG file; the same bytes every time.

    Raises:
        InputError: if the suffix is none of ``SUFFIXES``.
    """
    if suffix not in SUFFIXES:
        raise InputError(
            f"figure: expected a name that ends in {', '.join(SUFFIXES)}, "
            f"got {suffix or 'no suffix'}"
        )
    undated = {".svg": {"Date": None}, ".pdf": {"CreationDate": None}, ".png": {}}[suffix]
    out = BytesIO()
    with _styled(theme):
        figure.savefig(out, format=suffix[1:], dpi=_DPI[suffix], metadata=undated)
    return out.getvalue()


def save(figure: Figure, path: str | os.PathLike, theme: Theme = LIGHT) -> None:
    """Write the figure; the kind of file follows from the suffix. The old file stays whole.

    Raises:
        InputError: if the suffix is unknown or the folder cannot be written.
    """
    path = Path(path)
    content = encoded(figure, path.suffix.lower(), theme)
    try:
        handle, temporary = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.")
        try:
            with os.fdopen(handle, "wb") as file:
                file.write(content)
                file.flush()
                os.fsync(file.fileno())
            os.chmod(temporary, 0o666 & ~_umask())
            os.replace(temporary, path)
        except BaseException:
            with contextlib.suppress(OSError):
                os.unlink(temporary)
            raise
    except OSError as error:
        raise InputError(f"{path}: cannot write the figure: {error.strerror}") from error


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


@contextlib.contextmanager
def _styled(theme: Theme):
    with matplotlib.rc_context():
        matplotlib.rcdefaults()
        matplotlib.rcParams.update(_settings(theme))
        yield
