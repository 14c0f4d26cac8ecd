"""The tables behind the report's figures, and the figures drawn from them."""

from __future__ import annotations

import re
from collections.abc import Callable

import numpy as np

from shaper import figures
from shaper.evidence import tables
from shaper.job import Job
from shaper.pulse import Table, Waveform
from shaper.report import Picture
from shaper.rotation import bloch_matrix
from shaper.units import MHZ, NS
from shaper.wiring import arriving
from shaper.workflow.compare import Comparison, cuts, maps, worth_showing

START_STATES = {
    "|+⟩": (1.0, 0.0, 0.0),
    "|0⟩": (0.0, 0.0, 1.0),
    "|1⟩": (0.0, 0.0, -1.0),
    "|+i⟩": (0.0, 1.0, 0.0),
}
_MOST_STATES = 2  # more paths on one disc cannot be told apart
_SPECTRUM_POINTS = 1201
_SPECTRUM_REACH = 12  # Rabi frequencies to either side


def figure_tables(waveform: Waveform, comparison: Comparison) -> dict:
    """All tables that the report's figures are drawn from.

    Returns:
        By figure: ``waveform``, ``cuts``, ``map``, ``spectrum``, ``discs`` (of two levels), and
        ``history``, ``duration`` and ``budget`` where the file holds them, each as
        ``shaper.figures`` takes it.
    """
    job, pulses = comparison.job, comparison.pulses
    first, *others = pulses
    both = {name: pulses[name] for name in [first, *(n for n in others if n == "sandwich")]}
    # of many pulses the ones worth a picture, in the file's order: it decides on their looks
    shown = [name for name in pulses if name in worth_showing(comparison)]
    plane = maps(comparison, shown)
    lines = cuts(comparison)
    lines["pulses"] = {name: lines["pulses"][name] for name in shown}
    frequency = np.linspace(-1, 1, _SPECTRUM_POINTS) * _SPECTRUM_REACH * job.rabi_max
    starts = dict(list(start_states(job).items())[:_MOST_STATES])
    arrived = {name: arriving(job, pulse) for name, pulse in both.items()}
    found = {
        "waveform": {name: tables.waveform_table(pulse) for name, pulse in both.items()},
        "cuts": lines,
        "map": plane,
        "spectrum": tables.spectrum_table(both, frequency),
        "discs": None
        if job.anharmonicity
        else tables.path_table(arrived, starts, 0.0, job.detuning),
        "history": history_table(waveform),
        "duration": duration_table(waveform),
        "budget": budget_table(waveform),
    }
    return {name: table for name, table in found.items() if table is not None}


def start_states(job: Job) -> dict[str, tuple[float, ...]]:
    """Bloch vectors to follow, by label; the one that the target speaks of comes first."""
    if job.target.kind != "state":
        return START_STATES
    start = bloch_matrix(job.target.quaternion).T @ job.target.free_axis
    return {"from_state": tuple(map(float, start)), **START_STATES}


def history_table(waveform: Waveform) -> dict | None:
    """Infidelity by start and iteration, if the file holds such a table with any number."""
    for name, table in waveform.history.items():
        if _is_history(name, table) and np.any(np.asarray(table.values) > 0):
            found = {"infidelity": np.asarray(table.values, dtype=float)}
            stage = waveform.history.get("stage")
            return found if stage is None else found | {"stage": np.asarray(stage.values)}
    return None


def _is_history(name: str, table: Table) -> bool:
    return tuple(table.axes) == ("start", "iteration") and ("infidelity" in name or name == "cost")


def duration_table(waveform: Waveform) -> dict | None:
    """Best infidelity against duration, if the shortest one was looked for."""
    duration, best = (waveform.history.get(k) for k in ("duration_s", "best_infidelity"))
    if duration is None or best is None or np.shape(duration.values) != np.shape(best.values):
        return None
    return {
        "duration_ns": np.asarray(duration.values, dtype=float) / NS,
        "infidelity": np.asarray(best.values, dtype=float),
    }


def budget_table(waveform: Waveform) -> dict | None:
    """The budget that ``verify`` stored, as ``figures.budget_figure`` takes it; None: not there.

    Rows and columns are named in the table's own description.
    """
    table, together = (waveform.evidence.get(k) for k in ("budget", "budget_together"))
    named = table and re.search(r"pulses: (.*); sources: (.*)$", table.long_name)
    if not named or together is None:
        return None
    pulses, sources = (part.split(", ") for part in named.groups())
    values = np.asarray(table.values, dtype=float)
    if values.shape != (len(pulses), len(sources)):
        return None
    asked = [k for k in range(len(sources)) if not np.all(np.isnan(values[:, k]))]
    return {
        "source": [*(sources[k] for k in asked), "all together"],
        "pulses": {
            name: [*row[asked], whole]
            for name, row, whole in zip(pulses, values, together.values, strict=True)
        },
    }


def pictures(found: dict, job: Job, shortest: float) -> list[Picture]:
    """The figures of the report, each for light and dark paper.

    Args:
        found: ``figure_tables``.
        job: bound and tolerance are drawn into them.
        shortest: s, possible or known duration for the target.
    """
    measure = job.target.measure
    box = {
        "amplitude_tolerance": job.amplitude_tolerance,
        "detuning_tolerance_MHz": job.detuning_tolerance / MHZ,
        "measure": measure,
    }
    both, shown = " and ".join(found["waveform"]), ", ".join(found["map"]["infidelity"])
    edge = found["spectrum"]["frequency_MHz"][-1]
    second = job.anharmonicity / MHZ if job.anharmonicity else None
    marks = {"second transition": second} if second and abs(second) < edge else {}
    drawn = [
        _drawn(
            "Waveform",
            "I, Q, amplitude and phase, step by step as the DAC holds them; dotted: the bound.",
            f"Drive against time of {both}, within the bound throughout.",
            lambda theme: figures.waveform_figure(
                found["waveform"], rabi_max_MHz=job.rabi_max / MHZ, bound=job.bound, theme=theme
            ),
        ),
        _drawn(
            "Along each error",
            "Infidelity when only one error is on; shaded: the tolerance of the job.",
            f"Infidelity against detuning and against amplitude error of {shown}; "
            "the worst case over the tolerance is in the table above.",
            lambda theme: figures.cuts_figure(found["cuts"], **box, theme=theme),
        ),
        _drawn(
            "Over both errors",
            "Dark is good. Lines at 1e-3 (solid), 1e-4 (dashed), 1e-5 (dotted).",
            f"Maps of the infidelity over amplitude error and detuning of {shown}.",
            lambda theme: figures.map_figure(found["map"], **box, theme=theme),
        ),
        _drawn(
            "Spectrum",
            "Energy of the steps against frequency, relative to the largest value shown.",
            f"Energy density of {both} around the carrier.",
            lambda theme: figures.spectrum_figure(found["spectrum"], marks_MHz=marks, theme=theme),
        ),
    ]
    if "history" in found:
        drawn.append(
            _drawn(
                "Search",
                "What every start had reached. A later stage measures harder, nearer to the worst "
                "case, so its lines may lie higher.",
                "How the infidelity of each start fell during the search.",
                lambda theme: figures.history_figure(
                    found["history"],
                    stop_infidelity=job.stop_infidelity,
                    measure=measure,
                    theme=theme,
                ),
            )
        )
    if "duration" in found:
        drawn.append(
            _drawn(
                "Shortest duration",
                "Best infidelity found at each duration that was tried; hatched: no pulse can be "
                "that short.",
                "How the best infidelity falls with the duration.",
                lambda theme: figures.duration_figure(
                    found["duration"],
                    limit_ns=shortest / NS,
                    stop_infidelity=job.stop_infidelity,
                    measure=measure,
                    theme=theme,
                ),
            )
        )
    if "budget" in found:
        drawn.append(
            _drawn(
                "Error budget",
                "Infidelity by each effect alone, and by all at once at the worst point of the "
                "tolerance box.",
                f"Error budget of {' and '.join(found['budget']['pulses'])}.",
                lambda theme: figures.budget_figure(found["budget"], measure=measure, theme=theme),
            )
        )
    if "discs" in found:
        drawn.append(
            _drawn(
                "Way of the Bloch vector",
                "Lambert's equal-area discs, one a hemisphere, without errors.",
                f"Bloch vectors during {both}, two start states each.",
                lambda theme: figures.disc_figure(found["discs"], theme=theme),
                paper_only=True,
            )
        )
    return drawn


def _drawn(
    heading: str,
    caption: str,
    alternative: str,
    draw: Callable[[figures.Theme], object],
    paper_only: bool = False,
) -> Picture:
    light, dark = (
        figures.encoded(draw(theme), ".svg", theme) for theme in (figures.LIGHT, figures.DARK)
    )
    return Picture(heading, caption, alternative, light, dark, paper_only)
