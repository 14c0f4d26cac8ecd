"""The shortest way to a target that accepts a final turn about a free axis."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import TypeVar

import numpy as np
from scipy.optimize import minimize_scalar

from shaper.target import Target

_GRID = 240  # turns tried before polishing; lengths have a few valleys in one turn, never dozens
_VALLEYS = 4  # polished: the lowest ones of the grid
_ANGLE_TOLERANCE = 1e-12  # rad; at a kink the length is as exact as the angle

Way = TypeVar("Way")


def shortest_over_free_turn(
    target: Target, way: Callable[[np.ndarray], Way], length_of: Callable[[Way], float]
) -> Way:
    """The shortest of the ways to all accepted rotations.

    A grid over one full turn finds the valleys, a bounded one-dimensional search polishes the
    lowest. Without a free axis there is one way, and no search.

    Args:
        target: with or without a free axis.
        way: from the quaternion [4] to be reached to a way there.
        length_of: of a way; what is minimized.
    Source:
        Brent, Algorithms for Minimization without Derivatives, chapter 5 (bounded search).
    """
    if target.free_axis is None:
        return way(target.quaternion)

    def cost(turn: float) -> float:
        return length_of(way(target.member(turn)))

    step = 2 * math.pi / _GRID
    turns = step * np.arange(_GRID)
    costs = np.array([cost(turn) for turn in turns])
    valley = (costs <= np.roll(costs, 1)) & (costs <= np.roll(costs, -1))
    best_cost, best_turn = min(zip(costs, turns, strict=True))
    for turn in turns[valley][np.argsort(costs[valley])][:_VALLEYS]:
        found = minimize_scalar(
            cost,
            bounds=(turn - step, turn + step),
            method="bounded",
            options={"xatol": _ANGLE_TOLERANCE, "maxiter": 200},
        )
        if found.fun < best_cost:
            best_cost, best_turn = found.fun, found.x
    return way(target.member(best_turn))
