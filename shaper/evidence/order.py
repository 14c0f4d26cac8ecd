"""How the error of a pulse grows from zero: its power series, not a fit to a slope.

Along one error ``u`` every segment is ``exp(-i (h0 + u h1).sigma)``. Its Taylor polynomial in u is
found by scaling and squaring in the algebra of quaternion polynomials; the segments multiply as
polynomials. All coefficients up to the degree are exact to round-off.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from shaper.job import Job
from shaper.rotation import product

DEGREE = 8  # of the rotation error; the infidelity is then known to order 9 and more
_TAYLOR_TERMS = 16  # of the exponential of at most a quarter of a radian: below 1e-20
_VANISHES = 1e-9  # of the largest coefficient that so long a pulse can have: round-off


@dataclass(frozen=True)
class Leading:
    """The first term of the infidelity, ``coefficient * error^order``.

    Attributes:
        order: an even number; 0 if no coefficient up to ``2 * DEGREE`` differs from zero.
        coefficient: unitless; the detuning is counted in units of W_max.
    """

    order: int
    coefficient: float


def error_series(
    drive: np.ndarray, durations: np.ndarray, job: Job, error: str, degree: int = DEGREE
) -> np.ndarray:
    """Taylor coefficients of the rotation error along one error.

    Args:
        drive: [segment, 2] rad/s.
        durations: [segment] s.
        job: target, detuning, and W_max, the unit of the detuning.
        error: "amplitude" (relative) or "detuning" (in units of W_max).
    Returns:
        [degree + 1, k] unitless, lowest power first; the infidelity is the target's scale times
        the squared sum of the series.
    """
    half = 0.5 * np.asarray(durations, dtype=float)
    still = np.stack([half * drive[:, 0], half * drive[:, 1], half * job.detuning], axis=-1)
    change = np.zeros_like(still)
    if error == "amplitude":
        change[:, :2] = still[:, :2]
    else:
        change[:, 2] = half * job.rabi_max
    whole = _chained(_exponential(still, change, degree))
    return whole @ job.target.error_rows.T


def leading(drive: np.ndarray, durations: np.ndarray, job: Job, error: str) -> Leading:
    """Leading order of the infidelity along one error, the other one zero.

    Meant for sequences that meet their target without errors: a remainder at zero error is left
    out of account.
    """
    series = error_series(drive, durations, job, error)
    # no pulse of this length has a larger coefficient: half its length to the power, over k!
    if error == "amplitude":
        reach = 0.5 * float(np.sum(np.hypot(*np.asarray(drive).T) * durations))
    else:
        reach = 0.5 * job.rabi_max * float(np.sum(durations))
    for k in range(1, len(series)):
        size = float(np.linalg.norm(series[k]))
        if size > _VANISHES * max(reach, 1.0) ** k / math.factorial(k):
            return Leading(2 * k, job.target.scale * size**2)
    return Leading(0, 0.0)


def _exponential(still: np.ndarray, change: np.ndarray, degree: int) -> np.ndarray:
    """[segment, degree + 1, 4]: ``exp(-i (still + u change).sigma)`` as polynomials in u."""
    segments = len(still)
    largest = float(np.max(np.linalg.norm(still, axis=1) + np.linalg.norm(change, axis=1)))
    halvings = max(0, math.ceil(math.log2(max(largest, 1e-300) / 0.25)))
    generator = np.zeros((segments, 2, 4))
    generator[:, 0, 1:] = still / 2**halvings
    generator[:, 1, 1:] = change / 2**halvings
    power = np.zeros((segments, degree + 1, 4))
    power[:, 0, 0] = 1.0
    total = power.copy()
    for k in range(1, _TAYLOR_TERMS):
        power = _times(power, generator) / k
        total += power
    for _ in range(halvings):
        total = _times(total, total)
    return total


def _chained(steps: np.ndarray) -> np.ndarray:
    """[segment, degree + 1, 4] to [degree + 1, 4]: neighbors pairwise, the earlier one right."""
    while len(steps) > 1:
        pairs = len(steps) // 2 * 2
        steps = np.concatenate([_times(steps[1:pairs:2], steps[0:pairs:2]), steps[pairs:]])
    return steps[0]


def _times(later: np.ndarray, earlier: np.ndarray) -> np.ndarray:
    """Product of quaternion polynomials, cut at the degree of the first."""
    degree = later.shape[1] - 1
    total = np.zeros_like(later)
    for j in range(earlier.shape[1]):
        total[:, j:] += product(later[:, : degree + 1 - j], earlier[:, j, None])
    return total
