"""The first job: from a job file to the waveform, with the sandwich beside it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from shaper.composite.limit import limit
from shaper.composite.sandwich import sandwich
from shaper.composite.sequence import place
from shaper.job import Job, parse_job
from shaper.physics.decay import coherence_limit
from shaper.pulse import Score, Table, Waveform
from shaper.search import descent
from shaper.search.checkpoint import Checkpoint
from shaper.search.duration import Tried, search_best, search_shortest
from shaper.units import NS
from shaper.wiring import for_search, play
from shaper.workflow.assemble import assemble

_LIBRARIES = ("jax", "optax", "numpy", "scipy", "h5py")


def optimize(
    job: Job,
    progress: descent.Progress | None = None,
    stop: Callable[[], bool] | None = None,
    checkpoint: Checkpoint | None = None,
) -> Waveform:
    """Search for the job's waveform and set the analytic sandwich beside it.

    Args:
        job: as ``read_job`` gives it. If its duration is to be found, the shortest one is.
        progress: called as ``progress(stage, step, of, best infidelity)`` while it runs.
        stop: asked now and then; True ends the search with the best so far, status
            "interrupted".
        checkpoint: where the search is kept, and taken up again; not for the shortest duration.
    Returns:
        the record of a waveform file, with pulses "shaped" and "sandwich".
    """
    baseline = place(sandwich(job.target, job.bound), job)
    curve = {}
    within = for_search(job)
    if job.open_duration:
        look = search_shortest if job.find_shortest else search_best
        tried = look(within, progress, stop)
        job, found = replace(tried.job, rabi_max=job.rabi_max), tried.found
        curve = _curve(tried)
        if stop is not None and stop():  # it may have converged, but not on the duration
            found = replace(found, status="interrupted")
    else:
        found = descent.search(within, progress, stop, checkpoint=checkpoint)
    samples = np.full(job.slices, job.samples_per_slice)
    shaped = play(job, found.drive, samples, "optimized", polished=True)
    pulses = {"shaped": shaped, "sandwich": baseline}
    return assemble(
        job,
        pulses,
        found.status,
        _LIBRARIES,
        on_levels=job.anharmonicity is not None,
        history=_history(found) | curve,
        history_attrs={
            "stages": " ".join(found.history),
            "best_start": found.best,
            "start_names": " ".join(found.names),
            "start_statuses": " ".join(found.statuses),
            "remedy": descent.STATUSES[found.status],
            "levels": 2 if job.anharmonicity is None else job.levels,
        },
    )


def reached(job: Job, score: Score) -> bool:
    """Whether a score meets the job's ``stop_infidelity``; True if the job names none."""
    found = score.worst if job.has_tolerance else score.nominal
    return job.stop_infidelity is None or found <= job.stop_infidelity


def _history(found: descent.Found) -> dict[str, Table]:
    """Infidelity and wishes against iteration for every start, the stages one after another."""
    legs = list(found.history.values())
    edges = np.cumsum([0, *(leg.infidelity.shape[1] for leg in legs)])

    def joined(parts: list[np.ndarray | None]) -> np.ndarray:
        values = np.full((len(found.names), edges[-1]), np.nan)
        for leg, part, first, last in zip(legs, parts, edges, edges[1:], strict=False):
            if part is not None:
                values[leg.starts, first:last] = part
        return values

    axes = ("start", "iteration")
    tables = {
        "iteration": Table(np.arange(edges[-1]), axes[1:], "1", "step of the search"),
        "infidelity": Table(
            joined([leg.infidelity for leg in legs]),
            axes,
            "1",
            "what was lowered: a power mean of the infidelity over the stage's grid",
        ),
        "stage": Table(
            np.repeat(np.arange(len(legs)), np.diff(edges)),
            axes[1:],
            "1",
            "stage, see the attribute stages",
        ),
    }
    for name in sorted({name for leg in legs for name in leg.wishes}):
        parts = [leg.wishes.get(name) for leg in legs]
        tables[name] = Table(joined(parts), axes, "1", f"cost of the wish {name}, weight included")
    return tables


def _curve(tried: Tried) -> dict[str, Table]:
    """Best infidelity against duration, as far as the search for the duration came."""
    job, axes = tried.job, ("duration_s",)
    durations = tried.slices * job.slice_duration
    tables = {
        "duration_s": Table(durations, axes, "s", "duration tried"),
        "best_infidelity": Table(
            tried.infidelity, axes, "1", "best infidelity found at this duration"
        ),
    }
    if job.find_best:
        decay = np.array([coherence_limit(t, job.t1, job.t2) for t in durations])
        tables["infidelity_with_decay"] = Table(
            tried.infidelity + decay, axes, "1", "the same, and what T1 and T2 take in this time"
        )
    return tables


def draw(waveform: Waveform, path) -> None:
    """How the search went, as a picture; the file's suffix decides the format.

    Where the shortest duration was looked for: best infidelity against duration; else infidelity
    against iteration.
    """
    from shaper.figures import duration_figure, history_figure, save

    job = parse_job(waveform.job_text)
    tables = {name: table.values for name, table in waveform.history.items()}
    if "best_infidelity" in tables:
        curve = {
            "duration_ns": tables["duration_s"] / NS,
            "infidelity": tables["best_infidelity"],
        }
        limit_ns = limit(job.target, job.bound) / job.rabi_max / NS
        figure = duration_figure(curve, limit_ns=limit_ns, stop_infidelity=job.stop_infidelity)
    else:
        figure = history_figure(tables, stop_infidelity=job.stop_infidelity)
    save(figure, path)
