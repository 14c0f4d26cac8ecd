"""The second opinion: textbook matrices, their exponentials, and SciPy's integrator.

Nothing here is shared with the engine, the search or the scoring: Hamiltonians are written out as
matrices, fidelities are averages over six states, and the filtered waveform is followed by an
adaptive integrator instead of slices. It is slow, and resolves infidelities down to some 1e-15.
"""

from __future__ import annotations

import numpy as np
from scipy.integrate import solve_ivp

from shaper.drive.line import Line
from shaper.drive.mixer import Calibration
from shaper.drive.path import Path
from shaper.target import Target

RESOLUTION = 1e-13  # infidelity; what sums of some thousand exponentials leave
_SIX = np.array(  # the poles of the three axes: an average over them is one over all states
    [[1, 0], [0, 1], [1, 1], [1, -1], [1, 1j], [1, -1j]], dtype=complex
) / np.sqrt([1, 1, 2, 2, 2, 2])[:, None].astype(complex)
_PAULI = np.array([[[0, 1], [1, 0]], [[0, -1j], [1j, 0]], [[1, 0], [0, -1]]], dtype=complex)
_CHUNK = 20_000  # matrices at a time
_TERMS = 18  # of the Taylor series up to norm 1/2: truncated at 1e-22


def exponential(matrices: np.ndarray) -> np.ndarray:
    """Matrix exponentials by scaling and squaring of the Taylor series, all at once.

    On many small matrices this is ten times faster than a LAPACK call each, and as exact: their
    norm is small.

    Args:
        matrices: [*batch, n, n].
    Source:
        C. Moler, C. Van Loan, Nineteen dubious ways to compute the exponential of a matrix,
        SIAM Rev. 45, 3 (2003), method 3.
    """
    norm = float(np.max(np.sum(np.abs(matrices), axis=-1), initial=0.0))
    halvings = max(0, int(np.ceil(np.log2(2 * norm)))) if norm > 0 else 0
    scaled = matrices / 2**halvings
    one = np.eye(matrices.shape[-1])
    total = one + scaled / _TERMS
    for k in range(_TERMS - 1, 0, -1):
        total = one + scaled @ total / k
    for _ in range(halvings):
        total = total @ total
    return total


def hamiltonian(
    drive: np.ndarray,
    eps: float | np.ndarray = 0.0,
    delta: float | np.ndarray = 0.0,
    levels: int = 2,
    anharmonicity: float = 0.0,
) -> np.ndarray:
    """``[*batch, level, level]`` rad/s: ladder with sqrt(n) couplings; two levels are a qubit."""
    n = np.arange(levels)
    lower = np.diag(np.sqrt(n[1:]), 1).astype(complex)
    along_x, along_y = (lower + lower.T) / 2, (lower - lower.T) / 2j  # on a qubit: sx/2, sy/2
    drive = np.asarray(drive, dtype=float) * (1 + np.asarray(eps))[..., None]
    static = np.asarray(delta)[..., None] * (0.5 - n) + anharmonicity * n * (n - 1) / 2
    return (
        drive[..., 0, None, None] * along_x
        + drive[..., 1, None, None] * along_y
        + static[..., None] * np.eye(levels)
    )


def gate(
    drive: np.ndarray,
    durations: np.ndarray,
    eps: float = 0.0,
    delta: float = 0.0,
    levels: int = 2,
    anharmonicity: float = 0.0,
) -> np.ndarray:
    """[level, level] complex: matrix exponentials of all segments, multiplied in time order."""
    total = np.eye(levels, dtype=complex)
    for first in range(0, len(drive), _CHUNK):
        part = slice(first, first + _CHUNK)
        h = hamiltonian(np.asarray(drive)[part], eps, delta, levels, anharmonicity)
        for step in exponential(-1j * h * np.asarray(durations)[part, None, None]):
            total = step @ total
    return total


def gates(
    drive: np.ndarray,
    durations: np.ndarray,
    eps: np.ndarray,
    delta: np.ndarray,
    levels: int = 2,
    anharmonicity: float = 0.0,
) -> np.ndarray:
    """[grid, level, level] complex: ``gate`` at many errors ``eps``, ``delta`` [grid]."""
    total = np.tile(np.eye(levels, dtype=complex), (len(eps), 1, 1))
    for rate, duration in zip(np.asarray(drive), durations, strict=True):
        h = hamiltonian(np.tile(rate, (len(eps), 1)), eps, delta, levels, anharmonicity)
        total = exponential(-1j * h * duration) @ total
    return total


def open_gate(
    drive: np.ndarray,
    durations: np.ndarray,
    eps: float,
    delta: float,
    levels: int,
    anharmonicity: float,
    t1: float | None,
    t2: float | None,
) -> np.ndarray:
    """[level^2, level^2] complex: superoperator on row-stacked density matrices, with decay.

    Lindblad operators: the lowering operator at rate 1/T1, the number operator at 2/Tphi.
    """
    n = np.arange(levels)
    relaxation = 0.0 if t1 is None else 1 / t1
    dephasing = max(0.0, (relaxation / 2 if t2 is None else 1 / t2) - relaxation / 2)
    one = np.eye(levels)
    lost = np.zeros((levels**2, levels**2), dtype=complex)
    for jump in (
        np.sqrt(relaxation) * np.diag(np.sqrt(n[1:]), 1),
        np.sqrt(2 * dephasing) * np.diag(n).astype(float),
    ):
        square = jump.T @ jump
        lost += np.kron(jump, jump) - 0.5 * (np.kron(square, one) + np.kron(one, square.T))
    total = np.eye(levels**2, dtype=complex)
    for first in range(0, len(drive), 500):
        part = slice(first, first + 500)
        h = hamiltonian(np.asarray(drive)[part], eps, delta, levels, anharmonicity)
        left = np.einsum("sij,kl->sikjl", h, one).reshape(len(h), levels**2, -1)
        right = np.einsum("ij,slk->sikjl", one, h).reshape(len(h), levels**2, -1)
        generator = -1j * (left - right) + lost
        for step in exponential(generator * np.asarray(durations)[part, None, None]):
            total = step @ total
    return total


def integrated(
    line: Line,
    samples: np.ndarray,
    sample_rate: float,
    begin: float,
    until: float,
    eps: float = 0.0,
    delta: float = 0.0,
) -> np.ndarray:
    """[2, 2] complex: the continuous filtered waveform, followed by DOP853; no cells, no slices.

    Args:
        samples: [sample, 2] rad/s.
        begin, until: s from the first sample's edge, between which the qubit is followed.
    """
    edges = np.diff(np.vstack([np.zeros(2), samples, np.zeros(2)]), axis=0) @ np.array([1, 1j])
    starts = np.arange(len(edges)) / sample_rate

    def slope(t, y):
        z = (1 + eps) * (line.step(t - starts) @ edges)
        h = np.array([[delta / 2, z.conjugate() / 2], [z / 2, -delta / 2]])
        return (-1j * h @ y.reshape(2, 2)).ravel()

    u = np.eye(2, dtype=complex).ravel()
    stops = np.unique(np.concatenate([[begin, until], starts - line.lead, starts]))
    stops = stops[(stops >= begin) & (stops <= until)]
    for start, end in zip(stops[:-1], stops[1:], strict=True):
        u = solve_ivp(slope, (start, end), u, method="DOP853", rtol=1e-11, atol=1e-13).y[:, -1]
    return u.reshape(2, 2)


def integrated_mixer(
    path: Path,
    samples: np.ndarray,
    sample_rate: float,
    eps: float = 0.0,
    delta: float = 0.0,
) -> np.ndarray:
    """[2, 2] complex: held samples through mixer and intermediate frequency, by DOP853; no cells.

    The Q arm comes later by the skew; what leaves the mixer is turned back while it is held.

    Args:
        path: without a line.
        samples: [sample, 2] rad/s.
    """
    faults = path.calibration or Calibration()
    late, omega = faults.skew * sample_rate, 2 * np.pi * path.intermediate_frequency
    quarter = 1j * faults.gain * np.exp(1j * faults.phase)
    count = len(samples)
    edges = np.concatenate([np.arange(count + 1), np.arange(count + 1) + late])
    edges = np.unique(edges[(edges >= 0) & (edges <= count)])  # samples

    def slope(t, y, z):
        z = z * np.exp(-1j * (omega * (path.first + t) / sample_rate + path.phase))
        h = np.array([[delta / 2, z.conjugate() / 2], [z / 2, -delta / 2]]) / sample_rate
        return (-1j * h @ y.reshape(2, 2)).ravel()

    u = np.eye(2, dtype=complex).ravel()
    for start, end in zip(edges[:-1], edges[1:], strict=True):
        i, q = int((start + end) / 2), int(np.floor((start + end) / 2 - late))
        held = samples[q, 1] if 0 <= q < count else 0.0
        z = samples[i, 0] + faults.offset_i + quarter * (held + faults.offset_q)
        u = solve_ivp(
            slope, (start, end), u, "DOP853", args=((1 + eps) * z,), rtol=1e-11, atol=1e-13
        ).y[:, -1]
    return u.reshape(2, 2)


def superoperator(unitary: np.ndarray) -> np.ndarray:
    """[level^2, level^2] of a unitary, on row-stacked density matrices."""
    return np.kron(unitary, unitary.conj())


def infidelity(operator: np.ndarray, target: Target) -> float:
    """One minus the average fidelity of a superoperator with its target, leakage counted.

    The mean of ``<psi|V^dag E(psi) V|psi>`` over six states; with a free final turn its best angle;
    for a state-to-state target the one transfer.
    """
    levels = round(np.sqrt(len(operator)))
    v = _matrix(target.quaternion)
    if target.kind == "state":
        arrive = np.linalg.eigh(np.tensordot(target.free_axis, _PAULI, 1))[1][:, 1]
        return 1 - _overlap(operator, levels, v.conj().T @ arrive, arrive)
    if target.free_axis is None:
        return 1 - np.mean([_overlap(operator, levels, s, v @ s) for s in _SIX])
    along = np.tensordot(target.free_axis, _PAULI, 1)
    angles = 2 * np.pi * np.arange(3) / 3  # the mean is a first harmonic in the angle
    at = []
    for angle in angles:
        w = exponential(-0.5j * angle * along) @ v
        at.append(np.mean([_overlap(operator, levels, s, w @ s) for s in _SIX]))
    harmonic = 2 / 3 * abs(np.sum(at * np.exp(1j * angles)))
    return float(1 - np.mean(at) - harmonic)


def leakage(operator: np.ndarray) -> float:
    """Population outside the qubit after the gate, mean over the six states."""
    levels = round(np.sqrt(len(operator)))
    outside = []
    for state in _SIX:
        rho = _applied(operator, levels, state)
        outside.append(np.sum(np.diag(rho)[2:].real))
    return float(np.mean(outside))


def seepage(operator: np.ndarray) -> float:
    """Population on the qubit after the gate, mean over the states that began outside it.

    That mean is one over the basis states outside, since their even mixture is that of all states
    there. Relaxation brings population back too: with it this is more than leakage would give.

    Args:
        operator: [level^2, level^2] complex, three levels at least: all columns count.
    Source:
        C. J. Wood, J. M. Gambetta, Phys. Rev. A 97, 032306 (2018), section II.
    """
    levels = round(np.sqrt(len(operator)))
    returned = [np.sum(np.diag(_evolved(operator, state))[:2].real) for state in np.eye(levels)[2:]]
    return float(np.mean(returned))


def rotation_error(unitary: np.ndarray, target: Target) -> np.ndarray:
    """[3]: vector part of what is left of the rotation on the qubit: half the angle, small.

    A free final turn is taken out. ``scale |error|^2`` is the infidelity of a unitary qubit gate.
    """
    rest = unitary[:2, :2] @ _matrix(target.quaternion).conj().T
    c0 = np.trace(rest) / 2
    vector = np.real(0.5j * np.einsum("kij,ji->k", _PAULI, rest) * c0.conjugate() / abs(c0))
    if target.free_axis is not None:
        vector = vector - target.free_axis * (vector @ target.free_axis)
    return vector


def _matrix(quaternion: np.ndarray) -> np.ndarray:
    return quaternion[0] * np.eye(2) - 1j * np.tensordot(quaternion[1:], _PAULI, 1)


def _applied(operator: np.ndarray, levels: int, state: np.ndarray) -> np.ndarray:
    return _evolved(operator, np.concatenate([state, np.zeros(levels - 2)]))


def _evolved(operator: np.ndarray, state: np.ndarray) -> np.ndarray:
    """Density matrix of what becomes of a pure state on all levels."""
    levels = len(state)
    return (operator @ np.outer(state, state.conj()).ravel()).reshape(levels, levels)


def _overlap(operator, levels, state, wanted) -> float:
    rho = _applied(operator, levels, state)[:2, :2]
    return float(np.real(wanted.conj() @ rho @ wanted))
