"""The shortest time in which a target can be met at all (circle), or is known to be (box)."""

from __future__ import annotations

from shaper.composite.box import shortest_box
from shaper.composite.geodesic import time_optimal
from shaper.composite.sequence import length
from shaper.target import Target


def limit(target: Target, bound: str) -> float:
    """Shortest duration in units of 1/W_max.

    Args:
        target: on resonance, without errors.
        bound: "circle": time-optimal, published; "box": the best known.
    """
    if bound == "circle":
        return time_optimal(target).length
    return length(shortest_box(target), "box")
