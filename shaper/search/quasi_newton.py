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
import numpy as np
import optax

from shaper.search.objective import Problem, measure

Array = jax.Array

_MEMORY = 12
_LINE_SEARCH_STEPS = 12


class State(NamedTuple):
    """Where every start stands.

    Attributes:
        parameters: [start, slice, 2] rad.
        memory: of the optimizer, every leaf with a leading start axis.
        cost: [start] logarithm of the power mean, wishes added.
        worst: [start] largest infidelity on the grid.
    """

    parameters: Array
    memory: optax.OptState
    cost: Array
    worst: Array


def _optimizer() -> optax.GradientTransformationExtraArgs:
    search = optax.scale_by_zoom_linesearch(max_linesearch_steps=_LINE_SEARCH_STEPS)
    return optax.lbfgs(memory_size=_MEMORY, linesearch=search)


def begin(problem: Problem, parameters: np.ndarray) -> State:
    """The state before the first step; parameters [start, slice, 2] rad."""
    unknown = np.full(len(parameters), np.nan)
    memory = jax.vmap(_optimizer().init)(jnp.asarray(parameters))
    return State(parameters, jax.tree.map(np.asarray, memory), unknown, unknown)


def _step(problem: Problem, power: Array, parameters: Array, memory: optax.OptState):
    def cost(p: Array) -> Array:
        return measure(problem, power, p)[0]

    value, slope = optax.value_and_grad_from_state(cost)(parameters, state=memory)
    update, memory = _optimizer().update(
        slope, memory, parameters, value=value, grad=slope, value_fn=cost
    )
    return optax.apply_updates(parameters, update), memory, value


@partial(jax.jit, static_argnames="steps")
def advance(problem: Problem, state: State, power: Array, steps: int) -> tuple[State, Array]:
    """Some steps of all starts at once, as one compiled program.

    Args:
        problem: the job on its grid.
        state: where the starts stand; its memory must be of the same power.
        power: [] of the mean, >= 1.
        steps: how many.
    Returns:
        the new state, and the cost before and after each step, [1 + step, start].
    """
    every = jax.vmap(partial(_step, problem, power))

    def body(carry, _):
        parameters, memory, value = every(*carry)
        return (parameters, memory), value

    carry, costs = jax.lax.scan(body, (state.parameters, state.memory), None, length=steps)
    cost, worst = jax.vmap(partial(measure, problem, power))(carry[0])
    return State(*carry, cost, worst), jnp.concatenate([costs, cost[None]])
