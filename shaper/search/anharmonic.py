"""The search for a job whose qubit is an anharmonic ladder: leakage is in the model."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from shaper.bench import dense_grid, line_taps
from shaper.job import Job
from shaper.physics.ladder import Ladder
from shaper.search.compiler import prepare
from shaper.search.descent import Found, Leg, Progress
from shaper.search.ladder import search_ladder
from shaper.search.stages import worst_counts

_POINTS, _DENSITY = (3, 3), 1.5  # least points of the grid; points per rad of reach
_STARTS = 8  # more are not worth their time: nearly every start of this search arrives
_ROUNDS = 12  # of reweighting towards the worst point
_BELOW = 0.1  # of stop_infidelity, where the mean cost may rest when the worst point counts


def search_on_levels(
    job: Job,
    progress: Progress | None = None,
    stop: Callable[[], bool] | None = None,
) -> Found:
    """The best waveform found on the job's levels; arguments as of ``descent.search``."""
    prepare()
    interrupted = []

    def between(stage: str, done: int, total: int, lowest: float) -> bool:
        if progress is not None:
            progress(stage, done, total, lowest)
        if stop is not None and stop():
            interrupted.append(True)
        return bool(interrupted)

    goal = job.stop_infidelity or 0.0
    grid = dense_grid(job, _POINTS, _DENSITY)
    taps = line_taps(job)
    pulse = search_ladder(
        Ladder(job.anharmonicity, job.levels),
        job.target,
        job.slices,
        job.slice_duration,
        job.rabi_max,
        bound=job.bound,
        eps=grid.eps,
        delta=grid.delta,
        starts=min(job.starts, _STARTS),
        iterations=job.iterations,
        rounds=_ROUNDS if job.has_tolerance and worst_counts(job) else 0,
        stop=_BELOW * goal * min(1.0, job.leakage_weight),  # of the weighted cost
        leakage_weight=job.leakage_weight,
        seed=job.seed,
        kernel=None if taps is None else taps.kernel,
        between=between,
    )
    reached = job.stop_infidelity is not None and pulse.worst <= job.stop_infidelity
    status = "converged" if reached else "interrupted" if interrupted else "step_limit"
    starts = len(pulse.costs)
    best = int(np.nanargmin(pulse.costs))
    names = ["derivative_corrected", *(f"random_{k}" for k in range(starts - 1))]
    statuses = ["step_limit"] * starts
    statuses[best] = status
    history = {"ladder": Leg(np.arange(starts), pulse.costs[:, None])}
    return Found(pulse.drive, pulse.worst, status, names, statuses, best, history)
