"""The shortest pulse there is under the circular bound: full amplitude, phase running evenly.

On resonance, with ``|W| <= W_max``, every time-optimal gate has the phase ``phase + rate t``. In
the frame that runs with it the drive stands still, so that (time in units of 1/W_max)

    U = R_z(rate T) exp(-i T/2 [cos(phase) sx + sin(phase) sy - rate sz]).
"""

from __future__ import annotations

import cmath
import math
from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq, least_squares

from shaper.composite.free_turn import shortest_over_free_turn
from shaper.composite.sequence import Sequence
from shaper.job import Job
from shaper.rotation import IDENTITY, canonical
from shaper.target import Target

SOURCE = (
    "Boscain and Mason, J. Math. Phys. 47, 062101 (2006); "
    "Garon, Glaser and Sugny, Phys. Rev. A 88, 043422 (2013)"
)
_ON_AXIS = 1e-14  # |U21| below this: a pure z rotation, its phase is free
_NO_TURN = 1e-15  # arg U11 against |U21|: round-off
_MOST_SLICES = 2000
_STEPPED_ERROR = 1e-12  # rotation error (half the error angle) taken for exact in N slices


@dataclass(frozen=True)
class Geodesic:
    """The time-optimal drive ``W_max (cos, sin)(phase + rate W_max t)``.

    Attributes:
        length: duration in units of 1/W_max.
        rate: of the phase, in units of W_max.
        phase: at the start, rad.
    """

    length: float
    rate: float
    phase: float


def time_optimal(target: Target) -> Geodesic:
    """The shortest drive under the circular bound, in the sense of SO(3): up to the global sign.

    With ``alpha = U11 = r exp(i d)``, ``b = |U21|`` and the sign of U such that ``Re alpha >= 0``,
    one angle w solves everything: let ``s = r sin(w)``, ``x = atan2(b, r cos(w))``; then

        -s x + atan2(b sin(w), cos(w)) = |d|,    length = 2 x sqrt(b^2 + r^2 cos^2(w)).

    The left side rises from 0 to pi on [0, pi]. For z(theta) the length is
    ``sqrt(theta (4 pi - theta))``. With a free axis the shortest member is taken.

    Source:
        Extremals: Boscain and Mason, J. Math. Phys. 47, 062101 (2006); Garon, Glaser and Sugny,
        Phys. Rev. A 88, 043422 (2013). The equation in w: derived here from the propagator above.
    """
    return _shortest(target)[1]


def _shortest(target: Target) -> tuple[np.ndarray, Geodesic]:
    """The accepted rotation that is reached first, and the way to it."""
    if target.needs_no_pulse:
        return IDENTITY, Geodesic(0.0, 0.0, 0.0)
    return shortest_over_free_turn(target, lambda q: (q, _to_rotation(q)), lambda w: w[1].length)


def _alpha_beta(q: np.ndarray) -> tuple[complex, complex]:
    """U11 and U21, of the two signs the one with Re U11 >= 0."""
    w, x, y, z = canonical(q)
    return complex(max(w, 0.0), -z), complex(y, -x)


def _to_rotation(q: np.ndarray) -> Geodesic:
    alpha, beta = _alpha_beta(q)
    r, b, turn = abs(alpha), abs(beta), cmath.phase(alpha)
    if b < _ON_AXIS:
        b, beta = 0.0, 0j
        if turn == 0.0:
            return Geodesic(0.0, 0.0, 0.0)

    def excess(w: float) -> float:
        x = math.atan2(b, r * math.cos(w))
        return math.atan2(b * math.sin(w), math.cos(w)) - r * math.sin(w) * x - abs(turn)

    if abs(turn) <= _NO_TURN * b:
        w = 0.0  # the constant phase; below, round-off would decide
    else:
        w = brentq(excess, 0.0, math.pi, xtol=1e-16, rtol=1e-15)
    s, c = r * math.sin(w), math.hypot(b, r * math.cos(w))
    duration = 2 * math.atan2(b, r * math.cos(w)) * c
    rate = math.copysign(s / c, turn) if s > 0.0 else 0.0
    phase = cmath.phase(beta) + math.pi / 2 - rate * duration / 2 if b > 0.0 else 0.0
    return Geodesic(duration, rate, math.remainder(phase, 2 * math.pi))


def geodesic_drive(geodesic: Geodesic, slices: int) -> np.ndarray:
    """[slice, 2] unitless: the drive in units of W_max, the phase taken at the slice centers.

    Off the exact gate by a rotation that falls as ``1/slices^2``; ``stepped`` is exact.
    """
    centers = (np.arange(slices) + 0.5) / slices * geodesic.length
    phase = geodesic.phase + geodesic.rate * centers
    return np.stack([np.cos(phase), np.sin(phase)], axis=-1)


def stepped_z_length(angle: float, slices: int) -> float:
    """Shortest z(angle) of N equal slices of constant phase, in units of 1/W_max.

    ``T_N = 2 N arccos(cos(pi/N) / cos((2 pi - |angle|)/(2 N)))`` for ``|angle| <= pi``.
    Source:
        Derived here: the slices seen from the frame that steps with the phase are one rotation to
        the power N, which must be -1 (see ``stepped``).
    """
    a, b = math.pi / slices, (2 * math.pi - abs(angle)) / (2 * slices)
    # sin(arccos(cos a / cos b)), which keeps its digits where the quotient is close to 1
    sine = math.sqrt(max(0.0, math.sin(a - b) * math.sin(a + b))) / math.cos(b)
    return 2 * slices * math.asin(min(1.0, sine))


def stepped(target: Target, slices: int) -> Sequence:
    """The geodesic in N equal slices of constant phase and amplitude, exactly on the target.

    Slices by ``a`` whose phase steps by ``d`` make ``R_z(N d + p) V^N R_z(-p)`` with
    ``V = R_z(-d) R_x(a)``: two unknowns for U11 and |U21|, then p for the phase of U21.

    Args:
        slices: at least 2.
    Raises:
        ValueError: if so few slices cannot make this rotation along the geodesic.
    Source:
        Derived here.
    """
    q, geodesic = _shortest(target)
    if geodesic.length == 0.0:
        return Sequence(np.zeros(0), np.zeros(0), SOURCE, "geodesic")
    alpha, beta = _alpha_beta(q)
    b, turn = abs(beta), cmath.phase(alpha)

    def off(unknown: np.ndarray) -> np.ndarray:
        u11, u21 = _equal_slices(*unknown, slices)
        return np.array([(u11 - alpha).real, (u11 - alpha).imag, u21 - b])

    if b < _ON_AXIS:  # V^N = -1, in closed form
        step = math.copysign((2 * math.pi - 2 * abs(turn)) / slices, turn)
        found = np.array([step, stepped_z_length(2 * turn, slices) / slices])
        start_phase = 0.0
    else:
        start = np.array([geodesic.rate * geodesic.length, geodesic.length]) / slices
        scale = 1 / slices
        found = (
            least_squares(
                lambda u: off(u * scale), start / scale, xtol=1e-15, ftol=1e-15, gtol=1e-15
            ).x
            * scale
        )
        start_phase = cmath.phase(beta) + math.pi / 2 - (slices - 1) * found[0] / 2
    step, angle = found
    if np.linalg.norm(off(found)) > _STEPPED_ERROR or angle < 0:
        raise ValueError(f"slices: {slices} are too few for this rotation along the geodesic")
    return Sequence(
        np.full(slices, angle), start_phase + step * np.arange(slices), SOURCE, "geodesic"
    )


def _equal_slices(step: float, angle: float, slices: int) -> tuple[complex, float]:
    """U11, and U21 up to its phase, of N slices by ``angle`` whose phase steps by ``step``."""
    cos_step, sin_step = math.cos(step / 2), math.sin(step / 2)
    cos_angle, sin_angle = math.cos(angle / 2), math.sin(angle / 2)
    sine = math.hypot(sin_angle, sin_step * cos_angle)  # of half the turn of V
    x = slices * math.atan2(sine, cos_step * cos_angle)
    gain = math.sin(x) / sine if sine > 0 else float(slices)
    running = cmath.exp(-0.5j * slices * step)
    return running * complex(math.cos(x), gain * sin_step * cos_angle), gain * sin_angle


def stepped_on_grid(target: Target, job: Job) -> Sequence:
    """The geodesic in the fewest equal slices of whole samples that fit under the job's circle.

    One sample a slice, or a few more where that would make more than 2,000 slices.
    """
    exact = time_optimal(target).length / job.rabi_max * job.sample_rate  # samples
    if exact == 0.0:
        return stepped(target, 2)
    stride = math.ceil(exact / _MOST_SLICES)
    for slices in range(max(2, math.ceil(exact / stride)), 4 * _MOST_SLICES):
        try:
            found = stepped(target, slices)
        except ValueError:
            continue
        if found.angles[0] <= job.rabi_max * stride / job.sample_rate:
            return found
    raise ValueError("geodesic: found no number of slices that fits the sample grid")
