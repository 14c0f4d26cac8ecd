"""The first job: from a job file to the waveform, with the sandwich beside it."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from shaper.composite.sandwich import sandwich
from shaper.composite.sequence import place
from shaper.job import Job, parse_job
from shaper.pulse import Score, Table, Waveform, make_pulse
from shaper.search import descent
from shaper.workflow.assemble import assemble

_LIBRARIES = ("jax", "optax", "numpy", "scipy", "h5py")


def optimize(
    job: Job,
    progress: descent.Progress | None = None,
    stop: Callable[[], bool] | None = None,
) -> Waveform:
    """Search for the job's waveform and set the analytic sandwich beside it.

    Args:
        job: as ``read_job`` gives it.
        progress: called as ``progress(stage, step, of, best infidelity)`` while it runs.
        stop: asked now and then; True ends the search with the best so far, status
            "interrupted".
    Returns:
        the record of a waveform file, with pulses "shaped" and "sandwich".
    """
    found = descent.search(job, progress, stop)
    shaped = make_pulse(
        found.drive,
        np.full(job.slices, job.samples_per_slice),
        full_scale=job.rabi_max,
        bits=job.dac_bits,
        bound=job.bound,
        sample_rate=job.sample_rate,
        origin="optimized",
    )
    pulses = {"shaped": shaped, "sandwich": place(sandwich(job.target, job.bound), job)}
    return assemble(
        job,
        pulses,
        found.status,
        _LIBRARIES,
        history=_history(found),
        history_attrs={
            "stages": " ".join(found.history),
            "best_start": found.best,
            "start_names": " ".join(found.names),
            "start_statuses": " ".join(found.statuses),
            "remedy": descent.STATUSES[found.status],
        },
    )


def reached(job: Job, score: Score) -> bool:
    """Whether a score meets the job's ``stop_infidelity``; True if the job names none."""
    found = score.worst if job.has_tolerance else score.nominal
    return job.stop_infidelity is None or found <= job.stop_infidelity


def _history(found: descent.Found) -> dict[str, Table]:
    """Infidelity against iteration for every start, the stages one after another."""
    legs = list(found.history.values())
    values = np.full((len(found.names), sum(leg.infidelity.shape[1] for leg in legs)), np.nan)
    stage, column = [], 0
    for number, leg in enumerate(legs):
        steps = leg.infidelity.shape[1]
        values[leg.starts, column : column + steps] = leg.infidelity
        stage += [number] * steps
        column += steps
    return {
        "iteration": Table(np.arange(column), ("iteration",), "1", "step of the search"),
        "infidelity": Table(
            values,
            ("start", "iteration"),
            "1",
            "what was lowered: a power mean of the infidelity over the stage's grid",
        ),
        "stage": Table(np.array(stage), ("iteration",), "1", "stage, see the attribute stages"),
    }


def draw(waveform: Waveform, path) -> None:
    """How the search went, as a picture; the file's suffix decides the format."""
    from shaper.figures import history_figure, save

    tables = {name: table.values for name, table in waveform.history.items()}
    goal = parse_job(waveform.job_text).stop_infidelity
    save(history_figure(tables, stop_infidelity=goal), path)
