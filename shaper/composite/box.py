"""The shortest pulses known under the box bound ``|Wx|, |Wy| <= W_max``.

The maximum principle leaves few structures: single axes; cyclic bang-bang through neighboring
corners of the box with equal inner arcs; a corner, an axis, a corner. Each is a turn by ``a``
about one direction, a middle part that depends on one angle ``t``, and a turn by ``c`` about a
last direction. The middle part follows from one scalar equation,

    e_last . R e_first = e_last . M(t) e_first,

a trigonometric polynomial in ``t`` whose roots are all found at once; then ``a`` and ``c`` follow
in closed form. So every solution of every structure is seen, none depends on a starting guess.
Best known, not proven shortest.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cache

import numpy as np

from shaper.composite.sandwich import sandwich
from shaper.composite.sequence import Sequence, from_turns, length
from shaper.rotation import IDENTITY, conjugate, product
from shaper.target import Target

SOURCE = (
    "Structures: Boscain and Mason, J. Math. Phys. 47, 062101 (2006), and Pontryagin's maximum "
    "principle for the box; solved here"
)
_ON_UNIT_CIRCLE = 1e-6  # a double root leaves the circle by the root of round-off
_FULL_TURN_HAIR = 1e-7  # rad; an arc this close below 2 pi is none, polishing mends the rest
_POLISHED = 8  # the shortest candidates, polished until one is exact
_EXACT = 1e-14  # rotation error after polishing
_NO_ARC = 1e-6  # rad; an arc this short may be round-off of a double root
_SINGULAR = 1e-7  # relative; along a family of solutions the step is zero
_NEWTON_STEPS = 12
_FREE_TURNS = 240  # turns about a free axis tried first
_ZOOM_TURNS = 24  # and in each round that narrows the lowest valley


@dataclass(frozen=True)
class _Structures:
    """All structures with the same number of inner arcs.

    Attributes:
        phases: [structure, arc] rad. Directions in time order; the inner arcs are all equal.
        harmonics: [structure, 2 m + 1] complex. Fourier coefficients of ``e_last . M(t) e_first``.
    """

    phases: np.ndarray
    harmonics: np.ndarray


def shortest_box(target: Target) -> Sequence:
    """The shortest known sequence under the box bound, never longer than the sandwich.

    Args:
        target: what to do; with a free axis the shortest member is taken.
    Returns:
        At most six arcs, each at its corner or axis of the box.
    Source:
        See the head of this file.
    """
    if target.needs_no_pulse:
        return Sequence(np.zeros(0), np.zeros(0), SOURCE, "shortest box")
    turn = _best_turn(target)
    found = _exact_sequence(target.member(turn))
    fallback = sandwich(target, "box")
    if found is None or length(fallback, "box") < length(found, "box") - 1e-12:
        return Sequence(fallback.angles, fallback.phases, SOURCE, "shortest box")
    return found


def _best_turn(target: Target) -> float:
    """The final turn about the free axis that shortens the pulse most, rad."""
    if target.free_axis is None:
        return 0.0
    width, best, points = 2 * math.pi, math.pi, _FREE_TURNS
    while width > 1e-11:  # each round narrows the valley; kinks need no derivative
        turns = best + width * (np.arange(points + 1) / points - 0.5)
        lengths = _candidates(np.stack([target.member(t) for t in turns]))[0].min(axis=1)
        best = float(turns[np.argmin(lengths)])
        width, points = 4 * width / points, _ZOOM_TURNS
    return best


@cache
def _all_structures() -> tuple[_Structures, ...]:
    quarter, corner = math.pi / 2, math.pi / 4
    three = [
        (start + around * quarter, start + (around + side) * quarter, start + last * quarter)
        for start in (0.0, corner)  # axes, and corners
        for around in range(4)
        for side in (1, -1)
        for last in (around, around + 2)
    ] + [
        (axis * quarter + first * corner, axis * quarter, axis * quarter + last * corner)
        for axis in range(4)
        for first in (1, -1)
        for last in (1, -1)
    ]
    groups = [np.array(three)]
    for arcs in (4, 5, 6):
        groups.append(
            np.array(
                [
                    [corner + (first + sense * k) * quarter for k in range(arcs)]
                    for first in range(4)
                    for sense in (1, -1)
                ]
            )
        )
    return tuple(_Structures(phases, _harmonics(phases)) for phases in groups)


def _directions(phases: np.ndarray) -> np.ndarray:
    """[*batch, 3] unit vectors in the xy plane."""
    return np.stack([np.cos(phases), np.sin(phases), np.zeros_like(phases)], axis=-1)


def _turn(angles: np.ndarray, phases: np.ndarray) -> np.ndarray:
    """[*batch, 4]: rotations by ``angles`` about directions in the xy plane."""
    half, phases = np.broadcast_arrays(np.asarray(angles) / 2, phases)
    sine = np.sin(half)
    return np.stack([np.cos(half), sine * np.cos(phases), sine * np.sin(phases), 0 * sine], axis=-1)


def _rotated(q: np.ndarray, vector: np.ndarray) -> np.ndarray:
    """[*batch, 3]: the vector turned by the quaternion."""
    w, v = q[..., :1], q[..., 1:]
    across = np.cross(v, vector)
    return vector + 2 * (w * across + np.cross(v, across))


def _middle(angles: np.ndarray, phases: np.ndarray) -> np.ndarray:
    """[*batch, 4]: the inner arcs, all by the same angle; phases [*batch, inner]."""
    total = _turn(angles, phases[..., 0])
    for k in range(1, phases.shape[-1]):
        total = product(_turn(angles, phases[..., k]), total)
    return total


def _harmonics(phases: np.ndarray) -> np.ndarray:
    """Fourier coefficients, highest first, of the scalar equation of each structure."""
    inner = phases.shape[1] - 2
    points = 2 * inner + 1
    t = 2 * math.pi * np.arange(points) / points  # [point]
    middle = _middle(
        t[None, :], np.broadcast_to(phases[:, None, 1:-1], (len(phases), points, inner))
    )
    first = np.broadcast_to(_directions(phases[:, None, 0]), middle.shape[:2] + (3,))
    values = np.sum(_directions(phases[:, None, -1]) * _rotated(middle, first), axis=-1)
    coefficients = np.fft.fft(values, axis=1) / points  # order 0, 1..m, -m..-1
    return np.concatenate([coefficients[:, inner::-1], coefficients[:, :inner:-1]], axis=1)


def _candidates(q: np.ndarray) -> tuple[np.ndarray, list]:
    """Lengths of all solutions of all structures, and how to make them.

    Args:
        q: [target, 4].
    Returns:
        lengths [target, candidate] in 1/W_max, inf where there is none, and the parts
        ``(phases [candidate, arc], angles [target, candidate, 3])`` per number of arcs.
    """
    lengths, parts = [], []
    for group in _all_structures():
        phases = group.phases
        inner = phases.shape[1] - 2
        first, last = _directions(phases[:, 0]), _directions(phases[:, -1])
        wanted = np.sum(last * _rotated(q[:, None, :], first[None]), axis=-1)  # [target, structure]
        t, real = _roots(group.harmonics, wanted)  # [target, structure, root]
        roots = t.shape[-1]
        wide = np.broadcast_to(phases[None, :, None, :], (*t.shape, phases.shape[1]))
        middle = _middle(t, wide[..., 1:-1])
        e_first, e_last = _directions(wide[..., 0]), _directions(wide[..., -1])
        before = _rotated(middle, e_first)
        after = np.broadcast_to(_rotated(q[:, None, None, :], e_first), before.shape)
        c = np.arctan2(
            np.sum(e_last * np.cross(before, after), axis=-1),
            np.sum(before * after, axis=-1)
            - np.sum(e_last * before, axis=-1) * np.sum(e_last * after, axis=-1),
        )
        rest = product(
            conjugate(middle), product(conjugate(_turn(c, wide[..., -1])), q[:, None, None, :])
        )
        a = 2 * np.arctan2(np.sum(e_first * rest[..., 1:], axis=-1), rest[..., 0])
        angles = np.stack([_positive(a), _positive(t), _positive(c)], axis=-1)
        slow = np.max(np.abs(_directions(phases)), axis=-1)  # 1/rate of each direction
        weights = np.stack([slow[:, 0], np.sum(slow[:, 1:-1], axis=1), slow[:, -1]], axis=-1)
        total = np.sum(angles * weights[None, :, None, :], axis=-1)
        lengths.append(np.where(real, total, np.inf).reshape(len(q), -1))
        parts.append((np.repeat(phases, roots, axis=0), angles.reshape(len(q), -1, 3), inner))
    return np.concatenate(lengths, axis=1), parts


def _positive(angles: np.ndarray) -> np.ndarray:
    """In [0, 2 pi), a hair below a full turn counted as none."""
    wrapped = np.mod(angles, 2 * math.pi)
    return np.where(wrapped > 2 * math.pi - _FULL_TURN_HAIR, 0.0, wrapped)


def _roots(harmonics: np.ndarray, wanted: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """All angles t with ``sum_k h_k exp(i k t) = wanted``, and whether each is real.

    The roots of the polynomial in ``z = exp(i t)``, as eigenvalues of its companion matrix.
    """
    degree = harmonics.shape[1] - 1
    polynomial = np.broadcast_to(harmonics, (*wanted.shape, degree + 1)).copy()
    polynomial[..., degree // 2] -= wanted
    companion = np.zeros((*wanted.shape, degree, degree), dtype=complex)
    companion[..., 0, :] = -polynomial[..., 1:] / polynomial[..., :1]
    companion[..., np.arange(1, degree), np.arange(degree - 1)] = 1.0
    z = np.linalg.eigvals(companion)
    return np.angle(z), np.abs(np.abs(z) - 1) < _ON_UNIT_CIRCLE


def _exact_sequence(q: np.ndarray) -> Sequence | None:
    """The shortest candidate that polishing makes exact."""
    lengths, parts = _candidates(q[None])
    sizes = np.cumsum([0] + [len(part[0]) for part in parts])
    best: Sequence | None = None
    for index in np.argsort(lengths[0])[:_POLISHED]:
        if not np.isfinite(lengths[0, index]):
            break
        kind = int(np.searchsorted(sizes, index, side="right")) - 1
        phases, angles, inner = parts[kind]
        row = index - sizes[kind]
        polished = _polish(q, phases[row], angles[0, row], inner)
        if polished is None:
            continue
        spread = [polished[0], *[polished[1]] * inner, polished[2]]
        found = from_turns(zip(spread, phases[row], strict=True), SOURCE, "shortest box")
        if best is None or length(found, "box") < length(best, "box"):
            best = found
    return best


def _polish(q: np.ndarray, phases: np.ndarray, angles: np.ndarray, inner: int) -> np.ndarray | None:
    """[3]: the angles made exact; an arc that is as good as none is left out if that works."""
    none = angles < _NO_ARC
    if np.any(none):
        found = _newton(q, phases, np.where(none, 0.0, angles), inner, ~none)
        if found is not None:
            return found
    return _newton(q, phases, angles, inner, np.ones(3, dtype=bool))


def _newton(
    q: np.ndarray, phases: np.ndarray, angles: np.ndarray, inner: int, free: np.ndarray
) -> np.ndarray | None:
    """Newton steps of least norm on the rotation error; None if no angles >= 0 make it vanish."""
    unknown = angles.copy()
    owner = np.array([0] + [1] * inner + [2])  # which unknown each arc's angle is
    for _ in range(_NEWTON_STEPS):
        through = [IDENTITY]
        for arc in _turn(unknown[owner], phases):
            through.append(product(arc, through[-1]))
        error = product(conjugate(q), through[-1])
        residual = math.copysign(1.0, error[0]) * error[1:]
        if np.linalg.norm(residual) < _EXACT:
            return unknown if np.all(unknown >= 0) else None
        jacobian = np.zeros((3, 3))
        for k, phase in enumerate(phases):
            # a bit more of arc k is a turn about its axis, carried back to the start
            axis = np.concatenate([[0.0], _directions(np.asarray(phase))])
            back = product(conjugate(through[k]), product(axis, through[k]))
            jacobian[:, owner[k]] += 0.5 * back[1:] * free[owner[k]]
        unknown = unknown - np.linalg.lstsq(jacobian, residual, rcond=_SINGULAR)[0]
    return None
