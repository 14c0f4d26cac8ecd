"""The starts dealt out to the processor's cores: a batch and a thread for each.

The starts know nothing of each other, and compiled programs run without Python's lock. So threads
of one process do, and share what is compiled; smaller batches also sit better in the caches.
"""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor
from types import ModuleType

import jax
import numpy as np

from shaper.search.objective import Problem

_LARGEST = 8  # starts; of more, the compiler deals single kernels out, which take microseconds


def cores() -> int:
    """How many cores this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def batches(starts: int) -> list[np.ndarray]:
    """Indices of the starts of each batch, all of one size; the last may hold some twice."""
    size = min(-(-starts // cores()), _LARGEST)
    return [np.arange(first, first + size) % starts for first in range(0, starts, size)]


def advance(method: ModuleType, problem: Problem, state, power: float, steps: int):
    """``method.advance`` for all starts, on all cores; arguments and result as there, as arrays."""
    starts = len(state.parameters)
    parts = [jax.tree.map(lambda leaf, part=part: leaf[part], state) for part in batches(starts)]
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
