"""The two-level propagator of any waveform, in NumPy: what scores, figures and checks use.

The frame rotates at the carrier, ``H/hbar = 1/2 [(1 + eps)(Wx sx + Wy sy) + delta sz]``. Each
segment of constant drive is a rotation in closed form; nothing is approximated, and segments of
any length and angle are allowed.
"""

from __future__ import annotations

import numpy as np

from shaper.rotation import product


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
    half = 0.5 * np.asarray(durations, dtype=float)[:, None]  # [segment, 1] s
    hx = half * drive[:, :1] * (1 + eps)  # [segment, grid] rad, half the turn
    hy = half * drive[:, 1:] * (1 + eps)
    hz = half * delta
    angle = np.sqrt(hx**2 + hy**2 + hz**2)
    sinc = np.sinc(angle / np.pi)  # sin(angle)/angle, 1 at zero
    return np.stack([np.cos(angle), sinc * hx, sinc * hy, sinc * hz], axis=-1)


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
    shape = eps.shape
    eps, delta = eps.ravel(), delta.ravel()
    total = np.tile([1.0, 0.0, 0.0, 0.0], (eps.size, 1))
    for rate, duration in zip(np.asarray(drive), np.asarray(durations), strict=True):
        step = segment_quaternions(rate[None], np.array([duration]), eps, delta)[0]
        total = product(step, total)
    return total.reshape(*shape, 4)
