"""The job as numbers: the tolerance box and the grids of errors laid over it."""

from __future__ import annotations

import functools
import math
from dataclasses import dataclass

import numpy as np
from scipy.linalg import eigvalsh_tridiagonal

from shaper.drive import line as drive_line
from shaper.drive.line_data import read_step_response, read_touchstone
from shaper.errors import InputError
from shaper.job import Job

SCORE_POINTS = 41  # per axis, at least; of the one grid on which every pulse is scored
MOST_POINTS = 1_000_000  # of a grid; more are not worth waiting for
SCORE_DENSITY = 8.0  # points per rad of reach: see ``points_for``


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


@functools.lru_cache(maxsize=64)
def _lobatto(points: int) -> tuple[np.ndarray, np.ndarray]:
    """Gauss-Lobatto nodes on [-1, 1], ends included, and weights of the mean.

    The inner nodes are the zeros of P'_(n-1), proportional to the Jacobi polynomial (1, 1), hence
    eigenvalues of its recurrence (Golub and Welsch, Math. Comp. 23, 221 (1969)).
    """
    k = np.arange(1.0, points - 2)
    beside = np.sqrt(k * (k + 2) / ((2 * k + 1) * (2 * k + 3)))  # the diagonal
    inner = eigvalsh_tridiagonal(np.zeros(points - 2), beside) if points > 2 else np.zeros(0)
    nodes = np.concatenate([[-1.0], (inner - inner[::-1]) / 2, [1.0]])
    legendre = np.polynomial.legendre.Legendre.basis(points - 1)(nodes)
    return nodes, 1 / (points * (points - 1) * legendre**2)


def _axis(half_width: float, points: int) -> tuple[np.ndarray, np.ndarray]:
    """Nodes on [-h, h] and weights of the mean; the middle alone for a side of zero width."""
    if half_width == 0 or points == 1:
        return np.zeros(1), np.ones(1)
    nodes, weights = _lobatto(points)
    return half_width * nodes, weights


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


def score_grid(job: Job, duration: float | None = None) -> Grid:
    """The grid on which every pulse is scored: nothing larger by a percent lies between its points.

    Args:
        duration: s, of the pulse; default: the job's own.
    """
    return dense_grid(job, (SCORE_POINTS, SCORE_POINTS), SCORE_DENSITY, duration)


def dense_grid(
    job: Job, least: tuple[int, int], per_radian: float, duration: float | None = None
) -> Grid:
    """``error_grid`` with as many points as the reach of each error asks for, see ``points_for``.

    Args:
        least: fewest points along amplitude and detuning.
        per_radian: points per rad of reach.
        duration: s, of the pulse; default: the job's own.
    """
    duration = job.duration if duration is None else duration
    turn = job.rabi_max * duration * (1.0 if job.bound == "circle" else math.sqrt(2))
    reach = job.amplitude_tolerance * turn, job.detuning_tolerance * duration
    points = [points_for(r, n, per_radian) for r, n in zip(reach, least, strict=True)]
    if points[0] * points[1] > MOST_POINTS:
        raise InputError(
            f"tolerance: expected errors of at most some hundred radians in {duration:.4g} s, "
            f"got {reach[0]:.3g} rad by amplitude and {reach[1]:.3g} rad by detuning; narrow the "
            "tolerance or shorten the pulse"
        )
    return error_grid(job, *points)


def points_for(reach: float, least: int = SCORE_POINTS, per_radian: float = SCORE_DENSITY) -> int:
    """Points along one axis of the box, so that little hides between them.

    Along an error the infidelity is a mixture of oscillations of at most ``reach`` rad from the
    center of the box to its edge: half width times duration for detuning, relative half width
    times the total angle for amplitude. If it is at most M on the whole line, its second
    derivative is at most ``reach^2 M / 2`` in units of the half width (Bernstein). The widest gap
    of ``n`` Lobatto points is ``pi / (n - 1)``, so a maximum M is missed by at most ``(pi reach /
    (n - 1))^2 M / 16``: one percent for 8 points per rad. A robust pulse, whose infidelity is far
    larger outside the box, ripples more towards the edges, where the points are dense.

    Rounded up to ``(least - 1) 2^(k/2) + 1``, odd: few sizes, so that compiled programs are shared.

    Args:
        reach: rad.
        least: odd, above 1; enough up to a reach of ``(least - 1) / per_radian``.
        per_radian: 8 for a percent; less where a coarse grid only has to lead the way.
    Source:
        Bernstein's inequality for functions of exponential type: R. P. Boas, Entire Functions
        (1954), chapter 11.
    """
    steps = max(0, math.ceil(2 * math.log2(max(per_radian * reach, 1e-9) / (least - 1)) - 1e-9))
    return 2 * math.ceil((least - 1) * 2 ** (steps / 2) / 2 - 1e-9) + 1


def line_of(job: Job) -> drive_line.Line | None:
    """The model of the job's drive line, or None if there is none.

    Raises:
        InputError: if a measured line cannot be read or does not suit the job.
    """
    facts = job.line
    if facts.kind == "none":
        return None
    if facts.kind == "first_order":
        line = drive_line.first_order(facts.bandwidth)
    elif facts.kind == "gaussian":
        line = drive_line.gaussian(facts.bandwidth)
    elif facts.kind == "step_response":
        line = read_step_response(facts.file, job.sample_rate)
    else:
        carrier = job.carrier / (2 * np.pi)
        line = read_touchstone(facts.file, carrier, job.sample_rate, facts.ports)
    drive_line.require_band(line, job.duration)
    return line


def line_taps(job: Job) -> drive_line.Taps | None:
    """The line on the slice clock, as the search sees it; None if it is not in the model.

    The number of cells a slice is what a pulse at the bound with a turning phase needs.
    """
    line = line_of(job) if job.correction == "model" else None
    if line is None:
        return None
    phase = 2 * np.pi * np.arange(job.slices) / max(job.slices, 1)
    probe = job.rabi_max * np.stack([np.cos(phase), np.sin(phase)], axis=-1)
    cells = drive_line.cells_needed(line, probe, job.slice_duration)
    return drive_line.taps(line, job.slice_duration, cells)
