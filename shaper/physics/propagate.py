"""The two-level propagator of any waveform, in NumPy: what scores, figures and checks use.

The frame rotates at the carrier, ``H/hbar = 1/2 [(1 + eps)(Wx sx + Wy sy) + delta sz]``. Each
segment of constant drive is a rotation in closed form; nothing is approximated, and segments of
any length and angle are allowed.
"""

from __future__ import annotations

import numpy as np

_AT_ONCE = 16384  # segments times grid points in one sweep: some 2 MB, what a cache holds


def segment_quaternions(
    drive: np.ndarray, durations: np.ndarray, eps: np.ndarray, delta: np.ndarray
) -> np.ndarray:
    """Propagator of each segment at each point of the error grid.

    Args:
        drive: [segment, 2] rad/s.
        durations: [segment] s.
        eps: [grid] unitless relative amplitude error.
        delta: [grid] rad/s detuning, qubit minus carrier.
    Returns:
        [segment, grid, 4] unit quaternions.
    Source:
        Exponential of a Pauli vector: Nielsen and Chuang, Quantum Computation and Quantum
        Information, exercise 2.35.
    """
    return np.stack(_segments(np.asarray(drive), np.asarray(durations), eps, delta), axis=-1)


def _segments(drive, durations, eps, delta) -> tuple[np.ndarray, ...]:
    """The four components of ``segment_quaternions``, each [segment, grid]."""
    half = 0.5 * np.asarray(durations, dtype=float)[:, None]  # [segment, 1] s
    hx = (half * drive[:, :1]) * (1 + eps)  # [segment, grid] rad, half the turn
    hy = (half * drive[:, 1:]) * (1 + eps)
    hz = half * delta
    angle = np.sqrt(hx * hx + hy * hy + hz * hz)
    sinc = np.divide(np.sin(angle), angle, out=np.ones_like(angle), where=angle > 0)
    return np.cos(angle), sinc * hx, sinc * hy, sinc * hz


def _times(later: tuple[np.ndarray, ...], earlier: tuple[np.ndarray, ...]) -> tuple:
    """Quaternion product, component by component: no [.., 4] copies on the way."""
    w1, x1, y1, z1 = later
    w2, x2, y2, z2 = earlier
    return (
        w1 * w2 - x1 * x2 - y1 * y2 - z1 * z2,
        w1 * x2 + x1 * w2 + y1 * z2 - z1 * y2,
        w1 * y2 - x1 * z2 + y1 * w2 + z1 * x2,
        w1 * z2 + x1 * y2 - y1 * x2 + z1 * w2,
    )


def _chained(steps: tuple[np.ndarray, ...]) -> tuple:
    """[segment, grid] to [grid]: neighbors pairwise, until one is left."""
    while len(steps[0]) > 1:
        pairs = len(steps[0]) // 2 * 2
        joined = _times(tuple(c[1:pairs:2] for c in steps), tuple(c[0:pairs:2] for c in steps))
        rest = tuple(c[pairs:] for c in steps)  # the odd one out, or none
        steps = tuple(np.concatenate([j, r]) for j, r in zip(joined, rest, strict=True))
    return tuple(c[0] for c in steps)


def propagate(
    drive: np.ndarray, durations: np.ndarray, eps: np.ndarray | float, delta: np.ndarray | float
) -> np.ndarray:
    """Propagator of the whole waveform at each point of the error grid.

    Args:
        drive: [segment, 2] rad/s.
        durations: [segment] s.
        eps, delta: [grid] or scalars, broadcast; relative amplitude error and detuning (rad/s).
    Returns:
        [grid, 4] unit quaternions (``[4]`` if both errors are scalars).
    """
    eps, delta = np.broadcast_arrays(np.asarray(eps, dtype=float), np.asarray(delta, dtype=float))
    shape, eps, delta = eps.shape, eps.ravel(), delta.ravel()
    drive, durations = np.asarray(drive, dtype=float), np.asarray(durations, dtype=float)
    if drive.shape != (*durations.shape, 2):
        raise ValueError(
            f"segments: expected drive [n, 2] and durations [n], got shapes {drive.shape} "
            f"and {durations.shape}"
        )
    total = (np.ones(eps.size), np.zeros(eps.size), np.zeros(eps.size), np.zeros(eps.size))
    at_once = max(1, _AT_ONCE // max(1, eps.size))
    for first in range(0, len(drive), at_once):
        part = slice(first, first + at_once)
        total = _times(_chained(_segments(drive[part], durations[part], eps, delta)), total)
    return np.stack(total, axis=-1).reshape(*shape, 4)
