"""The starts dealt out to the processor's cores: small batches, and a thread for each core.

The starts know nothing of each other, and compiled programs run without Python's lock. So threads
of one process do, and share what is compiled; small batches also sit better in the caches.
"""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor
from types import ModuleType

import jax
import numpy as np

from shaper.search.objective import Problem

_LARGEST = 8  # starts
_LONGEST = 128  # starts times grid points: long enough for the processor's vectors


def cores() -> int:
    """How many cores this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def batches(starts: int, points: int) -> list[np.ndarray]:
    """Indices of the starts of each batch, all of one size; the last may hold some twice.

    Does not depend on the number of cores, so that results do not either.

    Args:
        starts: how many there are.
        points: of the grid.
    """
    largest = min(_LARGEST, max(1, _LONGEST // points))
    size = -(-starts // -(-starts // largest))
    return [np.arange(first, first + size) % starts for first in range(0, starts, size)]


def advance(method: ModuleType, problem: Problem, state, power: float, steps: int):
    """``method.advance`` for all starts, on all cores; arguments and result as there, as arrays."""
    starts = len(state.parameters)
    parts = [
        jax.tree.map(lambda leaf, chosen=chosen: leaf[chosen], state)
        for chosen in batches(starts, problem.eps.size)
    ]
    # once, or each thread would compile it
    method.advance.lower(problem, parts[0], power, steps).compile()

    def one(part):
        return jax.tree.map(np.asarray, method.advance(problem, part, power, steps))

    if len(parts) == 1:
        return one(parts[0])
    with ThreadPoolExecutor(cores()) as threads:
        states, costs = zip(*threads.map(one, parts), strict=True)
    state = jax.tree.map(lambda *leaves: np.concatenate(leaves)[:starts], *states)
    return state, np.concatenate(costs, axis=1)[:, :starts]
