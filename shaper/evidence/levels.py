"""What the levels above the qubit do to a pulse, in NumPy: a weakly anharmonic ladder."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from shaper.bench import dense_grid
from shaper.job import Job
from shaper.physics import leakage

_POINTS, _DENSITY = 9, 3.0  # per axis of the tolerance box, at least; points per rad of reach
_AT_ONCE = 20_000  # segments times grid points


def qubit_columns(
    drive: np.ndarray, durations: np.ndarray, job: Job, eps: np.ndarray, delta: np.ndarray
) -> np.ndarray:
    """What becomes of |0> and |1> on the job's levels, at each grid point.

    The Hamiltonian is that of ``physics.ladder``; every segment is exponentiated by its
    eigenvectors, whatever its length.

    Args:
        drive: [segment, 2] rad/s; durations: [segment] s.
        job: its anharmonicity, which must be given.
        eps, delta: [grid] relative amplitude error; detuning in rad/s, the job's own included.
    Returns:
        [grid, level, 2] complex.
    """
    n = np.arange(job.levels)
    lower = np.diag(np.sqrt(n[1:]), 1)  # <n-1|a|n>
    still = np.asarray(delta)[:, None] * (0.5 - n) + job.anharmonicity * n * (n - 1) / 2
    still = still[:, None, :] * np.eye(job.levels)  # [grid, level, level]
    total = np.broadcast_to(np.eye(job.levels, dtype=complex), still.shape)
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
    """[grid] Average gate infidelity on the job's levels, leakage counted; arguments as above.

    Source:
        Pedersen, Moller and Molmer, Phys. Lett. A 367, 47 (2007), see ``physics.leakage``.
    """
    return leakage.infidelity(qubit_columns(drive, durations, job, eps, delta), job.target)


def on_levels(drive: np.ndarray, durations: np.ndarray, job: Job) -> tuple[float, float, float]:
    """Infidelity, leakage and seepage on the job's levels without errors and decay."""
    columns = qubit_columns(drive, durations, job, np.zeros(1), np.array([job.detuning]))
    return (
        float(leakage.infidelity(columns, job.target)[0]),
        float(leakage.leakage(columns)[0]),
        float(leakage.seepage(columns)[0]),
    )


@dataclass(frozen=True)
class OnLevels:
    """A pulse on the levels of an anharmonic ladder, leakage counted.

    Attributes:
        nominal: infidelity without errors.
        mean: infidelity over the tolerance box.
        worst: largest infidelity over the tolerance box, on a coarse grid.
        leakage: population left outside the qubit, without errors.
        seepage: population that returns to it from outside, without errors and decay.
    """

    nominal: float
    mean: float
    worst: float
    leakage: float
    seepage: float


def box_on_levels(drive: np.ndarray, durations: np.ndarray, job: Job) -> OnLevels:
    """The largest of each figure over the job's qubits; all have the job's anharmonicity."""
    found = []
    for qubit in map(job.for_group, job.groups):
        nominal, *exchanged = on_levels(drive, durations, qubit)
        mean = worst = nominal
        if qubit.has_tolerance:
            grid = dense_grid(qubit, (_POINTS, _POINTS), _DENSITY, float(np.sum(durations)))
            over_box = level_infidelity(drive, durations, qubit, grid.eps, grid.delta)
            mean, worst = float(grid.weight @ over_box), max(nominal, float(np.max(over_box)))
        found.append((nominal, mean, worst, *exchanged))
    return OnLevels(*(max(column) for column in zip(*found, strict=True)))
