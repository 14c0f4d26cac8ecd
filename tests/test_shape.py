"""Wishes for the look of a waveform: smooth, narrow in band, zero at its ends; and how short."""

import math
from dataclasses import replace

import jax
import numpy as np
import pytest
import reference
from hypothesis import given, settings
from hypothesis import strategies as st
from job_case import SLICES, Z90_LIMIT, job_text

from shaper.job import parse_job
from shaper.physics.decay import coherence_limit
from shaper.rotation import matrix
from shaper.search import descent
from shaper.search.duration import search_best, search_shortest
from shaper.search.objective import drive_of, make_problem, wish_costs
from shaper.search.shape import envelope, out_of_band, second_difference
from shaper.workflow.optimize import optimize

jax.config.update("jax_enable_x64", True)

GOAL = 1e-9
FOURIER = 1e-6  # relative, of a spectrum summed over a fine grid of frequencies
SLOW = 1.4 * Z90_LIMIT  # rad; room for ends at zero and the like


def nominal(job, drive):
    end = reference.propagator(drive, np.full(job.slices, job.slice_duration))
    return reference.average_gate_infidelity(end, matrix(job.target.quaternion))


# ---- what the costs are


@given(st.integers(3, 40), st.integers(0, 2**32 - 1))
def test_smoothness_is_the_mean_squared_second_difference(slices, seed):
    drive = np.random.default_rng(seed).normal(size=(slices, 2))
    expected = np.mean(np.sum(np.diff(drive, n=2, axis=0) ** 2, axis=1))
    found = np.sum((second_difference(slices) @ drive) ** 2)
    assert found == pytest.approx(expected, rel=1e-12)


def test_a_straight_line_is_perfectly_smooth():
    ramp = np.arange(20.0)[:, None] * [1.0, -2.0]
    assert np.sum((second_difference(20) @ ramp) ** 2) < 1e-24
    assert second_difference(2).shape == (0, 2)


@settings(deadline=None, max_examples=20)
@given(st.integers(2, 24), st.floats(0.01, 0.49), st.integers(0, 2**32 - 1))
def test_energy_out_of_band_is_that_of_the_spectrum(slices, share, seed):
    """Against the Fourier sum itself: energy beyond +-B of the samples, over full drive's."""
    drive = np.random.default_rng(seed).normal(size=(slices, 2))
    found = np.sum((out_of_band(slices, 1e-9, share / 1e-9) @ drive) ** 2)
    points = 40_001
    frequency = np.linspace(share, 1 - share, points)  # in units of the slice rate, outside only
    wave = np.exp(-2j * np.pi * frequency[:, None] * np.arange(slices))
    density = np.sum(np.abs(wave @ drive) ** 2, axis=1)
    outside = np.trapezoid(density, frequency)
    assert found == pytest.approx(outside / slices, rel=FOURIER, abs=1e-12)


def test_band_of_half_the_slice_rate_holds_everything(rng):
    drive = rng.normal(size=(16, 2))
    assert np.sum((out_of_band(16, 1e-9, 0.5e9) @ drive) ** 2) < 1e-12
    nothing = np.sum((out_of_band(16, 1e-9, 1e-3) @ drive) ** 2)
    assert nothing == pytest.approx(np.sum(drive**2) / 16, rel=1e-9)


@given(st.integers(2, 60), st.integers(0, 30), st.integers(0, 8))
def test_envelope_rises_from_zero_and_falls_back(slices, rise, more):
    job = replace(parse_job(job_text(4.2)), slices=slices)
    job = replace(job, shape=replace(job.shape, rise=rise * job.slice_duration))
    held = envelope(job, slices + more)
    if rise == 0:
        assert held is None
        return
    assert held.shape == (slices + more,)
    assert held[0] == held[slices - 1] == 0
    assert not np.any(held[slices:])
    assert np.all((held >= 0) & (held <= 1))
    own = held[:slices]
    assert np.array_equal(own, own[::-1])
    assert np.all(np.diff(own[: slices // 2]) >= 0)


# ---- what the search makes of them


def test_ends_at_zero_are_exact_and_the_gate_is_met():
    job = parse_job(job_text(SLOW, more="[shape]\nrise_ns = 6.0"))
    found = descent.search(job)
    assert found.status == "converged"
    assert not np.any(found.drive[0]) and not np.any(found.drive[-1])
    held = envelope(job, SLICES) * job.rabi_max
    assert np.all(np.hypot(*found.drive.T) <= held * (1 + 1e-15))
    assert nominal(job, found.drive) <= GOAL


def test_wishes_are_heard():
    """Over a tolerance box: far smoother and narrower than without a wish, and still a gate."""
    wish = "[shape]\nsmoothness = 10.0\nmax_bandwidth_MHz = 60.0\nband_weight = 20.0"
    search, slices = 'minimize = "mean"\nstarts = 8\niterations = 60', 30
    rough, outside, mean = {}, {}, {}
    for name, more in (("plain", ""), ("shaped", wish)):
        text = job_text(3 * math.pi, slices=slices, tolerance=(0.05, 0.1), search=search, more=more)
        job = parse_job(text)
        found = descent.search(job)
        drive = found.drive / job.rabi_max
        rough[name] = np.sum((second_difference(slices) @ drive) ** 2)
        outside[name] = np.sum((out_of_band(slices, 1e-9, 60e6) @ drive) ** 2)
        mean[name] = found.infidelity
    assert rough["shaped"] < rough["plain"] / 2
    assert outside["shaped"] < outside["plain"] / 2
    assert mean["plain"] < mean["shaped"] < 0.02  # looks have a price, and a bounded one


def test_costs_are_weights_times_squares(rng):
    wish = "[shape]\nsmoothness = 2.0\nmax_bandwidth_MHz = 60.0\nband_weight = 3.0"
    problem = make_problem(parse_job(job_text(SLOW, more=wish)), (3, 5))
    parameters = rng.normal(size=(SLICES, 2))
    drive = np.asarray(drive_of(problem, parameters))
    costs = wish_costs(problem, parameters)
    assert float(costs["smoothness"]) == pytest.approx(
        2 * np.mean(np.sum(np.diff(drive, n=2, axis=0) ** 2, axis=1)), rel=1e-9
    )
    expected = 3 * np.sum((out_of_band(SLICES, 1e-9, 60e6) @ drive) ** 2)
    assert float(costs["out_of_band"]) == pytest.approx(expected, rel=1e-9)


# ---- the shortest duration


def stepped_z90(slices):
    """W_max T of the shortest exact z(90) of N equal slices; derived in ``composite.geodesic``."""
    a, b = math.pi / slices, (2 * math.pi - math.pi / 2) / (2 * slices)
    return 2 * slices * math.acos(math.cos(a) / math.cos(b))


def test_the_shortest_duration_is_the_one_that_theory_names():
    """z(90) in slices of 0.14 rad: the first N whose N-slice optimum fits into it."""
    unit = 0.14
    text = job_text(30 * unit, slices=30, search="starts = 8")
    job = replace(parse_job(text), find_shortest=True)
    shortest = search_shortest(job)
    expected = next(n for n in range(2, 100) if n * unit >= stepped_z90(n))
    assert shortest.job.slices == expected
    assert len(shortest.found.drive) == expected
    assert nominal(shortest.job, shortest.found.drive) <= GOAL
    tried = dict(zip(shortest.slices.tolist(), shortest.infidelity.tolist(), strict=True))
    assert list(tried) == sorted(tried)
    assert tried[expected] <= GOAL
    too_short = [n for n in tried if n < expected]
    assert all(tried[n] > GOAL for n in too_short)


def test_slices_of_no_duration_change_nothing():
    """What lets all durations share one program: the same search on longer arrays."""
    job = parse_job(job_text(0.99 * Z90_LIMIT, slices=60, search="iterations = 40"))
    alone, padded = descent.search(job), descent.search(job, slices=SLICES)
    assert padded.drive.shape == alone.drive.shape == (60, 2)
    assert padded.infidelity == pytest.approx(alone.infidelity, rel=1e-6)


def test_the_best_duration_trades_decay_against_the_gate():
    """Without errors any time beyond the limit only decays, so the best is about the limit."""
    text = job_text(4 * math.pi, search="starts = 4", more="[qubit]\nt1_us = 2.0\nt2_us = 1.0")
    job = parse_job(text.replace(f"duration_ns = {SLICES}.0", 'duration_ns = "best"'))
    tried = search_best(job)
    durations = tried.slices * job.slice_duration
    total = tried.infidelity + [coherence_limit(t, job.t1, job.t2) for t in durations]
    assert tried.slices[np.argmin(total)] == tried.job.slices
    length = tried.job.duration * job.rabi_max
    assert 0.95 * Z90_LIMIT <= length <= 1.1 * Z90_LIMIT  # a little short may cost less than decay
    assert np.max(total) > 1.1 * np.min(total)  # there was something to trade


@pytest.mark.parametrize("look", [search_shortest, search_best])
def test_a_stop_asked_for_at_once_still_leaves_a_waveform(look):
    text = job_text(30 * 0.14, slices=30, search="starts = 4", more="[qubit]\nt1_us = 2.0")
    tried = look(parse_job(text), stop=lambda: True)
    assert len(tried.slices) == 1
    assert len(tried.found.drive) == tried.job.slices
    assert np.isfinite(tried.found.infidelity)


def test_a_duration_search_that_was_stopped_says_so():
    text = job_text(30 * 0.14, slices=30, search="starts = 4")
    waveform = optimize(replace(parse_job(text), find_shortest=True), stop=lambda: True)
    assert waveform.status == "interrupted"
