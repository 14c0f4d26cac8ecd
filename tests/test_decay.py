"""T1 and T2 against the Lindblad superoperator and published coherence figures."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.linalg import expm

from shaper import rotation
from shaper.errors import InputError
from shaper.physics import decay
from shaper.physics.propagate import propagate
from shaper.target import Target, infidelity
from tests.reference import SX, SY, SZ

EXACT = 1e-12  # round-off of a few hundred 4x4 products
T1, T2 = 50e-6, 70e-6
ONE = np.eye(2)


def lindblad_map(drive, durations, eps, delta, t1, t2):
    """[4, 4]: Pauli transfer matrix from the exponential of the textbook superoperator."""
    lower = np.sqrt(1 / t1) * np.array([[0, 1], [0, 0]], dtype=complex)  # |0><1|
    dephase = np.sqrt(0.5 * (1 / t2 - 0.5 / t1)) * SZ
    total = np.eye(4, dtype=complex)
    for (wx, wy), duration in zip(drive, durations, strict=True):
        h = 0.5 * ((1 + eps) * (wx * SX + wy * SY) + delta * SZ)
        step = -1j * (np.kron(h, ONE) - np.kron(ONE, h.T))  # rows stacked: A rho B -> A x B^T
        for jump in (lower, dephase):
            square = jump.conj().T @ jump
            step += np.kron(jump, jump.conj())
            step -= 0.5 * (np.kron(square, ONE) + np.kron(ONE, square.T))
        total = expm(step * duration) @ total
    paulis = [ONE, SX, SY, SZ]
    return np.array(
        [
            [0.5 * np.trace(a @ (total @ b.ravel()).reshape(2, 2)).real for b in paulis]
            for a in paulis
        ]
    )


def test_transfer_matrix_is_the_lindblad_exponential(rng):
    drive, durations = rng.normal(0, 2e8, (7, 2)), rng.uniform(1e-9, 9e-9, 7)
    for eps, delta in ((0.0, 0.0), (0.03, 4e6), (-0.1, -3e7)):
        ours = decay.transfer_matrix(drive, durations, eps, delta, 2e-7, 3e-7)
        theirs = lindblad_map(drive, durations, eps, delta, 2e-7, 3e-7)
        assert np.max(np.abs(ours - theirs)) < EXACT


def test_grid_and_single_points_agree(rng):
    drive, durations = rng.normal(0, 2e8, (5, 2)), np.full(5, 2e-9)
    eps, delta = rng.normal(0, 0.1, 4), rng.normal(0, 1e7, 4)
    together = decay.transfer_matrix(drive, durations, eps, delta, T1, T2)
    one_by_one = [
        decay.transfer_matrix(drive, durations, e, d, T1, T2)
        for e, d in zip(eps, delta, strict=True)
    ]
    assert np.max(np.abs(together - one_by_one)) < EXACT


@pytest.mark.parametrize(
    ("duration", "idle", "driven"),
    # Lindblad exponentials for T1 = 50 us, T2 = 70 us, computed in 40 digits outside the project
    [
        (20e-9, 0.00016187782620252, 0.00016187837023365),
        (50e-9, 0.00040459358542838, 0.00040459698387473),
    ],
)
def test_published_coherence_figures(duration, idle, driven):
    assert decay.coherence_limit(duration, T1, T2) == pytest.approx(idle, rel=1e-11)
    rate = np.array([[np.pi / duration, 0.0]])
    transfer = decay.transfer_matrix(rate, np.array([duration]), 0.0, 0.0, T1, T2)
    half_turn = Target(rotation.about_x(np.pi))
    assert decay.average_infidelity(transfer, half_turn) == pytest.approx(driven, rel=1e-9)


def test_without_decay_it_is_the_unitary_infidelity(rng):
    drive, durations = rng.normal(0, 2e8, (6, 2)), np.full(6, 3e-9)
    targets = (
        Target(rotation.about_z(1.0)),
        Target(rotation.about_y(0.7), np.array([0.0, 0.0, 1.0])),
        Target(rotation.between((0, 0, 1), (1, 1, 0)), np.array([1, 1, 0]) / np.sqrt(2), "state"),
    )
    eps, delta = np.array([0.0, 0.04]), np.array([0.0, 2e7])
    transfer = decay.transfer_matrix(drive, durations, eps, delta, None, None)
    q = propagate(drive, durations, eps, delta)
    for target in targets:
        ours = decay.average_infidelity(transfer, target)
        assert ours == pytest.approx(infidelity(q, target), abs=EXACT)


@given(t1=st.floats(1e-7, 1e-3), share=st.floats(0.01, 2.0), turn=st.floats(-6.0, 6.0))
def test_map_stays_physical_and_decay_only_hurts(t1, share, turn):
    """Trace preserving, and no pulse beats the coherence limit of a still qubit by much."""
    drive = np.array([[turn / 1e-7, 0.0]])
    transfer = decay.transfer_matrix(drive, np.array([1e-7]), 0.0, 0.0, t1, share * t1)
    assert np.max(np.abs(transfer[0] - [1, 0, 0, 0])) < EXACT
    assert np.linalg.norm(transfer[1:, 1:], 2) <= 1 + EXACT
    lost = decay.average_infidelity(transfer, Target(rotation.about_x(turn)))
    limit = decay.coherence_limit(1e-7, t1, share * t1)
    assert lost >= -EXACT
    assert lost == pytest.approx(limit, abs=2 * limit**2 + EXACT)  # equal to first order


def test_bad_times_give_one_line():
    with pytest.raises(InputError, match="at most 2 t1"):
        decay.rates(1e-6, 2.1e-6)
    with pytest.raises(InputError, match="t1: expected a positive time"):
        decay.rates(0.0, None)
    assert decay.rates(1e-6, None) == (1e6, 5e5)
    assert decay.rates(None, None) == (0.0, 0.0)
