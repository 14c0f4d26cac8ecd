"""The second job: the pulses of a waveform file against each other, as the DAC plays them."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from shaper.composite import limit
from shaper.composite.compose import library_pulses
from shaper.evidence.levels import level_infidelity
from shaper.evidence.row import Row, measure
from shaper.evidence.tables import cut_table, map_table, plain, waveform_table
from shaper.evidence.verdict import Change, Verdict, judge, sentence
from shaper.job import Job, parse_job
from shaper.job.record import Group
from shaper.pulse import Pulse, Waveform
from shaper.units import MHZ, NS, US
from shaper.wiring import arriving
from shaper.workflow.check import frame_update

_CUT_POINTS = 121
_MAP_POINTS = 81
_LEVEL_MAP_POINTS = 31  # levels cost a hundred times what the qubit does
_MOST_SHOWN = 6  # waveforms, cuts or maps in one picture: beyond that it becomes a wall
_BEYOND = 2.0  # cuts reach this many tolerances to either side
_CUT_AMPLITUDE = 0.1  # relative; how far the cut reaches where the job names no tolerance
_CUT_DETUNING = 0.1  # of the largest Rabi rate, likewise


@dataclass(frozen=True)
class Comparison:
    """All pulses on one grid.

    Attributes:
        job: what was asked.
        shortest: s. Time-optimal (circle) or best known (box) duration for this target, of the
            addressed qubit alone.
        pulses: by name, in the order of the rows: those of the file, then those of the library.
        rows: one a pulse.
        verdict: who wins, and where the answer changes.
        frame_update: "enough", "instead" or None, see ``workflow.check.frame_update``.
    """

    job: Job
    shortest: float
    pulses: dict[str, Pulse]
    rows: tuple[Row, ...]
    verdict: Verdict
    frame_update: str | None


def compare(
    waveform: Waveform, against: Sequence[str] = (), folder: str | Path = "."
) -> Comparison:
    """Measure every pulse of a waveform file anew, on one grid, from its codes.

    The figures stored in the file are not trusted: all are computed here, the guaranteed bound
    too.

    Args:
        waveform: as ``shaper.load_waveform`` gives it.
        against: names of the composite library, or "all" of it. A pulse that the file holds
            already, by name or code by code, is not taken twice.
        folder: where the files that the job names lie.
    Raises:
        InputError: if the job that the file carries is not valid, or the library has no such name.
    """
    job = parse_job(waveform.job_text, "job in the file", folder)
    shortest = limit(job.target, job.bound) / job.rabi_max
    pulses = dict(waveform.pulses)
    sequences = {}
    wanted = None if "all" in against else list(against)
    for name, found in (library_pulses(job, wanted) if against else {}).items():
        same = [known for known, pulse in pulses.items() if _same(pulse, found.pulse)]
        for known in same:
            sequences.setdefault(known, found.sequence)
        if not same and name not in pulses:
            pulses[name], sequences[name] = found.pulse, found.sequence
    rows = tuple(
        measure(name, pulse, job, shortest, sequences.get(name)) for name, pulse in pulses.items()
    )
    return Comparison(job, shortest, pulses, rows, judge(rows, pulses, job), frame_update(job))


def _same(a: Pulse, b: Pulse) -> bool:
    """Whether the DAC would play the same."""
    return a.full_scale == b.full_scale and np.array_equal(a.codes, b.codes)


def cuts(comparison: Comparison, group: Group | None = None) -> dict:
    """Infidelity against detuning and against amplitude, see ``evidence.tables.cut_table``.

    The cuts reach twice the tolerance; where there is none, 10 % in amplitude and 10 % of the
    largest Rabi rate in detuning.

    Args:
        group: whose; default: the addressed qubit's. Detunings count from its own.
    """
    job = comparison.job if group is None else comparison.job.for_group(group)
    side = np.linspace(-1, 1, _CUT_POINTS)
    amplitude, detuning = _reach(job)
    pulses = _at_qubit(comparison, comparison.pulses)
    return cut_table(
        pulses, job.target, amplitude * side, detuning * side, job.detuning, _model(job)
    )


def _model(job: Job):
    """The job's levels where it has them; None for two."""
    if job.anharmonicity is None:
        return None
    return lambda drive, durations, eps, delta: level_infidelity(drive, durations, job, eps, delta)


def _at_qubit(comparison: Comparison, names: Sequence[str]) -> dict:
    """What arrives at the qubit of these pulses, for the tables."""
    return {name: arriving(comparison.job, comparison.pulses[name]) for name in names}


def _reach(job: Job) -> tuple[float, float]:
    """How far cuts and maps go, in amplitude (relative) and detuning (rad/s)."""
    return (
        _BEYOND * job.amplitude_tolerance or _CUT_AMPLITUDE,
        _BEYOND * job.detuning_tolerance or _CUT_DETUNING * job.rabi_max,
    )


def maps(
    comparison: Comparison, names: Sequence[str] | None = None, group: Group | None = None
) -> dict:
    """Infidelity over both errors, see ``evidence.tables.map_table``; reach as of the cuts.

    Args:
        names: which pulses; default: those ``worth_showing``.
        group: whose; default: the addressed qubit's.
    """
    job = comparison.job if group is None else comparison.job.for_group(group)
    side = np.linspace(-1, 1, _MAP_POINTS if job.anharmonicity is None else _LEVEL_MAP_POINTS)
    amplitude, detuning = _reach(job)
    shown = _at_qubit(comparison, names or worth_showing(comparison))
    return map_table(
        shown, job.target, amplitude * side, detuning * side, job.detuning, _model(job)
    )


def worth_showing(comparison: Comparison) -> list[str]:
    """Shaped pulses, the verdict's two, the baseline, then the most robust others; six at most."""
    rows, verdict = comparison.rows, comparison.verdict
    chosen = [row.name for row in rows if row.origin == "optimized"][:2]
    chosen += [row.name for row in (verdict.winner, verdict.rival) if row is not None]
    chosen += [row.name for row in rows if row.name in ("sandwich", "plain")][:1]
    chosen += [row.name for row in sorted(rows, key=lambda row: row.worst_known)]
    return list(dict.fromkeys(chosen))[:_MOST_SHOWN]


def as_json(comparison: Comparison) -> dict:
    """The comparison as plain data, unit in every key; nan as None.

    ``other_qubits`` has what the top level says of the addressed one.
    """
    job = comparison.job
    return plain(
        {
            "title": job.title,
            "target": job.target_name,
            "bound": job.bound,
            "rabi_max_MHz": job.rabi_max / MHZ,
            "shortest_ns": comparison.shortest / NS,
            "tolerance": _tolerance_json(job.groups[0]),
            "other_qubits": [
                {
                    "name": group.name,
                    "target": group.target_name,
                    "detuning_MHz": group.detuning / MHZ,
                    "tolerance": _tolerance_json(group),
                    "weight": group.weight,
                    "cuts": cuts(comparison, group),
                }
                for group in job.others
            ],
            "pulses": [_row_json(row) for row in comparison.rows],
            "frame_update": comparison.frame_update,
            "verdict": verdict_json(comparison.verdict, job),
            "cuts": cuts(comparison),
        }
    )


def _tolerance_json(group: Group) -> dict:
    return {
        "amplitude": group.amplitude_tolerance,
        "detuning_MHz": group.detuning_tolerance / MHZ,
    }


def _row_json(row: Row) -> dict:
    windows = {}
    for k, threshold in enumerate(("1e-4", "1e-3")):
        windows[f"amplitude_window_{threshold}"] = row.amplitude_windows[k]
        windows[f"detuning_window_{threshold}_MHz"] = row.detuning_windows[k] / MHZ
    return {
        "name": row.name,
        "origin": row.origin,
        "source": row.source,
        "duration_ns": row.duration / NS,
        "duration_over_shortest": row.over_limit,
        "peak_MHz": row.peak / MHZ,
        "rms_MHz": row.rms / MHZ,
        "energy_rad2_per_us": row.energy * US,
        "infidelity": row.nominal,
        "infidelity_mean": row.mean,
        "infidelity_worst": row.worst,
        "infidelity_guaranteed": row.guaranteed,
        "qubits": [
            {
                "name": group.name,
                "infidelity": group.nominal,
                "infidelity_mean": group.mean,
                "infidelity_worst": group.worst,
                "infidelity_guaranteed": group.guaranteed,
            }
            for group in row.groups
        ],
        "infidelity_worst_on_paper": row.ideal_worst,
        "infidelity_on_three_levels": row.levels and row.levels.nominal,
        "infidelity_worst_on_three_levels": row.levels and row.levels.worst,
        "leakage": row.levels and row.levels.leakage,
        "seepage": row.levels and row.levels.seepage,
        "infidelity_of_idling": row.coherence,
        "infidelity_worst_with_decay": row.total,
        **windows,
        "amplitude_order": row.amplitude_order.order,
        "amplitude_coefficient": row.amplitude_order.coefficient,
        "detuning_order": row.detuning_order.order,
        "detuning_coefficient": row.detuning_order.coefficient,
    }


def verdict_json(verdict: Verdict, job: Job) -> dict:
    """The verdict as plain data, its sentence with it."""

    def change(found: Change | None, unit: float = 1.0) -> dict | None:
        return found and {"at": found.at / unit, "winner": found.winner}

    return {
        "sentence": sentence(verdict, job),
        "winner": verdict.winner.name,
        "rival": verdict.rival and verdict.rival.name,
        "factor": verdict.factor,
        "below_t2_us": change(verdict.shorter_t2, US),
        "above_t2_us": change(verdict.longer_t2, US),
        "below_box": change(verdict.smaller_box),
        "above_box": change(verdict.larger_box),
    }


def draw(comparison: Comparison, path: str | Path) -> list[Path]:
    """Waveforms and cuts as a picture; the file's suffix decides the format.

    Returns:
        The files written: one more, of cuts, for each further qubit, its name added to the file's.
    """
    from shaper.figures import cuts_figure, save

    save(picture(comparison), path)
    written = [Path(path)]
    names = worth_showing(comparison)
    for group in comparison.job.others:
        table = cuts(comparison, group)
        table["pulses"] = {name: table["pulses"][name] for name in names}
        written.append(_beside(path, group))
        save(cuts_figure(table, **_box_and_measure(group, comparison.job)), written[-1])
    return written


def picture(comparison: Comparison):
    """Waveforms and cuts as a matplotlib figure.

    Six pulses at most, the shaped ones and the best others.
    """
    from shaper.figures import comparison_figure

    job = comparison.job
    names = list(comparison.pulses)
    if len(names) > _MOST_SHOWN:
        names = worth_showing(comparison)
    table = cuts(comparison)
    table["pulses"] = {name: table["pulses"][name] for name in names}
    return comparison_figure(
        {name: waveform_table(comparison.pulses[name]) for name in names},
        table,
        rabi_max_MHz=job.rabi_max / MHZ,
        **_box_and_measure(job.groups[0], job),
        title=job.title,
    )


def draw_maps(comparison: Comparison, path: str | Path) -> list[Path]:
    """The maps side by side on one scale as a picture; files as in ``draw``, one a qubit."""
    from shaper.figures import map_figure, save

    written = []
    for group in comparison.job.groups:
        written.append(Path(path) if not written else _beside(path, group))
        save(
            map_figure(maps(comparison, group=group), **_box_and_measure(group, comparison.job)),
            written[-1],
        )
    return written


def _beside(path: str | Path, group: Group) -> Path:
    """The file for a further qubit: its name, as far as a file's name can hold it, added."""
    path = Path(path)
    return path.with_name(
        f"{path.stem}-{re.sub(r'[^A-Za-z0-9_.-]+', '-', group.name)}{path.suffix}"
    )


def _box_and_measure(group: Group, job: Job) -> dict:
    """Keywords for the figures; of several qubits the measure says whose it is."""
    return {
        "amplitude_tolerance": group.amplitude_tolerance,
        "detuning_tolerance_MHz": group.detuning_tolerance / MHZ,
        "measure": group.target.measure + (f", {group.name}" if job.others else ""),
    }
