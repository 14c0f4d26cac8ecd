"""Limited-memory quasi-Newton steps (L-BFGS), for problems whose jacobians would be too large.

Needs only the gradient, so memory and time grow with slices times grid points and no faster.

Source:
    Liu and Nocedal, Math. Program. 45, 503 (1989); the implementation is optax's, with its zoom
    line search.
"""

from __future__ import annotations

from functools import partial
from typing import NamedTuple

import jax
import jax.numpy as jnp
import optax

from shaper.search.objective import Problem, infidelities, log_power_mean

Array = jax.Array

_MEMORY = 12
_LINE_SEARCH_STEPS = 12


class State(NamedTuple):
    """Where every start stands.

    Attributes:
        parameters: [start, slice, 2] rad.
        memory: of the optimizer, every leaf with a leading start axis.
        cost: [start] logarithm of the power mean.
        worst: [start] largest infidelity on the grid.
    """

    parameters: Array
    memory: optax.OptState
    cost: Array
    worst: Array


def _optimizer() -> optax.GradientTransformationExtraArgs:
    search = optax.scale_by_zoom_linesearch(max_linesearch_steps=_LINE_SEARCH_STEPS)
    return optax.lbfgs(memory_size=_MEMORY, linesearch=search)


def _cost(problem: Problem, power: Array, parameters: Array) -> Array:
    return log_power_mean(infidelities(problem, parameters), problem.weight, power)


def _measure(problem: Problem, power: Array, parameters: Array) -> tuple[Array, Array]:
    found = infidelities(problem, parameters)
    return log_power_mean(found, problem.weight, power), jnp.max(found)


@jax.jit
def begin(problem: Problem, parameters: Array, power: Array) -> State:
    """The state before the first step; parameters [start, slice, 2] rad."""
    parameters = jnp.asarray(parameters)
    cost, worst = jax.vmap(partial(_measure, problem, power))(parameters)
    return State(parameters, jax.vmap(_optimizer().init)(parameters), cost, worst)


def _step(problem: Problem, power: Array, state: State) -> State:
    cost = partial(_cost, problem, power)
    value, slope = optax.value_and_grad_from_state(cost)(state.parameters, state=state.memory)
    update, memory = _optimizer().update(
        slope, state.memory, state.parameters, value=value, grad=slope, value_fn=cost
    )
    return State(optax.apply_updates(state.parameters, update), memory, value, state.worst)


@partial(jax.jit, static_argnames="steps")
def advance(problem: Problem, state: State, power: Array, steps: int) -> tuple[State, Array]:
    """Some steps of all starts at once, as one compiled program.

    Args:
        problem: the job on its grid.
        state: where the starts stand, for the same power.
        power: [] of the mean, >= 1.
        steps: how many.
    Returns:
        the new state, and the cost before each step, [step, start].
    """
    every = jax.vmap(partial(_step, problem, power))

    def body(state, _):
        state = every(state)
        return state, state.cost

    state, costs = jax.lax.scan(body, state, None, length=steps)
    cost, worst = jax.vmap(partial(_measure, problem, power))(state.parameters)
    return state._replace(cost=cost, worst=worst), costs
