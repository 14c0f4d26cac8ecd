"""The grids of errors: exact means, edges included, nothing hidden between the points."""

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import dblquad

from shaper.bench import SCORE_POINTS, error_grid, points_for, score_grid
from shaper.job import parse_job
from shaper.physics.propagate import propagate
from shaper.target import infidelity

ROUND_OFF = 1e-13  # relative, of sums of a few thousand products
HIDDEN = 0.01  # what may lie above the largest point of the score's grid, relative: its promise

JOB = parse_job(
    """
    [qubit]
    detuning_MHz = 0.7
    [drive]
    rabi_max_MHz = 25.0
    sample_rate_MSps = 1000.0
    [target]
    gate = "z"
    angle_deg = 90.0
    [tolerance]
    amplitude = 0.05
    detuning_MHz = 2.5
    [pulse]
    duration_ns = 60.0
    slice_ns = 1.0
    """
)


@given(st.integers(2, 30), st.integers(2, 30))
def test_points_lie_in_the_box_with_its_corners(along_amplitude, along_detuning):
    grid = error_grid(JOB, along_amplitude, along_detuning)
    assert grid.eps.shape == grid.delta.shape == grid.weight.shape
    assert len(grid.eps) == along_amplitude * along_detuning
    off = grid.delta - JOB.detuning
    assert np.max(np.abs(grid.eps)) == JOB.amplitude_tolerance
    assert np.max(np.abs(off)) == pytest.approx(JOB.detuning_tolerance, rel=ROUND_OFF)
    corners = {
        (round(e / 0.05, 9), round(d / JOB.detuning_tolerance, 9))
        for e, d in zip(grid.eps, off, strict=True)
    }
    assert {(-1, -1), (-1, 1), (1, -1), (1, 1)} <= corners
    assert np.all(grid.weight > 0)
    assert np.sum(grid.weight) == pytest.approx(1, rel=ROUND_OFF)


@pytest.mark.parametrize("points", [2, 3, 5, 11, 41, 57])
def test_means_of_polynomials_are_exact(points):
    """Up to degree 2 n - 3 along each axis; the mean of x^k over [-1, 1] is 1/(k + 1) or 0."""
    grid = error_grid(JOB, points, points)
    x, y = grid.eps / 0.05, (grid.delta - JOB.detuning) / JOB.detuning_tolerance
    top = 2 * points - 3
    for a, b in [(0, 0), (top, 0), (top - 1, 0), (0, top - 1), (top - 1, top - 1), (1, top)]:
        exact = np.prod([0.0 if k % 2 else 1 / (k + 1) for k in (a, b)])
        assert grid.weight @ (x**a * y**b) == pytest.approx(exact, rel=1e-11, abs=ROUND_OFF)
    above = grid.weight @ x ** (top + 1)  # and no further: the next even degree is off
    if points <= 11:
        assert above != pytest.approx(1 / (top + 2), rel=1e-6)


def test_mean_infidelity_is_the_integral_over_the_box(rng):
    """A random pulse, against SciPy's adaptive quadrature."""
    drive = rng.uniform(-0.7, 0.7, (12, 2)) * JOB.rabi_max
    durations = np.full(12, 5e-9)

    def off(delta, eps):
        return float(infidelity(propagate(drive, durations, eps, delta), JOB.target))

    width = JOB.detuning_tolerance
    integral, _ = dblquad(
        off, -0.05, 0.05, JOB.detuning - width, JOB.detuning + width, epsabs=0, epsrel=1e-9
    )
    grid = score_grid(JOB)
    found = infidelity(propagate(drive, durations, grid.eps, grid.delta), JOB.target)
    assert grid.weight @ found == pytest.approx(integral / (0.1 * 2 * width), rel=1e-8)


def test_a_side_of_no_width_has_one_point():
    grid = error_grid(replace(JOB, amplitude_tolerance=0.0), 7, 9)
    assert len(grid.eps) == 9
    assert not np.any(grid.eps)
    alone = score_grid(replace(JOB, amplitude_tolerance=0.0, detuning_tolerance=0.0))
    assert (alone.eps.tolist(), alone.delta.tolist(), alone.weight.tolist()) == (
        [0.0],
        [JOB.detuning],
        [1.0],
    )


@settings(deadline=None, max_examples=30)
@given(st.floats(0.1, 60), st.floats(-1, 1), st.floats(0, 2 * math.pi))
def test_nothing_larger_hides_between_the_points(reach, wave, phase):
    """The fastest oscillation there can be along one axis, and any slower one beside it."""
    job = replace(JOB, amplitude_tolerance=0.0, detuning_tolerance=reach / JOB.duration)
    grid = score_grid(job)
    x = (grid.delta - job.detuning) / job.detuning_tolerance
    fine = np.linspace(-1, 1, 40_001)

    def oscillation(x):
        slow = np.cos(wave * reach * x + 2 * phase)
        return 2 + np.cos(reach * x + phase) + slow  # between 0 and 4, as M of the bound

    between, on_grid = np.max(oscillation(fine)), np.max(oscillation(x))
    assert on_grid <= between * (1 + 1e-6)
    assert between - on_grid <= HIDDEN * 4


@given(st.floats(0, 1e4), st.integers(1, 40).map(lambda k: 2 * k + 1))
def test_few_odd_sizes_that_grow_with_the_reach(reach, least):
    points = points_for(reach, least)
    assert points % 2 == 1
    assert points >= max(least, 8 * reach * (least - 1) / least)
    assert points_for(reach * 1.01, least) >= points
    assert points <= max(least, 1.5 * 8 * reach + least)  # no more than a step of sqrt 2 too many


def test_a_short_pulse_is_scored_on_the_smallest_grid():
    assert points_for(0.0) == SCORE_POINTS
    assert len(score_grid(JOB).eps) == SCORE_POINTS**2
    longer = score_grid(JOB, duration=50 * JOB.duration)
    assert len(longer.eps) > SCORE_POINTS**2
