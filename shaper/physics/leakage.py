"""Fidelity of a gate on a qubit that has more levels than two.

With ``M`` the qubit block of the propagator and ``E = V^dag M = c0 + cx sx + cy sy + cz sz``,

    leakage L = 1 - tr(M^dag M)/2 = half the population found outside,
    1 - F_avg = L + (2/3)(|cx|^2 + |cy|^2 + |cz|^2),

which is Pedersen's formula without its cancellation: it keeps its digits down to 1e-30. Both parts
are squares of amplitudes linear in the propagator, as a least-squares search wants them.
"""

from __future__ import annotations

import numpy as np

from shaper import rotation
from shaper.target import Target

_PAULI = np.array([[[0, 1], [1, 0]], [[0, -1j], [1j, 0]], [[1, 0], [0, -1]]], dtype=complex)
_GATE = np.sqrt(2 / 3)  # amplitude of infidelity per error component


def qubit_rows(target: Target) -> np.ndarray:
    """Rows that read the error off the qubit block: ``e[k] = sum_ij rows[k, i, j] M[i, j]``.

    Returns:
        [k, 2, 2] complex; three rows for a gate, two where a final turn is free, one for a state.
    """
    v = rotation.matrix(target.quaternion)
    if target.kind == "state":
        half = (np.eye(2) + np.tensordot(target.free_axis, _PAULI, 1)) / 2  # onto the wanted state
        across = np.linalg.svd(half)[0][:, 1].conj()  # <state that must stay empty|
        begin = v.conj().T @ np.linalg.svd(half)[0][:, 0]
        return np.outer(across, begin)[None]
    # c_j = tr(sigma_j M V^dag)/2: with M V^dag a turn after the gate stays a turn about its axis
    rows = np.stack([0.5 * _GATE * (v.conj().T @ sigma).T for sigma in _PAULI])
    if target.free_axis is None:
        return rows
    across = np.linalg.svd(np.asarray(target.free_axis)[None, :])[2][1:]
    return np.tensordot(across, rows, 1)


def outside_columns(target: Target) -> np.ndarray:
    """How the final amplitudes outside count: ``leakage = sum |amplitude @ weights|^2``.

    Returns:
        [2, c] complex: both columns by sqrt(1/2) for a gate, the starting state alone for a
        state-to-state target.
    """
    if target.kind != "state":
        return np.sqrt(0.5) * np.eye(2, dtype=complex)
    half = (np.eye(2) + np.tensordot(target.free_axis, _PAULI, 1)) / 2
    end = np.linalg.svd(half)[0][:, 0]
    return (rotation.matrix(target.quaternion).conj().T @ end)[:, None]


def infidelity(columns: np.ndarray, target: Target) -> np.ndarray:
    """Average gate infidelity with leakage (or one minus the transfer probability).

    Args:
        columns: [*batch, level, 2] complex. What becomes of |0> and |1>.
    Returns:
        [*batch] unitless.
    Source:
        L. H. Pedersen, N. M. Moller, K. Molmer, Phys. Lett. A 367, 47 (2007), equation 5;
        the form without cancellation is derived here.
    """
    outside = columns[..., 2:, :] @ outside_columns(target)
    lost = np.sum(np.abs(outside) ** 2, axis=(-2, -1))
    error = np.einsum("kij,...ij->...k", qubit_rows(target), columns[..., :2, :])
    lost = lost + np.sum(np.abs(error) ** 2, axis=-1)
    if target.kind == "gate" and target.free_axis is not None:
        lost = lost + 2 / 3 * _left_by_free_turn(columns[..., :2, :], target)
    return lost


def leakage(columns: np.ndarray) -> np.ndarray:
    """[*batch]: population lost from the qubit, mean over its states: ``1 - tr(M^dag M)/2``."""
    return 0.5 * np.sum(np.abs(columns[..., 2:, :]) ** 2, axis=(-2, -1))


def seepage(columns: np.ndarray) -> np.ndarray:
    """[*batch]: population that returns to the qubit, mean over the states outside.

    For a unitary propagator what comes in equals what goes out, so this is ``2 L / (levels-2)``.
    Source:
        C. J. Wood, J. M. Gambetta, Phys. Rev. A 97, 032306 (2018), section II.
    """
    return 2 * leakage(columns) / (columns.shape[-2] - 2)


def _left_by_free_turn(block: np.ndarray, target: Target) -> np.ndarray:
    """What the best final turn cannot take away: zero for a unitary block.

    The turn by ``phi`` about n leaves ``|c0 cos(phi/2) + i cn sin(phi/2)|^2``; its largest value is
    an eigenvalue of a 2x2 matrix, and the rest the other one, written without cancellation.
    """
    rest = block @ rotation.matrix(target.quaternion).conj().T
    c0 = 0.5 * np.trace(rest, axis1=-2, axis2=-1)
    along = np.tensordot(np.asarray(target.free_axis), _PAULI, 1)
    cn = 0.5 * np.einsum("ij,...ji->...", along, rest)
    total = np.abs(c0) ** 2 + np.abs(cn) ** 2
    product = np.real(np.conj(c0) * cn) ** 2
    return 2 * product / (total + np.sqrt(np.maximum(total**2 - 4 * product, 0)))
