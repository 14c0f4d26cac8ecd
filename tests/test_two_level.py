"""The engine against matrix exponentials, 50-digit arithmetic, and JAX's own reverse mode."""

import math

import jax
import jax.numpy as jnp
import mpmath
import numpy as np
import pytest
import reference
from hypothesis import given, settings
from hypothesis import strategies as st

from shaper.physics.two_level import errors_and_jacobian, propagate
from shaper.rotation import IDENTITY, conjugate, matrix, product

jax.config.update("jax_enable_x64", True)

ONE_SLICE = 1e-15  # series and closed form both end in round-off of numbers below one
PER_SLICE = 1e-15  # and it adds up along the chain
GRADIENT = 1e-14  # per slice, relative to the length of a slice
LONG_CHAIN = 1e-11  # norm after 10^4 slices, each off by at most round-off
TURN = 1.0  # rad; static, one for most tests, so that they share their programs

settings.register_profile("engine", deadline=None, max_examples=25)

chain = jax.jit(propagate, static_argnums=4)
jacobian_of = jax.jit(errors_and_jacobian, static_argnums=5)


def random_case(rng, slices, grid, turn=0.6):
    """Drives, durations and errors with which no slice turns further than one radian."""
    drive = rng.uniform(-turn, turn, (slices, 2))
    durations = rng.uniform(0.2, 1.0, slices)
    return drive, durations, rng.uniform(-0.2, 0.2, grid), rng.uniform(-0.3, 0.3, grid)


def ends(drive, durations, eps, delta, turn=TURN):
    """[grid, 4] NumPy: what the engine finds."""
    return np.stack(chain(drive, durations, eps, delta, turn), axis=-1)


def textbook(drive, durations, eps, delta):
    """[grid, 2, 2]: the plain second implementation at every grid point."""
    errors = zip(eps, delta, strict=True)
    return np.stack([reference.propagator(drive, durations, e, d) for e, d in errors])


def linear(q, direction):
    """A scalar that sees every component of every end point: direction [4, grid]."""
    return sum(jnp.sum(c * d) for c, d in zip(q, direction, strict=True))


def _cost(drive, durations, eps, delta, direction, turn):
    return linear(propagate(drive, durations, eps, delta, turn), direction)


_slope = jax.jit(jax.grad(_cost), static_argnums=5)


def slope_of(drive, durations, eps, delta, direction, turn=TURN):
    """[slice, 2]: the engine's own adjoint."""
    return np.asarray(_slope(drive, durations, eps, delta, direction, turn))


# ---- one slice


@settings(settings.get_profile("engine"))
@given(
    size=st.sampled_from([0.0, 1e-300, 1e-160, 1e-17, 1e-9, 1e-4, 0.1]) | st.floats(0, 0.999),
    polar=st.floats(0, math.pi),
    azimuth=st.floats(0, 2 * math.pi),
)
def test_one_slice_is_the_matrix_exponential(size, polar, azimuth):
    """From no turn at all to one radian about any axis, detuning as z."""
    x, y = math.sin(polar) * math.cos(azimuth), math.sin(polar) * math.sin(azimuth)
    drive, delta = size * np.array([[x, y]]), size * np.array([math.cos(polar)])
    found = ends(drive, np.ones(1), np.zeros(1), delta)
    expected = textbook(drive, np.ones(1), np.zeros(1), delta)
    assert np.max(np.abs(matrix(found) - expected)) < ONE_SLICE


# ---- the chain


@pytest.mark.parametrize(
    ("slices", "grid"),
    [
        (1, 1),
        (2, 3),
        (37, 5),
        (64, 1),
        (60, 25),
        (12, 129),  # wider than any vector register
    ],
)
def test_chain_is_the_product_of_exponentials(rng, slices, grid):
    case = random_case(rng, slices, grid)
    found, expected = matrix(ends(*case)), textbook(*case)
    assert np.max(np.abs(found - expected)) < PER_SLICE * max(slices, 4)


def fifty_digits(drive, durations, eps, delta):
    """(w, x, y, z) as mpmath numbers: the time-ordered product in the working precision."""
    total = [mpmath.mpf(1), mpmath.mpf(0), mpmath.mpf(0), mpmath.mpf(0)]
    for (wx, wy), duration in zip(drive, durations, strict=True):
        half = mpmath.mpf(duration) / 2
        h = [half * (1 + eps) * wx, half * (1 + eps) * wy, half * delta]
        angle = mpmath.sqrt(sum(c * c for c in h))
        sinc = mpmath.sin(angle) / angle if angle else mpmath.mpf(1)
        a = [mpmath.cos(angle), *(sinc * c for c in h)]
        b = total
        total = [
            a[0] * b[0] - a[1] * b[1] - a[2] * b[2] - a[3] * b[3],
            a[0] * b[1] + a[1] * b[0] + a[2] * b[3] - a[3] * b[2],
            a[0] * b[2] - a[1] * b[3] + a[2] * b[0] + a[3] * b[1],
            a[0] * b[3] + a[1] * b[2] - a[2] * b[1] + a[3] * b[0],
        ]
    return total


def as_mpf(array):
    return [[mpmath.mpf(float(v)) for v in row] for row in array]


def test_fifty_digit_product_is_mpmaths_own_exponential(rng):
    """The quaternion product above against mpmath.expm of the 2x2 generators."""
    drive, durations, eps, delta = random_case(rng, 5, 1)
    with mpmath.workdps(50):
        q = fifty_digits(as_mpf(drive), durations, mpmath.mpf(eps[0]), mpmath.mpf(delta[0]))
        total = mpmath.eye(2)
        for (wx, wy), duration in zip(as_mpf(drive), durations, strict=True):
            e, d, t = 1 + mpmath.mpf(eps[0]), mpmath.mpf(delta[0]), mpmath.mpf(duration)
            h = mpmath.matrix([[d, e * (wx - 1j * wy)], [e * (wx + 1j * wy), -d]])
            total = mpmath.expm(-0.5j * h * t) * total
        expected = [
            total[0, 0].real,
            -total[1, 0].imag,
            total[1, 0].real,
            -total[0, 0].imag,
        ]
        assert max(abs(a - b) for a, b in zip(q, expected, strict=True)) < mpmath.mpf("1e-45")


def test_chain_against_fifty_digits(rng):
    drive, durations, eps, delta = random_case(rng, 60, 25)
    found = ends(drive, durations, eps, delta)
    with mpmath.workdps(50):
        for k in (0, 7, 24):
            exact = fifty_digits(as_mpf(drive), durations, mpmath.mpf(eps[k]), mpmath.mpf(delta[k]))
            off = max(abs(mpmath.mpf(float(f)) - e) for f, e in zip(found[k], exact, strict=True))
            assert off < PER_SLICE * 10


def test_norm_stays_one_over_ten_thousand_slices(rng):
    drive, durations, eps, delta = random_case(rng, 10_000, 3)
    assert np.max(np.abs(np.sum(ends(drive, durations, eps, delta) ** 2, axis=1) - 1)) < LONG_CHAIN


def test_pulse_then_reversed_is_the_identity(rng):
    """Backwards in time with every rate's sign turned, detuning too."""
    drive, durations, eps, delta = random_case(rng, 60, 25)
    there = ends(drive, durations, eps, delta)
    back = ends(-drive[::-1], durations[::-1], eps, -delta)
    assert np.max(np.abs(product(back, there) - IDENTITY)) < PER_SLICE * 60
    assert np.max(np.abs(back - conjugate(there))) < PER_SLICE * 60


def test_swapping_x_and_y_turns_the_sphere_over(rng):
    """Half a turn about the line x = y takes x to y, y to x and z to -z."""
    drive, durations, eps, delta = random_case(rng, 60, 25)
    plain = ends(drive, durations, eps, delta)
    swapped = ends(drive[:, ::-1], durations, eps, -delta)
    assert np.max(np.abs(swapped - plain[:, [0, 2, 1, 3]] * [1, 1, 1, -1])) < PER_SLICE * 60


def test_slices_that_turn_far_are_cut(rng):
    """A detuning of 40 rad per slice: the series alone would fail, cut slices do not."""
    drive, durations = rng.uniform(-1, 1, (20, 2)), rng.uniform(0.5, 1.0, 20)
    eps, delta = np.array([-0.1, 0.0, 0.1]), np.array([-40.0, 0.0, 40.0])
    expected = textbook(drive, durations, eps, delta)
    turn = float(np.hypot(1.1 * math.sqrt(2), 40.0))
    found = matrix(ends(drive, durations, eps, delta, turn))
    assert np.max(np.abs(found - expected)) < PER_SLICE * 20 * math.ceil(turn)
    uncut = matrix(ends(drive, durations, eps, delta, TURN))
    assert np.max(np.abs(uncut - expected)) > 1  # so the cut is what makes it right


# ---- the adjoint


def plain_product(drive, durations, eps, delta):
    """The textbook way in JAX, without any of the engine: sines, square roots, stored chain."""

    def step(q, slice_):
        (wx, wy), duration = slice_
        h = 0.5 * duration * jnp.stack([(1 + eps) * wx, (1 + eps) * wy, delta])
        angle = jnp.sqrt(jnp.sum(h * h, axis=0))
        w, (x, y, z) = jnp.cos(angle), jnp.sin(angle) / angle * h
        return jnp.stack(
            [
                w * q[0] - x * q[1] - y * q[2] - z * q[3],
                w * q[1] + x * q[0] + y * q[3] - z * q[2],
                w * q[2] - x * q[3] + y * q[0] + z * q[1],
                w * q[3] + x * q[2] - y * q[1] + z * q[0],
            ]
        ), None

    start = jnp.zeros((4, eps.size)).at[0].set(1.0)
    return jax.lax.scan(step, start, (drive, durations))[0]


@pytest.mark.parametrize(("slices", "grid"), [(37, 5), (64, 1), (60, 25), (12, 129)])
def test_adjoint_is_reverse_mode_of_a_plain_product(rng, slices, grid):
    case = random_case(rng, slices, grid)
    direction = rng.normal(size=(4, grid))

    def cost(drive):
        return linear(plain_product(drive, *case[1:]), direction)

    expected = np.asarray(jax.jit(jax.grad(cost))(case[0]))
    found = slope_of(*case, direction)
    assert np.max(np.abs(found - expected)) < GRADIENT * slices * math.sqrt(grid)


@pytest.mark.parametrize("drive_off", [False, True])
def test_adjoint_is_the_central_difference_in_fifty_digits(rng, drive_off):
    """A step of 1e-20 in 50-digit arithmetic: the difference is exact to 1e-30."""
    drive, durations, eps, delta = random_case(rng, 60, 25)
    if drive_off:
        drive = np.zeros_like(drive)
    direction = np.zeros((4, 25))
    direction[:, 11] = rng.normal(size=4)
    found = slope_of(drive, durations, eps, delta, direction)
    with mpmath.workdps(50):
        step = mpmath.mpf("1e-20")
        e, d = mpmath.mpf(eps[11]), mpmath.mpf(delta[11])
        for k, c in [(0, 0), (0, 1), (31, 0), (59, 1)]:
            sides = []
            for sign in (1, -1):
                moved = as_mpf(drive)
                moved[k][c] += sign * step
                q = fifty_digits(moved, durations, e, d)
                sides.append(
                    sum(a * mpmath.mpf(b) for a, b in zip(q, direction[:, 11], strict=True))
                )
            exact = (sides[0] - sides[1]) / (2 * step)
            assert abs(found[k, c] - exact) < GRADIENT


def test_adjoint_is_the_central_difference_in_double_precision(rng):
    """The plain check, every component: good to the cube root of round-off squared."""
    drive, durations, eps, delta = random_case(rng, 12, 3)
    direction, step = rng.normal(size=(4, 3)), 1e-5
    found = slope_of(drive, durations, eps, delta, direction)
    for k, c in np.ndindex(drive.shape):
        sides = []
        for sign in (1, -1):
            moved = drive.copy()
            moved[k, c] += sign * step
            sides.append(np.sum(ends(moved, durations, eps, delta) * direction.T))
        assert found[k, c] == pytest.approx((sides[0] - sides[1]) / (2 * step), abs=1e-9)


def test_no_drive_and_no_detuning_has_a_finite_slope():
    """Where the textbook form divides zero by zero: dw = 0, d(x, y, z) = duration / 2."""
    drive, durations = np.zeros((60, 2)), np.full(60, 0.4)
    eps, delta = np.zeros(25), np.zeros(25)
    assert np.array_equal(ends(drive, durations, eps, delta), np.tile(IDENTITY, (25, 1)))
    for component, expected in [(0, (0, 0)), (1, (0.2, 0)), (2, (0, 0.2)), (3, (0, 0))]:
        direction = np.zeros((4, 25))
        direction[component, 0] = 1.0
        slope = slope_of(drive, durations, eps, delta, direction)
        assert np.max(np.abs(slope - expected)) < ONE_SLICE


@pytest.mark.parametrize("far", [False, True])
def test_errors_and_jacobian_are_those_of_the_chain(rng, far):
    """Row by row and point by point, against reverse mode through ``propagate``."""
    slices, grid = 20, 3
    drive, durations, eps, delta = random_case(rng, slices, grid)
    turn = TURN
    if far:
        delta, turn = np.array([-6.5, 0.1, 6.5]), 6.6
    rows = rng.normal(size=(3, 4, grid))

    def errors_of(drive):
        q = propagate(drive, durations, eps, delta, turn)
        return sum(rows[:, i] * q[i] for i in range(4))

    errors, jacobian = jacobian_of(drive, durations, eps, delta, rows, turn)
    assert jacobian.shape == (slices, 2, 3, grid)
    assert np.max(np.abs(errors - errors_of(drive))) < PER_SLICE * slices
    expected = jax.jit(jax.jacrev(errors_of))(drive)  # [row, grid, slice, 2]
    assert np.max(np.abs(jnp.moveaxis(jacobian, (2, 3), (0, 1)) - expected)) < GRADIENT * slices


def test_memory_of_the_adjoint_does_not_grow_with_the_slices():
    """What the compiler sets aside for cost and slope, beside drive and slope themselves.

    A stored chain takes 4 doubles a slice and grid point: 3200 bytes a slice here.
    """
    eps = delta = jax.ShapeDtypeStruct((100,), float)

    def set_aside(slices):
        def cost(drive, durations, eps, delta):
            return jnp.sum(propagate(drive, durations, eps, delta, TURN)[3] ** 2)

        shapes = jax.ShapeDtypeStruct((slices, 2), float), jax.ShapeDtypeStruct((slices,), float)
        compiled = jax.jit(jax.value_and_grad(cost)).lower(*shapes, eps, delta).compile()
        return compiled.memory_analysis().temp_size_in_bytes

    a_slice = (set_aside(10_000) - set_aside(1_000)) / 9_000
    assert a_slice <= 12 * 8  # a few copies of the slice's own numbers, whatever the grid


# ---- precision


def test_single_precision_is_refused():
    """Infidelities below 1e-7 would be noise: better no answer than a wrong one."""
    case = [np.zeros((2, 2)), np.ones(2), np.zeros(1), np.zeros(1)]
    jax.config.update("jax_enable_x64", False)
    try:
        with pytest.raises(RuntimeError, match="float64"):
            propagate(*case, TURN)
        with pytest.raises(RuntimeError, match="float64"):
            errors_and_jacobian(*case, np.zeros((3, 4, 1)), TURN)
    finally:
        jax.config.update("jax_enable_x64", True)
