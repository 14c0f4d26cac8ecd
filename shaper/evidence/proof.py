"""A bound on the worst infidelity that holds at every point of the tolerance box, not on a grid.

Derivation. Let ``q(eps, delta)`` be the propagator as a quaternion. The Hamiltonian is linear in
both errors, so by the Dyson series each derivative of order ``k`` is a sum of time-ordered
integrals of unit quaternions times rates, and with

    ``A = int |W| dt / 2`` (half the total turn) and ``B = T / 2``

    ``|d^i/d eps^i d^j/d delta^j q| <= A^i B^j``    everywhere, at every order.

(First order: the end point moves at most ``T/2`` per unit of detuning and half the total turn per
unit of relative amplitude.) A function with such derivatives is nearly a polynomial, and how
nearly is known: the box is cut into smaller ones on which ``A h_eps`` and ``B h_delta`` are at
most ``_REACH``, and on each ``q`` is interpolated at ``n x m`` Chebyshev points with

    ``|q - p| <= e_eps + L e_delta``,   ``e = 2 (reach/2)^n / n!``,   ``L`` the Lebesgue constant.

The error ``|E q|`` is then bounded by ``|E p|`` plus that, since the rows ``E`` are orthonormal.
``u.E p`` is a polynomial for each direction ``u``, so its samples at ``cos(j pi / M)`` bound it
everywhere up to a factor ``1/cos(pi (n-1) / 2M)`` per axis (``proof_polynomial``). A box whose
bound comes within the tolerance of the best sample found is done; the others are sampled more
densely. No pulse is too spiky for this: sharp features cost more boxes, never the guarantee.

Rounding. With ``u = 2^-53`` and ``S`` segments, a segment's quaternion is off by at most 8 u plus
8 u times its half angle, a product adds 8 u, and points and box edges are off by a few u of
themselves, which moves ``q`` by the same few u of ``A (1 + |eps|)`` and ``B |delta|``. Altogether
``u (16 S + 32 (A (1 + |eps|) + B |delta|) + 32)`` per node. Interpolation enlarges it by ``L`` per
axis, and its matrices are off by less than ``64 u n^2`` (row sum), with sqrt(3) components. All of
it is added before the factors, and the result is rounded up.
"""

from __future__ import annotations

import math
import time
from dataclasses import dataclass

import numpy as np

from shaper.evidence.proof_polynomial import (
    chebyshev_zeros,
    evaluation_matrix,
    interpolation_error,
    lebesgue_bound,
    points_needed,
    samples,
    sampling_factor,
)
from shaper.job import Job
from shaper.physics.propagate import propagate
from shaper.pulse import Pulse
from shaper.target import Target
from shaper.wiring import arriving

MAX_BOXES = 10_000
_REACH = 4.0  # A h or B h of one box: few points per unit of reach, and few boxes
_UNIT_ROUND_OFF = 2.0**-53
_UP = 1 + 1e-12
_INTERPOLATION_SHARE = 1 / 16  # of the tolerance; the rest is for the sampling factor
_FIRST_DENSITY = 4  # samples per degree; tripled while boxes are undecided
_POINTS_AT_ONCE = 40_000  # error points per propagation
_SAMPLES_AT_ONCE = 400_000  # polynomial values held at once


@dataclass(frozen=True)
class Proof:
    """What is certain about the worst case of a pulse.

    Attributes:
        guaranteed: no point of the box has a larger infidelity. Unitless.
        sampled: the largest infidelity found at a point, so the worst lies between the two.
        at_eps: where it was found: relative amplitude error.
        at_delta: where it was found: detuning in rad/s, the offset included.
        boxes: how many boxes the tolerance box was cut into.
        seconds: time it took.
    """

    guaranteed: float
    sampled: float
    at_eps: float
    at_delta: float
    boxes: int
    seconds: float


def prove_pulse(pulse: Pulse, job: Job, tolerance: float = 0.01) -> Proof:
    """The proof for a pulse, as its DAC codes play it, over the tolerance box of a job.

    Of several qubits the one with the largest bound, which therefore holds for all of them.
    It speaks of ideal two-level qubits: neither leakage nor decay is in it.
    """
    return max(prove_groups(pulse, job, tolerance), key=lambda proof: proof.guaranteed)


def prove_groups(pulse: Pulse, job: Job, tolerance: float = 0.01) -> tuple[Proof, ...]:
    """The proof for every qubit of the job, each over its own box, the addressed one first."""
    return tuple(
        prove(
            *arriving(job, pulse),
            group.target,
            group.amplitude_tolerance,
            group.detuning_tolerance,
            group.detuning,
            tolerance=tolerance,
        )
        for group in job.groups
    )


def prove(
    drive: np.ndarray,
    durations: np.ndarray,
    target: Target,
    amplitude: float,
    detuning: float,
    offset: float = 0.0,
    *,
    tolerance: float = 0.01,
    max_boxes: int = MAX_BOXES,
) -> Proof:
    """Bound the worst infidelity over ``|eps| <= amplitude``, ``|delta - offset| <= detuning``.

    Bound and best sample come within ``tolerance`` of each other, unless the infidelity is so
    small that rounding decides (near 1e-24), or more than ``max_boxes`` boxes would be needed:
    then the bound is the trivial one, ``target.scale``. It is a bound in every case.

    Args:
        drive: [segment, 2] rad/s.
        durations: [segment] s.
        target: what the pulse should do.
        amplitude: unitless half width, >= 0.
        detuning: rad/s half width, >= 0.
        offset: rad/s, center of the detuning range.
        tolerance: relative, on the infidelity; 1e-4 to 1.
    Raises:
        ValueError: a half width or the tolerance is out of range or not finite.
    """
    if not (0 <= amplitude < math.inf and 0 <= detuning < math.inf and math.isfinite(offset)):
        raise ValueError(f"box: expected finite half widths >= 0, got {amplitude}, {detuning}")
    if not 1e-4 <= tolerance <= 1:
        raise ValueError(f"tolerance: expected 1e-4 to 1, got {tolerance}")
    began = time.perf_counter()
    drive, durations = np.asarray(drive, dtype=float), np.asarray(durations, dtype=float)
    search = _Search(drive, durations, target, amplitude, detuning, offset)
    search.try_points(*search.first_points())
    guaranteed = target.scale
    if search.boxes <= max_boxes:
        guaranteed = min(search.bound(search.points(tolerance), tolerance), target.scale)
    return Proof(
        guaranteed=guaranteed * _UP,
        sampled=search.best,
        at_eps=search.at[0],
        at_delta=search.at[1],
        boxes=search.boxes,
        seconds=time.perf_counter() - began,
    )


class _Search:
    """One tolerance box, cut up; axes are always (eps, delta)."""

    def __init__(self, drive, durations, target, amplitude, detuning, offset):
        self.drive, self.durations, self.target = drive, durations, target
        self.center, self.half = np.array([0.0, offset]), np.array([amplitude, detuning])
        speed = 0.5 * np.array([np.sum(np.hypot(*drive.T) * durations), np.sum(durations)])
        reach = speed * self.half
        if not np.all(np.isfinite(reach)):
            raise ValueError("pulse: expected finite rates and durations")
        self.cuts = [max(1, math.ceil(r / _REACH)) for r in reach]
        self.boxes = math.prod(self.cuts)
        self.reach = reach / self.cuts * _UP
        turn = speed @ (np.array([1.0, abs(offset)]) + self.half)
        self.node_error = _UNIT_ROUND_OFF * (16 * len(drive) + 32 * turn + 32)
        self.best, self.at = -1.0, (math.nan, math.nan)

    def first_points(self) -> list[np.ndarray]:
        """A coarse grid, corners included: from it comes the scale of the worst case."""
        grid = np.meshgrid(samples(8), samples(8), indexing="ij")
        return [self.center[axis] + self.half[axis] * grid[axis] for axis in (0, 1)]

    def try_points(self, eps: np.ndarray, delta: np.ndarray) -> np.ndarray:
        """[*points, row] ``E q``; the point of largest infidelity is kept, if the best so far."""
        errors = propagate(self.drive, self.durations, eps, delta) @ self.target.error_rows.T
        value = self.target.scale * np.sum(errors**2, axis=-1)
        worst = np.unravel_index(np.argmax(value), value.shape)
        if value[worst] > self.best:
            self.best = float(value[worst])
            self.at = float(eps[worst]), float(delta[worst])
        return errors

    def points(self, tolerance: float) -> tuple[int, int]:
        """Interpolation points per axis, so that the cut-off takes a small share of the bound."""
        size = math.sqrt(self.best / self.target.scale)  # of |E q|, a lower bound of the largest
        budget = max(_INTERPOLATION_SHARE * tolerance * size, self.node_error)
        return (
            points_needed(self.reach[0], budget / 2),
            points_needed(self.reach[1], budget / 8),  # the Lebesgue constant is below 4
        )

    def cut_off(self, points: tuple[int, int]) -> float:
        """How far ``q`` may be from its interpolant, anywhere in a box."""
        along_eps, along_delta = map(interpolation_error, self.reach, points)
        return along_eps + lebesgue_bound(points[0]) * along_delta

    def bound(self, points: tuple[int, int], tolerance: float) -> float:
        """Upper bound of the infidelity over the box; one for any number of points."""
        errors = self.errors_at_nodes(points)  # [box, eps, delta, row]
        if self.target.scale <= self.best * (1 + tolerance):
            return self.target.scale  # as bad as can be
        largest = np.sqrt(np.max(np.sum(errors**2, axis=-1), axis=(1, 2)))  # [box]
        rounding = math.prod(map(lebesgue_bound, points)) * (
            self.node_error + 128 * _UNIT_ROUND_OFF * sum(n * n for n in points) * largest
        )
        bounds = np.full(len(errors), self.target.scale)  # [box]
        active = np.arange(len(errors))
        density = _FIRST_DENSITY
        while len(active):
            intervals = [density * (n - 1) for n in points]
            factors = [sampling_factor(n - 1, m) for n, m in zip(points, intervals, strict=True)]
            peak = self.peaks(errors, active, points, intervals)  # [active]
            reached = math.prod(factors) * (peak + rounding[active]) + self.cut_off(points)
            bounds[active] = np.minimum(bounds[active], self.target.scale * reached**2 * _UP)
            active = active[bounds[active] > self.best * (1 + tolerance)]
            if math.prod(factors) ** 2 - 1 < tolerance / 4:
                break  # what is left is rounding: more samples would not help
            density *= 3
        return float(np.max(bounds))

    def box_center(self, box: np.ndarray, axis: int) -> np.ndarray:
        """Center of boxes along an axis; boxes are numbered like a C-ordered (eps, delta) array."""
        index = np.unravel_index(box, self.cuts)[axis]
        return self.center[axis] + self.half[axis] * ((2 * index + 1) / self.cuts[axis] - 1)

    def errors_at_nodes(self, points: tuple[int, int]) -> np.ndarray:
        """[box, eps, delta, row] unitless: ``E q`` at the interpolation points of every box."""
        x, y = (self.half[i] / self.cuts[i] * chebyshev_zeros(points[i]) for i in (0, 1))
        at_once = max(1, _POINTS_AT_ONCE // math.prod(points))
        parts = []
        for first in range(0, self.boxes, at_once):
            box = np.arange(first, min(first + at_once, self.boxes))
            eps = self.box_center(box, 0)[:, None, None] + x[:, None]
            delta = self.box_center(box, 1)[:, None, None] + y
            parts.append(self.try_points(*np.broadcast_arrays(eps, delta)))
        return np.concatenate(parts)

    def peaks(
        self, errors: np.ndarray, active: np.ndarray, points: tuple, intervals: list
    ) -> np.ndarray:
        """[active] the largest sample of ``|E p|`` in each box; the largest of all is tried.

        The interpolants are sampled on ``samples`` per axis, a block of eps rows at a time.
        """
        along_eps, along_delta = map(evaluation_matrix, points, intervals)
        block = max(1, _SAMPLES_AT_ONCE // len(along_delta))
        peak, place = np.zeros(len(active)), np.zeros((len(active), 2), dtype=int)
        for position, box in enumerate(active):
            rows = np.ascontiguousarray(np.moveaxis(errors[box], -1, 0))  # [row, eps, delta]
            for first in range(0, len(along_eps), block):
                value = (along_eps[first : first + block] @ rows) @ along_delta.T
                squared = np.sum(value**2, axis=0)  # [eps, delta]
                worst = np.unravel_index(np.argmax(squared), squared.shape)
                if squared[worst] > peak[position]:
                    peak[position] = squared[worst]
                    place[position] = first + worst[0], worst[1]
        top = int(np.argmax(peak))
        where = [
            self.box_center(active[top : top + 1], axis)
            + self.half[axis] / self.cuts[axis] * samples(intervals[axis])[place[top, axis]]
            for axis in (0, 1)
        ]
        self.try_points(*where)
        return np.sqrt(peak)
