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

from shaper.drive.bound import quadratures
from shaper.physics import two_level
from shaper.search.objective import Problem, infidelities, log_power_mean, rotation_errors

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
        cost: [start] logarithm of the power mean.
        worst: [start] largest infidelity on the grid.
    """

    parameters: Array
    damping: Array
    cost: Array
    worst: Array


def _measure(problem: Problem, parameters: Array, power: Array) -> tuple[Array, Array]:
    found = infidelities(problem, parameters)
    return log_power_mean(found, problem.weight, power), jnp.max(found)


@jax.jit
def begin(problem: Problem, parameters: Array, power: Array) -> State:
    """The state before the first step; parameters [start, slice, 2] rad."""
    cost, worst = jax.vmap(lambda p: _measure(problem, p, power))(parameters)
    damping = jnp.full(parameters.shape[0], FIRST_DAMPING)
    return State(parameters, damping, cost, worst)


def _lean(problem: Problem, errors: Array, power: Array):
    """The linear map that brings the power mean to least squares, at these errors.

    Returns:
        the map of [row, grid, ...] arrays, and the residual [row, grid].
    """
    squared = jnp.sum(errors * errors, axis=0)  # [grid]
    lean = problem.weight * (squared / (jnp.max(squared) + _TINY)) ** (power - 1)
    f = jnp.sqrt(lean / jnp.sum(lean))
    unit = errors / jnp.sqrt(squared + _TINY)
    stretch = jnp.sqrt(2 * power - 1)

    def apply(change: Array) -> Array:
        along = jnp.einsum("rg,rg...->g...", unit, change)
        stretched = change + (stretch - 1) * jnp.einsum("rg,g...->rg...", unit, along)
        return jnp.einsum("g,rg...->rg...", f, stretched)

    return apply, f * errors / stretch


def _jacobian(problem: Problem, parameters: Array) -> tuple[Array, Array]:
    """Errors [row, grid] and their derivative [row, grid, parameter]."""
    drive, pull_back = jax.vjp(lambda p: quadratures(p, problem.bound), parameters)
    errors, jacobian = two_level.errors_and_jacobian(
        drive,
        problem.durations,
        problem.eps,
        problem.delta,
        problem.rows,
        problem.longest_turn,
    )
    # one cotangent of the drive per error component: [residual, slice, 2]
    jacobian = jnp.moveaxis(jacobian.reshape(problem.slices, 2, -1), -1, 0)
    jacobian = jax.vmap(lambda g: pull_back(g)[0])(jacobian)
    return errors, jacobian.reshape(*errors.shape, -1)


def _damped_solver(jacobian: Array, damping: Array):
    """r -> the step s [parameter] with least |J s + r|^2 + damping |s|^2, in the smaller space."""
    count, parameters = jacobian.shape
    if count < parameters:
        factor = jax.scipy.linalg.cho_factor(jacobian @ jacobian.T + damping * jnp.eye(count))
        return lambda r: -jacobian.T @ jax.scipy.linalg.cho_solve(factor, r)
    factor = jax.scipy.linalg.cho_factor(jacobian.T @ jacobian + damping * jnp.eye(parameters))
    return lambda r: -jax.scipy.linalg.cho_solve(factor, jacobian.T @ r)


def _accelerated_step(problem: Problem, power: Array, parameters: Array, damping: Array) -> Array:
    """The damped Gauss-Newton step with its bend, [slice, 2] rad."""
    errors, jacobian = _jacobian(problem, parameters)
    lean, residual = _lean(problem, errors, power)
    jacobian = lean(jacobian).reshape(errors.size, -1)
    solve = _damped_solver(jacobian, damping)
    step = solve(residual.ravel())
    ahead = rotation_errors(problem, parameters + _AHEAD * step.reshape(parameters.shape))
    change = lean(ahead - errors).ravel() / _AHEAD
    bend = 0.5 * solve(2 / _AHEAD * (change - jacobian @ step))
    most = _MOST_BEND * jnp.linalg.norm(step)
    bend = bend * jnp.minimum(1.0, most / (jnp.linalg.norm(bend) + _TINY))
    return (step + bend).reshape(parameters.shape)


def _step(problem: Problem, power: Array, state: State) -> State:
    """One step of one start: taken if the cost falls, else the damping rises."""
    trial = state.parameters + _accelerated_step(problem, power, state.parameters, state.damping)
    cost, worst = _measure(problem, trial, power)
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
        state: where the starts stand, for the same power.
        power: [] of the mean, >= 1.
        steps: how many.
    Returns:
        the new state, and the cost after each step, [step, start].
    """
    every = jax.vmap(partial(_step, problem, power))

    def body(state, _):
        state = every(state)
        return state, state.cost

    return jax.lax.scan(body, state, None, length=steps)
