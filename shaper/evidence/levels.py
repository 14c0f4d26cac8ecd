"""What the levels above the qubit do to a pulse, in NumPy: a weakly anharmonic ladder."""

from __future__ import annotations

import numpy as np

from shaper.job import Job
from shaper.physics import leakage

LEVELS = 3  # the third is the first to be reached; the fourth matters at the square of its leakage
_AT_ONCE = 20_000  # segments times grid points


def qubit_columns(
    drive: np.ndarray, durations: np.ndarray, job: Job, eps: np.ndarray, delta: np.ndarray
) -> np.ndarray:
    """What becomes of |0> and |1> on three levels, at each grid point.

    The Hamiltonian is that of ``physics.ladder``; every segment is exponentiated by its
    eigenvectors, whatever its length.

    Args:
        drive: [segment, 2] rad/s; durations: [segment] s.
        job: its anharmonicity, which must be given.
        eps, delta: [grid] relative amplitude error; detuning in rad/s, the job's own included.
    Returns:
        [grid, level, 2] complex.
    """
    n = np.arange(LEVELS)
    lower = np.diag(np.sqrt(n[1:]), 1)  # <n-1|a|n>
    still = np.asarray(delta)[:, None] * (0.5 - n) + job.anharmonicity * n * (n - 1) / 2
    still = still[:, None, :] * np.eye(LEVELS)  # [grid, level, level]
    total = np.broadcast_to(np.eye(LEVELS, dtype=complex), still.shape)
    at_once = max(1, _AT_ONCE // len(still))
    for first in range(0, len(drive), at_once):
        part = slice(first, first + at_once)
        w = 0.5 * (drive[part, 0] - 1j * drive[part, 1])
        w = w[:, None, None, None] * (1 + np.asarray(eps))[:, None, None] * lower
        energy, state = np.linalg.eigh(w + np.conj(np.swapaxes(w, -1, -2)) + still)
        phase = np.exp(-1j * energy * durations[part, None, None])[..., None, :]
        for step in (state * phase) @ np.conj(np.swapaxes(state, -1, -2)):
            total = step @ total
    return total[..., :2]


def level_infidelity(
    drive: np.ndarray, durations: np.ndarray, job: Job, eps: np.ndarray, delta: np.ndarray
) -> np.ndarray:
    """[grid] Average gate infidelity on three levels, leakage counted; arguments as above.

    Source:
        Pedersen, Moller and Molmer, Phys. Lett. A 367, 47 (2007), see ``physics.leakage``.
    """
    return leakage.infidelity(qubit_columns(drive, durations, job, eps, delta), job.target)


def on_levels(drive: np.ndarray, durations: np.ndarray, job: Job) -> tuple[float, float]:
    """Infidelity and leakage on three levels without errors."""
    columns = qubit_columns(drive, durations, job, np.zeros(1), np.array([job.detuning]))
    return (
        float(leakage.infidelity(columns, job.target)[0]),
        float(leakage.leakage(columns)[0]),
    )
