"""The map from free parameters to quadratures: it cannot leave the bound, and it reaches it."""

import math

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from shaper.drive.bound import parameters, quadratures
from shaper.drive.dac import encode

jax.config.update("jax_enable_x64", True)

SLICES = 8  # one shape, one compiled program for each bound
BACK = 1e-7  # of the inverse near the bound, where the map is flat: the root of round-off
SLOPE = 1e-9  # of central differences with a step of 1e-5

bounds = st.sampled_from(["circle", "box"])
anything = arrays(float, (SLICES, 2), elements=st.floats(-1e6, 1e6) | st.floats(-2, 2))
drive_of = jax.jit(quadratures, static_argnums=1)


def reach(drive, bound):
    drive = np.asarray(drive)
    return np.hypot(*drive.T) if bound == "circle" else np.max(np.abs(drive), axis=1)


@settings(deadline=None, max_examples=300)
@given(anything, bounds)
def test_no_parameters_leave_the_bound(p, bound):
    """Not by one unit in the last place: what follows refuses it."""
    assert np.max(reach(drive_of(p, bound), bound)) <= 1.0


@settings(deadline=None, max_examples=100)
@given(anything, bounds, st.integers(8, 16), st.floats(1e-3, 1e12))
def test_every_waveform_can_be_encoded(p, bound, bits, rabi_max):
    """Scaled to any Rabi rate, floats and codes stay inside: ``encode`` would refuse them."""
    drive = np.asarray(drive_of(p, bound)) * rabi_max
    assert np.max(reach(drive, bound)) <= rabi_max
    codes = encode(drive, rabi_max, bits, bound).astype(int)
    top = 2 ** (bits - 1) - 1
    assert np.max(np.abs(codes)) <= top
    if bound == "circle":
        assert np.all(np.sum(codes**2, axis=1) <= top**2)


def test_the_bound_is_reached_at_finite_parameters():
    """Where the shortest pulses live: a quarter turn of the parameters, not infinity."""
    corner = np.full((SLICES, 2), math.pi / 2)
    assert np.min(reach(drive_of(corner, "box"), "box")) >= 1 - 1e-15
    angle = np.linspace(0, 6, SLICES)
    rim = math.pi / 2 * np.stack([np.cos(angle), np.sin(angle)], axis=-1)
    found = drive_of(rim, "circle")
    assert np.min(reach(found, "circle")) >= 1 - 2e-15
    assert np.max(np.abs(found - rim / (math.pi / 2))) < 1e-15 * 4


@pytest.mark.parametrize("bound", ["circle", "box"])
def test_round_off_on_the_rim_stays_inside(rng, bound):
    """A hundred thousand points that are meant to lie on the bound itself, at any Rabi rate."""
    angle = rng.uniform(0, 2 * math.pi, (100_000, 1))
    if bound == "circle":
        rim = math.pi / 2 * np.concatenate([np.cos(angle), np.sin(angle)], axis=1)
    else:
        rim = math.pi / 2 * np.sign(np.concatenate([np.cos(angle), np.sin(angle)], axis=1))
    drive = np.asarray(drive_of(rim, bound))
    assert np.max(reach(drive, bound)) <= 1.0
    for rabi_max in (2 * math.pi * 25e6, 1.0, 0.1, 3e5 / 7):
        assert np.max(reach(drive * rabi_max, bound)) <= rabi_max


@settings(deadline=None, max_examples=100)
@given(arrays(float, (SLICES, 2), elements=st.floats(-1, 1)), bounds)
def test_parameters_are_the_inverse(drive, bound):
    if bound == "circle":
        drive = drive / math.sqrt(2)
    p = parameters(drive, bound)
    assert np.max(reach(p, bound)) <= math.pi / 2 * (1 + 1e-15)
    assert np.max(np.abs(np.asarray(drive_of(p, bound)) - drive)) < 1e-14
    back = parameters(np.asarray(drive_of(p, bound)), bound)
    assert np.max(np.abs(back - p)) < BACK


def test_what_lies_outside_is_drawn_to_the_bound():
    for bound in ("circle", "box"):
        drive = np.tile([3.0, -4.0], (SLICES, 1))
        found = np.asarray(drive_of(parameters(drive, bound), bound))
        expected = [0.6, -0.8] if bound == "circle" else [1.0, -1.0]
        assert np.max(np.abs(found - expected)) < 1e-14


@pytest.mark.parametrize("bound", ["circle", "box"])
@pytest.mark.parametrize("size", [0.0, 1e-8, 9.9e-3, 1.01e-2, 0.7, 1.5, 3.0, 20.0])
def test_slope_is_finite_everywhere_and_the_central_difference(rng, bound, size):
    """At zero, on both sides of the series' switch (0.01 rad), at the bound and far beyond."""
    p = rng.normal(size=(SLICES, 2))
    p = size * p / np.linalg.norm(p, axis=1, keepdims=True)
    weights, step = rng.normal(size=(SLICES, 2)), 1e-5
    slope = np.asarray(_slope(p, weights, bound))
    assert np.all(np.isfinite(slope))
    for k, c in [(0, 0), (3, 1)]:
        sides = []
        for sign in (1, -1):
            moved = p.copy()
            moved[k, c] += sign * step
            sides.append(float(np.sum(np.asarray(drive_of(moved, bound)) * weights)))
        assert slope[k, c] == pytest.approx((sides[0] - sides[1]) / (2 * step), abs=SLOPE)


def _weighted(p, weights, bound):
    return jnp.sum(quadratures(p, bound) * weights)


_slope = jax.jit(jax.grad(_weighted), static_argnums=2)


def test_turning_the_parameters_turns_the_drive(rng):
    """The circular bound knows no direction."""
    p, angle = rng.normal(size=(SLICES, 2)), 0.7
    turn = np.array([[math.cos(angle), -math.sin(angle)], [math.sin(angle), math.cos(angle)]])
    found = np.asarray(drive_of(p @ turn.T, "circle"))
    assert np.max(np.abs(found - np.asarray(drive_of(p, "circle")) @ turn.T)) < 1e-15
