"""Damped Gauss-Newton steps on power means of the infidelity (Levenberg, Marquardt).

A shaped pulse has far more parameters than its rotation errors have components, and these are
smooth and nearly linear along a step: second-order information is there for the price of one
backward pass per error component. The power mean ``(sum w |r|^2p)^(1/p)`` is brought to least
squares point by point: with ``n = |r|^2 / max |r|^2`` and the unit vector ``u = r/|r|``

    weights    f^2 = w n^(p-1) / sum w n^(p-1)
    jacobian   f (1 + (sqrt(2p - 1) - 1) u u^T) J
    residual   f r / sqrt(2p - 1)

whose normal equations hold the gradient and the positive part of the Hessian of the mean.

Source:
    Levenberg, Quart. Appl. Math. 2, 164 (1944); Marquardt, J. SIAM 11, 431 (1963). The point-wise
    form for power means: derived here.
"""

from __future__ import annotations

from functools import partial
from typing import NamedTuple

import jax
import jax.numpy as jnp

from shaper.drive.bound import quadratures
from shaper.physics import two_level
from shaper.search.objective import Problem, infidelities, log_power_mean

Array = jax.Array

FIRST_DAMPING = 1e-2  # against jacobians of order one rad per rad
_EASE, _TIGHTEN = 1 / 3, 4.0
_DAMPING_RANGE = (1e-14, 1e4)
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


def _weighted(problem: Problem, parameters: Array, power: Array) -> tuple[Array, Array]:
    """Jacobian [residual, parameter] and residual [residual] of the least-squares form."""
    drive, pull_back = jax.vjp(lambda p: quadratures(p, problem.bound), parameters)
    errors, jacobian = two_level.errors_and_jacobian(
        drive,
        problem.durations,
        problem.eps,
        problem.delta,
        problem.rows,
        problem.longest_turn,
    )
    row, grid = errors.shape
    # one cotangent of the drive per error component: [residual, slice, 2]
    jacobian = jnp.moveaxis(jacobian.reshape(problem.slices, 2, row * grid), -1, 0)
    jacobian = jax.vmap(lambda g: pull_back(g)[0])(jacobian).reshape(row, grid, -1)
    squared = jnp.sum(errors * errors, axis=0)  # [grid]
    lean = problem.weight * (squared / (jnp.max(squared) + _TINY)) ** (power - 1)
    f = jnp.sqrt(lean / jnp.sum(lean))
    unit = errors / jnp.sqrt(squared + _TINY)
    along = jnp.einsum("rg,rgp->gp", unit, jacobian)
    stretch = jnp.sqrt(2 * power - 1)
    jacobian = f[:, None] * (jacobian + (stretch - 1) * unit[..., None] * along)
    return jacobian.reshape(row * grid, -1), (f * errors / stretch).ravel()


def _damped_step(jacobian: Array, residual: Array, damping: Array) -> Array:
    """The step [parameter] that minimizes |J s + r|^2 + damping |s|^2, in the smaller space."""
    count, parameters = jacobian.shape
    if count < parameters:
        normal = jacobian @ jacobian.T + damping * jnp.eye(count)
        factor = jax.scipy.linalg.cho_factor(normal)
        return -jacobian.T @ jax.scipy.linalg.cho_solve(factor, residual)
    normal = jacobian.T @ jacobian + damping * jnp.eye(parameters)
    factor = jax.scipy.linalg.cho_factor(normal)
    return -jax.scipy.linalg.cho_solve(factor, jacobian.T @ residual)


def _step(problem: Problem, power: Array, state: State) -> State:
    """One step of one start: taken if the cost falls, else the damping rises."""
    jacobian, residual = _weighted(problem, state.parameters, power)
    step = _damped_step(jacobian, residual, state.damping)
    trial = state.parameters + step.reshape(state.parameters.shape)
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
