"""The slow, plain second implementation: textbook matrices, nothing imported from the project.

H/hbar = 1/2 [(1 + eps)(Wx sx + Wy sy) + delta sz]; U is the time-ordered product of exponentials;
1 - F_avg = (2/3)(1 - |tr(V^dag U)|^2 / 4) (Horodecki 1999, Nielsen 2002).
"""

import numpy as np
from scipy.linalg import expm

SX = np.array([[0, 1], [1, 0]], dtype=complex)
SY = np.array([[0, -1j], [1j, 0]], dtype=complex)
SZ = np.diag([1.0, -1.0]).astype(complex)


def propagator(drive, durations, eps=0.0, delta=0.0):
    """[2, 2] complex: scipy.linalg.expm of each segment, multiplied in time order."""
    total = np.eye(2, dtype=complex)
    for (wx, wy), duration in zip(drive, durations, strict=True):
        hamiltonian = 0.5 * ((1 + eps) * (wx * SX + wy * SY) + delta * SZ)
        total = expm(-1j * hamiltonian * duration) @ total
    return total


def rotation(axis, angle):
    """[2, 2] complex: exp(-i angle n.sigma/2)."""
    n = np.asarray(axis, dtype=float) / np.linalg.norm(axis)
    return expm(-0.5j * angle * (n[0] * SX + n[1] * SY + n[2] * SZ))


def average_gate_infidelity(actual, wanted):
    """1 - F_avg by the trace formula; loses digits below 1e-15, which is its point here."""
    overlap = abs(np.trace(wanted.conj().T @ actual)) ** 2 / 4
    return 2 / 3 * (1 - overlap)
