"""The one grid and its figures, against textbook matrices and independent quadrature."""

import math

import numpy as np
import pytest
import reference
from hypothesis import given, settings
from hypothesis import strategies as st

from shaper.composite import place, sandwich
from shaper.evidence.score import score
from shaper.job import parse_job
from shaper.physics.propagate import propagate, segment_quaternions
from shaper.pulse import make_pulse
from shaper.rotation import matrix, product

MATRIX_ROUND_OFF = 1e-13  # of one entry, after a few dozen products of either implementation
TRACE_ROUND_OFF = 1e-14  # the trace formula loses digits below it


def job(amplitude=0.05, detuning_MHz=2.5, gate="z", extra=""):
    return parse_job(
        f"""
        {extra}
        [drive]
        rabi_max_MHz = 25.0
        sample_rate_MSps = 1000.0
        dac_bits = 14
        [target]
        gate = "{gate}"
        {"angle_deg = 90.0" if gate in "xyz" else ""}
        [tolerance]
        amplitude = {amplitude}
        detuning_MHz = {detuning_MHz}
        [pulse]
        duration_ns = 60.0
        slice_ns = 1.0
        """
    )


@settings(deadline=None, max_examples=30)
@given(
    segments=st.integers(1, 40),
    seed=st.integers(0, 2**31),
    eps=st.floats(-0.5, 0.5),
    delta=st.floats(-2, 2),
)
def test_propagator_against_scipy(segments, seed, eps, delta):
    rng = np.random.default_rng(seed)
    drive, durations = rng.normal(size=(segments, 2)), rng.uniform(0, 2, size=segments)
    expected = reference.propagator(drive, durations, eps, delta)
    found = matrix(propagate(drive, durations, eps, delta))
    assert np.max(np.abs(found - expected)) < MATRIX_ROUND_OFF * segments


def test_propagator_does_not_depend_on_how_it_is_chunked(rng):
    """One product at a time, the plain way, on a grid and for more segments than one sweep."""
    drive, durations = rng.normal(size=(701, 2)), rng.uniform(0, 1, size=701)
    drive[::7] = 0.0  # silence
    eps, delta = rng.uniform(-0.1, 0.1, size=(2, 5, 9))
    total = np.broadcast_to([1.0, 0, 0, 0], (5, 9, 4))
    steps = segment_quaternions(drive, durations, eps.ravel(), delta.ravel())
    for step in steps.reshape(701, 5, 9, 4):
        total = product(step, total)
    found = propagate(drive, durations, eps, delta)
    assert found.shape == (5, 9, 4)
    assert np.allclose(found, total, atol=1e-12)
    assert propagate(drive[:1], durations[:1], 0.0, 0.0).shape == (4,)
    with pytest.raises(ValueError, match="expected drive"):
        propagate(drive, durations[:-1], 0.0, 0.0)


def test_score_of_the_sandwich_against_textbook_matrices():
    """Corner by corner with expm, the mean by Gauss-Legendre quadrature of 24 x 24 points."""
    here = job()
    pulse = place(sandwich(here.target, "circle"), here)
    result = score(pulse, here)
    wanted = reference.rotation((0, 0, 1), math.pi / 2)

    def plain(eps, delta):
        actual = reference.propagator(pulse.drive, pulse.segment_durations, eps, delta)
        return reference.average_gate_infidelity(actual, wanted)

    nodes, weights = np.polynomial.legendre.leggauss(24)
    d_max = here.detuning_tolerance
    values = np.array([[plain(0.05 * e, d_max * d) for d in nodes] for e in nodes])
    assert result.mean == pytest.approx(weights @ values @ weights / 4, rel=1e-12)
    worst = max(plain(e, d) for e in (-0.05, 0.0, 0.05) for d in (-d_max, 0.0, d_max))
    assert result.worst == pytest.approx(worst, rel=1e-12)
    assert result.nominal < TRACE_ROUND_OFF
    assert result.dac_worst <= result.guaranteed <= 1.011 * result.dac_worst


def test_score_of_the_codes_is_that_of_what_they_decode_to(rng):
    """14 bits: an error of the order of (1/8191)^2, recomputed from the integers."""
    here = job(gate="hadamard")
    rate = here.rabi_max * rng.uniform(0, 0.7, size=(40, 2))
    pulse = make_pulse(
        rate,
        np.ones(40, dtype=int),
        full_scale=here.rabi_max,
        bits=14,
        bound="circle",
        sample_rate=here.sample_rate,
        origin="optimized",
    )
    result = score(pulse, here)
    decoded = pulse.codes.astype(float) / 8191 * here.rabi_max
    actual = reference.propagator(decoded, np.full(40, 1e-9))
    wanted = reference.rotation((1, 0, 1), math.pi)
    assert result.dac == pytest.approx(reference.average_gate_infidelity(actual, wanted), rel=1e-9)
    assert result.dac != result.nominal
    assert result.dac == pytest.approx(result.nominal, abs=1e-3)
    assert result.dac <= result.dac_worst and result.dac_mean <= result.dac_worst


def test_without_tolerance_all_figures_are_one_and_the_offset_counts():
    here = job(amplitude=0.0, detuning_MHz=0.0)
    pulse = place(sandwich(here.target, "circle"), here)
    result = score(pulse, here)
    assert result.nominal == result.mean == result.worst
    assert result.guaranteed is None
    off = job(amplitude=0.0, detuning_MHz=0.0, extra="[qubit]\ndetuning_MHz = 1.0\n")
    actual = reference.propagator(pulse.drive, pulse.segment_durations, 0.0, 2 * math.pi * 1e6)
    wanted = reference.rotation((0, 0, 1), math.pi / 2)
    assert score(pulse, off).nominal == pytest.approx(
        reference.average_gate_infidelity(actual, wanted), rel=1e-10
    )
