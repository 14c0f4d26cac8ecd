"""Damped Gauss-Newton steps on power means of the infidelity (Levenberg, Marquardt).

A shaped pulse has far more parameters than its rotation errors have components, and these are
smooth and nearly linear along a step: second-order information is there for the price of one
backward pass per error component. The power mean ``(sum w |r|^2p)^(1/p)`` is brought to least
squares point by point: with ``n = |r|^2 / max |r|^2`` and the unit vector ``u = r/|r|``

    weights    f^2 = w n^(p-1) / sum w n^(p-1)
    jacobian   f (1 + (sqrt(2p - 1) - 1) u u^T) J
    residual   f r / sqrt(2p - 1)

whose normal equations hold the gradient and the positive part of the Hessian of the mean.

The valleys of this landscape are long and curved. A second solve with the same factor bends each
step along them (geodesic acceleration): the errors' second derivative along the step ``v``, from
one more look at a point a little ahead, gives ``a = -1/2 (J^T J + damping)^-1 J^T r''(v, v)``.

Source:
    Levenberg, Quart. Appl. Math. 2, 164 (1944); Marquardt, J. SIAM 11, 431 (1963); acceleration:
    Transtrum, Machta and Sethna, Phys. Rev. E 83, 036701 (2011). The point-wise form for power
    means: derived here.
"""

from __future__ import annotations

from functools import partial
from typing import NamedTuple

import jax
import jax.numpy as jnp
import numpy as np

from shaper.drive.line import gathered
from shaper.search.objective import (
    Problem,
    at_qubit,
    drive_of,
    errors_and_jacobian,
    log_power_mean,
    measure,
    rotation_errors,
)

Array = jax.Array

FIRST_DAMPING = 1e-2  # against jacobians of order one rad per rad
_EASE, _TIGHTEN = 0.5, 2.0
_DAMPING_RANGE = (1e-14, 1e4)
_AHEAD = 0.1  # of the step, where the second derivative is felt
_MOST_BEND = 0.375  # of the step's length; more, and the second order is not to be believed
_TINY = 1e-300


class State(NamedTuple):
    """Where every start stands.

    Attributes:
        parameters: [start, slice, 2] rad.
        damping: [start] unitless.
        cost: [start] logarithm of the power mean, wishes added.
        worst: [start] largest infidelity on the grid.
    """

    parameters: Array
    damping: Array
    cost: Array
    worst: Array


def begin(problem: Problem, parameters: np.ndarray) -> State:
    """The state before the first step; parameters [start, slice, 2] rad. Nothing is computed."""
    starts = len(parameters)
    unknown = np.full(starts, np.nan)
    return State(parameters, np.full(starts, FIRST_DAMPING), unknown, unknown)


def _lean(problem: Problem, errors: Array, power: Array):
    """The linear map that brings the power mean to least squares, at these errors.

    Returns:
        the map of [..., row, grid] arrays, and the residual [row, grid].
    """
    squared = jnp.sum(errors * errors, axis=0)  # [grid]
    lean = problem.weight * (squared / (jnp.max(squared) + _TINY)) ** (power - 1)
    f = jnp.sqrt(lean / jnp.sum(lean))
    unit = errors / jnp.sqrt(squared + _TINY)
    stretch = jnp.sqrt(2 * power - 1)

    def apply(change: Array) -> Array:
        along = jnp.sum(unit * change, axis=-2, keepdims=True)
        return f * (change + (stretch - 1) * unit * along)

    return apply, f * errors / stretch


def _jacobian(problem: Problem, parameters: Array) -> tuple[Array, Array]:
    """Errors [row, point] and their derivative [slice, 2, row, point].

    Points stay the last axis throughout, the long one that the processor's vectors run along.
    """
    drive = drive_of(problem, parameters)
    arriving, durations = at_qubit(problem, drive)
    errors, jacobian = errors_and_jacobian(problem, arriving, durations)
    if problem.kernel is not None:
        jacobian = gathered(problem.kernel, jacobian)
    # a slice's drive depends on its own two parameters only
    turned = [
        jax.jvp(partial(drive_of, problem), (parameters,), (jnp.zeros_like(drive) + along,))[1]
        for along in jnp.eye(2)
    ]
    jacobian = [sum(slope[:, c, None, None] * jacobian[:, c] for c in (0, 1)) for slope in turned]
    return errors, jnp.stack(jacobian, axis=1)


def _wish_equations(problem: Problem, parameters: Array, size: Array) -> tuple[Array, Array]:
    """The wishes in least-squares form, beside errors of mean square ``size``.

    Returns:
        jacobian [parameter, equation] and residual [equation].
    """
    drive, pull_back = jax.vjp(lambda p: drive_of(problem, p), parameters)
    matrix = jnp.concatenate([jnp.sqrt(w * size) * m for m, w in problem.wishes.values()])
    blocks = [  # the same equations for x and for y
        jnp.stack([matrix, none], axis=-1)[..., order]
        for none in [jnp.zeros_like(matrix)]
        for order in ([0, 1], [1, 0])
    ]
    jacobian = jax.vmap(lambda g: pull_back(g)[0])(jnp.concatenate(blocks))
    return jacobian.reshape(len(jacobian), -1).T, (matrix @ drive).T.ravel()


# One start after the other: on a batch, LAPACK's wrapper waits for threads of the pool it runs in,
# and two programs that do so at once wait for each other for ever.
_cholesky = jax.custom_batching.sequential_vmap(jnp.linalg.cholesky)


@jax.custom_batching.sequential_vmap
def _solve(factor: Array, r: Array) -> Array:
    return jax.scipy.linalg.cho_solve((factor, True), r)


def _damped_solver(jacobian: Array, damping: Array):
    """r -> the step s [parameter] with least |J^T s + r|^2 + damping |s|^2, in the smaller space.

    The jacobian is [parameter, equation].
    """
    parameters, count = jacobian.shape
    if count < parameters:
        factor = _cholesky(jacobian.T @ jacobian + damping * jnp.eye(count))
        return lambda r: -jacobian @ _solve(factor, r)
    factor = _cholesky(jacobian @ jacobian.T + damping * jnp.eye(parameters))
    return lambda r: -_solve(factor, jacobian @ r)


def _accelerated_step(problem: Problem, power: Array, parameters: Array, damping: Array) -> Array:
    """The damped Gauss-Newton step with its bend, [slice, 2] rad."""
    errors, jacobian = _jacobian(problem, parameters)
    lean, residual = _lean(problem, errors, power)
    jacobian, residual = lean(jacobian).reshape(-1, errors.size), residual.ravel()
    if problem.wishes:
        found = jnp.sum(errors**2, axis=0)
        mean = jnp.exp(log_power_mean(found, problem.weight, power))
        size = (2 * power - 1) * jnp.sum(residual**2) * (1 + problem.floor / mean)
        wish_jacobian, wish_residual = _wish_equations(problem, parameters, size)
        jacobian = jnp.concatenate([jacobian, wish_jacobian], axis=1)
        residual = jnp.concatenate([residual, wish_residual])
    solve = _damped_solver(jacobian, damping)
    step = solve(residual)
    ahead = rotation_errors(problem, parameters + _AHEAD * step.reshape(parameters.shape))
    change = lean(ahead - errors).ravel() / _AHEAD
    curvature = 2 / _AHEAD * (change - step @ jacobian[:, : errors.size])
    curvature = jnp.pad(curvature, (0, len(residual) - errors.size))  # wishes are nearly linear
    bend = 0.5 * solve(curvature)
    most = _MOST_BEND * jnp.linalg.norm(step)
    bend = bend * jnp.minimum(1.0, most / (jnp.linalg.norm(bend) + _TINY))
    return (step + bend).reshape(parameters.shape)


def _step(problem: Problem, power: Array, state: State) -> State:
    """One step of one start: taken if the cost falls, else the damping rises."""
    trial = state.parameters + _accelerated_step(problem, power, state.parameters, state.damping)
    cost, worst = measure(problem, power, trial)
    better = cost < state.cost  # false for nan
    pick = partial(jnp.where, better)
    damping = jnp.clip(state.damping * pick(_EASE, _TIGHTEN), *_DAMPING_RANGE)
    return State(
        pick(trial, state.parameters), damping, pick(cost, state.cost), pick(worst, state.worst)
    )


@partial(jax.jit, static_argnames="steps")
def advance(problem: Problem, state: State, power: Array, steps: int) -> tuple[State, Array]:
    """Some steps of all starts at once, as one compiled program.

    Args:
        problem: the job on its grid.
        state: where the starts stand.
        power: [] of the mean, >= 1.
        steps: how many.
    Returns:
        the new state, and the cost before and after each step, [1 + step, start].
    """
    cost, worst = jax.vmap(partial(measure, problem, power))(state.parameters)
    state = state._replace(cost=cost, worst=worst)
    every = jax.vmap(partial(_step, problem, power))

    def body(state, _):
        state = every(state)
        return state, state.cost

    state, costs = jax.lax.scan(body, state, None, length=steps)
    return state, jnp.concatenate([cost[None], costs])
