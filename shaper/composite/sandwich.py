"""The analytic baseline: a z rotation as x between two quarter turns about y; any gate as Y-X-Y.

In time order ``y(+90) x(theta) y(-90)`` is ``z(+theta)``; the opposite order of signs is
``z(-theta)``.
"""

from __future__ import annotations

import math

import numpy as np

from shaper.composite.free_turn import shortest_over_free_turn
from shaper.composite.sequence import Sequence, from_turns, length
from shaper.rotation import about_z, canonical, conjugate, euler_yxy, product
from shaper.target import Target

_DEGENERATE = 1e-11  # rad; so close to 0 or pi the middle turn leaves only a + c or a - c fixed
_IN_PLANE = 1e-12  # z component of a rotation whose axis is taken to lie in the xy plane
_LEVEL = 1e-9  # relative; of ways of one length the one turn is taken
_SOURCE = "Euler angles; every one-qubit gate is y, x, y: Nielsen and Chuang, theorem 4.1"
_TURNS = {"circle": (0.0,), "box": (0.0, math.pi / 4, -math.pi / 4)}


def sandwich(target: Target, bound: str) -> Sequence:
    """The shortest ``Y(a) X(b) Y(c)`` that meets the target, played at the bound.

    For z(theta) it is ``y(+90) x(theta) y(-90)``, theta wrapped to the shortest turn. In the box
    the axes are turned by 45 degrees, both quadratures at their bound, where that is shorter. With
    a free axis the shortest member is taken. Where one turn about an axis in the xy plane does,
    and is not longer, it is that. A target that doing nothing meets has no arcs.

    Args:
        target: what to do.
        bound: "circle" or "box".
    Returns:
        At most three arcs.
    Source:
        Nielsen and Chuang, Quantum Computation and Quantum Information, theorem 4.1 with the axes
        renamed; the turn by 45 degrees is our own.
    """
    if target.needs_no_pulse:
        return Sequence(np.zeros(0), np.zeros(0), _SOURCE, "sandwich")
    three = shortest_over_free_turn(
        target, lambda q: _shortest(q, bound), lambda sequence: length(sequence, bound)
    )
    one = one_turn(target)
    if one is not None and length(one, bound) <= length(three, bound) * (1 + _LEVEL):
        return one
    return three


def one_turn(target: Target) -> Sequence | None:
    """The target as a single turn about an axis in the xy plane, where there is one.

    With a free axis there always is: its turn can cancel the z component of the rotation.
    """
    q = target.quaternion
    if target.free_axis is not None:
        q = target.member(2 * math.atan2(-q[3], target.member(math.pi)[3]))
    w, x, y, z = canonical(q)
    if abs(z) > _IN_PLANE:
        return None
    return from_turns([(2 * math.atan2(math.hypot(x, y), w), math.atan2(y, x))], "", "sandwich")


def _shortest(q: np.ndarray, bound: str) -> Sequence:
    """Over the turns of the axes and both signs of the middle angle; ties: the first one."""
    z_angle = Target(q).z_angle
    best: Sequence | None = None
    for turn in _TURNS[bound]:
        if z_angle is not None:
            solutions = [(math.pi / 2, z_angle, -math.pi / 2)]
        else:
            solutions = _yxy_solutions(product(about_z(-turn), product(q, about_z(turn))))
        for a, b, c in solutions:
            y, x = turn + math.pi / 2, turn
            found = from_turns([(a, y), (b, x), (c, y)], _SOURCE, "sandwich")
            if best is None or length(found, bound) < length(best, bound) - 1e-12:
                best = found
    assert best is not None
    return best


def _yxy_solutions(q: np.ndarray) -> list[tuple[float, float, float]]:
    """Both y-x-y angles of a rotation, each wrapped to the shortest turn; first a > 0."""
    a, b, c = euler_yxy(q)
    if b < _DEGENERATE or math.pi - b < _DEGENERATE:
        # only the sum (the difference) of the outer turns counts: all of it goes into the last,
        # exactly: what is left of the rotation once the middle turn is taken out
        b = 0.0 if b < 1 else math.pi
        middle = np.array([math.cos(b / 2), math.sin(b / 2), 0.0, 0.0])
        rest = product(q, conjugate(middle))
        return [(0.0, b, _wrap(2 * math.atan2(rest[2], rest[0])))]
    one = (_wrap(a), b, _wrap(c))
    other = (_wrap(a + math.pi), -b, _wrap(c + math.pi))
    return sorted((one, other), key=lambda turn: turn[0] < 0)


def _wrap(angle: float) -> float:
    """The same rotation by the shortest turn, in [-pi, pi]."""
    return math.remainder(angle, 2 * math.pi)
