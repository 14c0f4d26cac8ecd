"""The second job: the pulses of a waveform file against each other, as the DAC plays them."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from shaper.composite import limit
from shaper.evidence.score import score
from shaper.evidence.tables import cut_table, plain, waveform_table
from shaper.job import Job, parse_job
from shaper.pulse import Pulse, Waveform
from shaper.units import MHZ, NS, US

_CUT_POINTS = 121
_BEYOND = 2.0  # cuts reach this many tolerances to either side
_CUT_AMPLITUDE = 0.1  # relative; how far the cut reaches where the job names no tolerance
_CUT_DETUNING = 0.1  # of the largest Rabi rate, likewise


@dataclass(frozen=True)
class Row:
    """One pulse of the comparison; every figure from its integer codes.

    Attributes:
        name: as in the file.
        origin: "optimized" or "composite".
        source: citation, or "".
        duration: s.
        over_limit: duration over the shortest possible (circle) or known (box) for this target;
            nan where the target needs no pulse.
        peak: largest amplitude, rad/s.
        rms: of the amplitude over the duration, rad/s.
        energy: integral of the squared amplitude, rad^2/s.
        nominal: infidelity without errors.
        mean: infidelity over the tolerance box.
        worst: largest infidelity on the grid over the tolerance box.
        guaranteed: proved upper bound of it over the whole box, None where none was proved.
    """

    name: str
    origin: str
    source: str
    duration: float
    over_limit: float
    peak: float
    rms: float
    energy: float
    nominal: float
    mean: float
    worst: float
    guaranteed: float | None


@dataclass(frozen=True)
class Comparison:
    """All pulses on one grid.

    Attributes:
        job: what was asked.
        shortest: s. Time-optimal (circle) or best known (box) duration for this target.
        pulses: by name, in the order of the rows.
        rows: one a pulse.
    """

    job: Job
    shortest: float
    pulses: dict[str, Pulse]
    rows: tuple[Row, ...]


def compare(waveform: Waveform) -> Comparison:
    """Score every pulse of a waveform file anew, on one grid, from its codes.

    The figures stored in the file are not trusted: all are computed here. Only the guaranteed
    bound is taken over, since its proof takes longer than a comparison may.

    Args:
        waveform: as ``shaper.load_waveform`` gives it.
    Raises:
        InputError: if the job that the file carries is not valid.
    """
    job = parse_job(waveform.job_text, "job in the file")
    shortest = limit(job.target, job.bound) / job.rabi_max
    rows = tuple(
        _row(name, pulse, job, shortest, waveform.scores[name].guaranteed)
        for name, pulse in waveform.pulses.items()
    )
    return Comparison(job, shortest, dict(waveform.pulses), rows)


def _row(name: str, pulse: Pulse, job: Job, shortest: float, guaranteed: float | None) -> Row:
    result = score(pulse, job)
    return Row(
        name=name,
        origin=pulse.origin,
        source=pulse.source,
        duration=pulse.duration,
        over_limit=pulse.duration / shortest if shortest > 0 else float("nan"),
        peak=pulse.peak,
        rms=pulse.rms,
        energy=pulse.energy,
        nominal=result.dac,
        mean=result.dac_mean,
        worst=result.dac_worst,
        guaranteed=guaranteed,
    )


def cuts(comparison: Comparison) -> dict:
    """Infidelity against detuning and against amplitude, see ``evidence.tables.cut_table``.

    The cuts reach twice the tolerance; where there is none, 10 % in amplitude and 10 % of the
    largest Rabi rate in detuning.
    """
    job = comparison.job
    side = np.linspace(-1, 1, _CUT_POINTS)
    amplitude = _BEYOND * job.amplitude_tolerance or _CUT_AMPLITUDE
    detuning = _BEYOND * job.detuning_tolerance or _CUT_DETUNING * job.rabi_max
    return cut_table(comparison.pulses, job.target, amplitude * side, detuning * side, job.detuning)


def as_json(comparison: Comparison) -> dict:
    """The comparison as plain data, unit in every key; nan as None."""
    job = comparison.job
    return plain(
        {
            "title": job.title,
            "target": job.target_name,
            "bound": job.bound,
            "rabi_max_MHz": job.rabi_max / MHZ,
            "shortest_ns": comparison.shortest / NS,
            "tolerance": {
                "amplitude": job.amplitude_tolerance,
                "detuning_MHz": job.detuning_tolerance / MHZ,
            },
            "pulses": [
                {
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
                }
                for row in comparison.rows
            ],
            "cuts": cuts(comparison),
        }
    )


def draw(comparison: Comparison, path: str | Path) -> None:
    """The comparison as a picture; the file's suffix decides the format."""
    from shaper.figures import comparison_figure, save

    job = comparison.job
    figure = comparison_figure(
        {name: waveform_table(pulse) for name, pulse in comparison.pulses.items()},
        cuts(comparison),
        rabi_max_MHz=job.rabi_max / MHZ,
        amplitude_tolerance=job.amplitude_tolerance,
        detuning_tolerance_MHz=job.detuning_tolerance / MHZ,
        title=job.title,
    )
    save(figure, path)
