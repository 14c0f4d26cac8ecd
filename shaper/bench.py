"""The job as numbers: the tolerance box and the grids of errors laid over it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from shaper.job import Job

SCORE_POINTS = 41  # per axis; the one grid on which every pulse is scored


@dataclass(frozen=True)
class Grid:
    """Points of the tolerance box with weights for the mean over it.

    Attributes:
        eps: [grid] unitless relative amplitude error.
        delta: [grid] rad/s detuning, the job's own offset included.
        weight: [grid] unitless, sums to 1.
    """

    eps: np.ndarray
    delta: np.ndarray
    weight: np.ndarray


def _axis(half_width: float, points: int) -> tuple[np.ndarray, np.ndarray]:
    """Gauss-Lobatto nodes on [-h, h], ends included, and weights of the mean."""
    if half_width == 0 or points == 1:
        return np.zeros(1), np.ones(1)
    basis = np.polynomial.legendre.Legendre.basis(points - 1)
    inner = basis.deriv().roots().real
    nodes = np.concatenate([[-1.0], np.sort(inner), [1.0]])
    weights = 2 / (points * (points - 1) * basis(nodes) ** 2)
    return half_width * nodes, weights / 2


def error_grid(job: Job, amplitude_points: int, detuning_points: int) -> Grid:
    """Gauss-Lobatto product grid over the job's box, corners and edges included.

    A side of zero width has one point. Exact means for polynomials up to degree
    ``2 points - 3`` along each axis.
    Source:
        Gauss-Lobatto quadrature: Abramowitz and Stegun, Handbook of Mathematical Functions,
        25.4.32.
    """
    eps, eps_weight = _axis(job.amplitude_tolerance, amplitude_points)
    delta, delta_weight = _axis(job.detuning_tolerance, detuning_points)
    e, d = np.meshgrid(eps, delta, indexing="ij")
    weight = np.outer(eps_weight, delta_weight)
    return Grid(e.ravel(), d.ravel() + job.detuning, weight.ravel())


def score_grid(job: Job) -> Grid:
    """The grid on which every pulse is scored."""
    return error_grid(job, SCORE_POINTS, SCORE_POINTS)
