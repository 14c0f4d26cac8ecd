"""T1 and T2: the Bloch equations, exact over every constant segment, in NumPy.

Lindblad form: relaxation to the equilibrium at rate 1/T1 and pure dephasing at rate
1/Tphi = 1/T2 - 1/(2 T1). ``|0>`` is the ground state, so a cold qubit relaxes to z = +1. A map of
the density matrix is written as its Pauli transfer matrix, a real 4x4 matrix on (1, x, y, z).
"""

from __future__ import annotations

import numpy as np
from scipy.linalg import expm

from shaper.errors import InputError
from shaper.rotation import bloch_matrix
from shaper.target import Target

_CHUNK = 4096  # 4x4 exponentials at a time: half a megabyte


def rates(t1: float | None, t2: float | None) -> tuple[float, float]:
    """1/T1 and 1/T2 (1/s) from what is known of them.

    A missing T1 means no relaxation; a missing T2 means no dephasing beyond it, T2 = 2 T1.
    Raises:
        InputError: if a time is not positive or T2 > 2 T1.
    """
    for name, value in (("t1", t1), ("t2", t2)):
        if value is not None and not value > 0:
            raise InputError(f"{name}: expected a positive time, got {value:g} s")
    relaxation = 0.0 if t1 is None else 1 / t1
    decoherence = relaxation / 2 if t2 is None else 1 / t2
    if t2 is not None and t1 is not None and t2 > 2 * t1:
        raise InputError(f"t2: expected at most 2 t1 = {2 * t1:.6g} s, got {t2:.6g} s")
    return relaxation, decoherence


def bloch_generator(
    drive: np.ndarray,
    eps: np.ndarray | float,
    delta: np.ndarray | float,
    t1: float | None,
    t2: float | None,
    equilibrium: float = 1.0,
) -> np.ndarray:
    """Generator ``G`` of the Bloch equations, ``d(1, x, y, z)/dt = G (1, x, y, z)``.

    ``dr/dt = W x r - ((x, y)/T2, (z - equilibrium)/T1)`` with ``W = ((1+eps) Wx, (1+eps) Wy,
    delta)``.

    Args:
        drive: [*batch, 2] rad/s.
        eps, delta: [*batch] or scalars; relative amplitude error, detuning (rad/s).
        t1, t2: s, or None for none.
        equilibrium: z component at rest; +1 is cold.
    Returns:
        [*batch, 4, 4] 1/s.
    Source:
        F. Bloch, Nuclear induction, Phys. Rev. 70, 460 (1946), equation 38.
    """
    relaxation, decoherence = rates(t1, t2)
    wx = (1 + np.asarray(eps)) * np.asarray(drive, dtype=float)[..., 0]
    wy = (1 + np.asarray(eps)) * np.asarray(drive, dtype=float)[..., 1]
    wx, wy, delta = np.broadcast_arrays(wx, wy, np.asarray(delta, dtype=float))
    g = np.zeros((*wx.shape, 4, 4))
    g[..., 1, 2], g[..., 1, 3] = -delta, wy
    g[..., 2, 1], g[..., 2, 3] = delta, -wx
    g[..., 3, 1], g[..., 3, 2] = -wy, wx
    g[..., 1, 1] = g[..., 2, 2] = -decoherence
    g[..., 3, 3] = -relaxation
    g[..., 3, 0] = relaxation * equilibrium
    return g


def transfer_matrix(
    drive: np.ndarray,
    durations: np.ndarray,
    eps: np.ndarray | float,
    delta: np.ndarray | float,
    t1: float | None,
    t2: float | None,
    equilibrium: float = 1.0,
) -> np.ndarray:
    """Pauli transfer matrix of the whole waveform with decay, exact for constant segments.

    Args:
        drive: [segment, 2] rad/s.
        durations: [segment] s.
        eps, delta: [grid] or scalars; relative amplitude error, detuning (rad/s).
        t1, t2: s, or None for none.
    Returns:
        [grid, 4, 4] unitless, ``[4, 4]`` if both errors are scalars.
    """
    eps, delta = np.broadcast_arrays(np.asarray(eps, dtype=float), np.asarray(delta, dtype=float))
    shape, eps, delta = eps.shape, eps.ravel(), delta.ravel()
    total = np.tile(np.eye(4), (eps.size, 1, 1))
    drive, durations = np.asarray(drive, dtype=float), np.asarray(durations, dtype=float)
    at_once = max(1, _CHUNK // eps.size)
    for first in range(0, len(drive), at_once):
        part = slice(first, first + at_once)
        generator = bloch_generator(drive[part, None], eps, delta, t1, t2, equilibrium)
        for step in expm(generator * durations[part, None, None, None]):
            total = step @ total
    return total.reshape(*shape, 4, 4)


def average_infidelity(transfer: np.ndarray, target: Target) -> np.ndarray:
    """Average gate infidelity (or one minus the transfer probability) of a map with decay.

    ``1 - F_avg`` with ``F_avg = (2 F_pro + 1)/3`` and ``F_pro = tr(R_target^T R)/4``. A free final
    turn is chosen for the best, in closed form.

    Args:
        transfer: [*batch, 4, 4] Pauli transfer matrix.
    Returns:
        [*batch] unitless.
    Source:
        M. A. Nielsen, Phys. Lett. A 303, 249 (2002), equation 18, in Pauli transfer matrices.
    """
    wanted = bloch_matrix(target.quaternion)
    shift, turned = transfer[..., 1:, 0], transfer[..., 1:, 1:]
    if target.kind == "state":
        end = np.asarray(target.free_axis)
        arrived = shift + turned @ (wanted.T @ end)
        return 0.5 * (1 - arrived @ end)
    # what is left of the rotation once the target is undone: the identity if all is well
    rest = turned @ wanted.T
    if target.free_axis is None:
        overlap = np.trace(rest, axis1=-2, axis2=-1)
    else:
        n = np.asarray(target.free_axis)
        along = np.einsum("i,...ij,j->...", n, rest, n)
        cosine = np.trace(rest, axis1=-2, axis2=-1) - along
        cross = np.array([[0, -n[2], n[1]], [n[2], 0, -n[0]], [-n[1], n[0], 0]])
        sine = np.einsum("ij,...ij->...", cross, rest)
        overlap = along + np.hypot(cosine, sine)
    return (3 - overlap) / 6


def coherence_limit(duration: float, t1: float | None, t2: float | None) -> float:
    """Average gate infidelity of doing nothing for ``duration`` (s): no pulse that long is better.

    ``1 - F_avg = 1/2 - e^(-t/T1)/6 - e^(-t/T2)/3``. To first order every drive of the same length
    loses just this much, ``t/(3 T1) + t/(3 Tphi)``, so a search adds it to the error of a
    decay-free pulse: it decides on the duration, not on the shape.
    Source:
        The trace of the Pauli transfer matrix of T1 and T2, derived here.
    """
    relaxation, decoherence = rates(t1, t2)
    return -np.expm1(-duration * relaxation) / 6 - np.expm1(-duration * decoherence) / 3
