"""A search of a second or two that tells whether a tolerance is within reach at all.

Phases only, full amplitude, few segments, NumPy: enough to see the order of magnitude, without
the compiler that the real search brings along.
"""

from __future__ import annotations

import math

import numpy as np
from scipy.optimize import least_squares

from shaper.bench import Grid, error_grid, score_grid
from shaper.composite import geodesic_drive, time_optimal
from shaper.job import Job
from shaper.physics.propagate import propagate, segment_quaternions
from shaper.rotation import conjugate, product
from shaper.target import infidelity

_SEGMENT = math.pi / 8  # rotation per segment, finer than any feature of a good pulse
_FEWEST, _MOST = 16, 96  # segments
_STARTS, _STEPS = 4, 60
_SMOOTH = 6  # cosines in a random start
_SEED = 1


def trial_infidelity(job: Job) -> float:
    """Worst-case infidelity over the tolerance that a short trial reaches; the same every time.

    An upper estimate: the real search is at least as good, on tried jobs up to ten times.

    Args:
        job: with the circular bound.
    """
    wanted = round(job.rabi_max * job.duration / _SEGMENT)
    segments = min(max(wanted, _FEWEST), _MOST, job.slices)
    durations = np.full(segments, job.duration / segments)
    grid, score = error_grid(job, 3, 5), score_grid(job)
    rng = np.random.default_rng(_SEED)
    x = (np.arange(segments) + 0.5) / segments
    geodesic = geodesic_drive(time_optimal(job.target), segments)
    starts = [np.unwrap(np.arctan2(geodesic[:, 1], geodesic[:, 0]))]
    for _ in range(_STARTS - 1):
        waves = np.cos(np.pi * np.outer(np.arange(_SMOOTH), x))
        starts.append(rng.uniform(0.5, 2.0) * rng.normal(size=_SMOOTH) @ waves)
    best = np.inf
    for start in starts:
        found = least_squares(
            lambda phases: errors(phases, durations, job, grid)[0],
            start,
            jac=lambda phases: errors(phases, durations, job, grid)[1],
            max_nfev=_STEPS,
        )
        q = propagate(_drive(found.x, job), durations, score.eps, score.delta)
        best = min(best, float(np.max(infidelity(q, job.target))))
    return best


def errors(
    phases: np.ndarray, durations: np.ndarray, job: Job, grid: Grid
) -> tuple[np.ndarray, np.ndarray]:
    """Weighted rotation errors over the grid, whose squares sum to the mean infidelity.

    Turning one segment's axis by ``d`` about z is ``z/2`` after it minus ``z/2`` before it; seen
    from the end, with F_k the propagator up to point k, that is ``Q F_k^-1 (z/2) F_k``. So all
    derivatives are differences of one row of quaternions.

    Returns:
        errors [grid * k] and their derivative by every phase [grid * k, segment].
    """
    steps = segment_quaternions(_drive(phases, job), durations, grid.eps, grid.delta)
    upto = [np.broadcast_to([1.0, 0.0, 0.0, 0.0], steps.shape[1:])]
    for step in steps:
        upto.append(product(step, upto[-1]))
    upto = np.stack(upto)  # [point, grid, 4]
    half_z = np.array([0.0, 0.0, 0.0, 0.5])
    turned = product(upto[-1], product(conjugate(upto), product(half_z, upto)))
    slopes = np.diff(turned, axis=0)  # [segment, grid, 4]
    weight = np.sqrt(job.target.scale * grid.weight)[:, None]
    rows = job.target.error_rows.T
    values = weight * (upto[-1] @ rows)
    return values.ravel(), (weight * (slopes @ rows)).reshape(len(phases), -1).T


def _drive(phases: np.ndarray, job: Job) -> np.ndarray:
    return job.rabi_max * np.stack([np.cos(phases), np.sin(phases)], axis=-1)
