"""What counts as the target: against the trace formula and averages over states."""

import math

import numpy as np
import pytest
import reference
from hypothesis import given, settings
from hypothesis import strategies as st

from shaper import rotation
from shaper.target import Target, infidelity

ROUND_OFF = 3e-15  # of 1 - |overlap|^2, where the reference subtracts from one
TINY_RELATIVE = 1e-6  # of infidelities near 1e-24; the error angle itself is rounded to 1e-16
Z = np.array([0.0, 0.0, 1.0])


def unit(seed, size=4):
    v = np.random.default_rng(seed).normal(size=size)
    return v / np.linalg.norm(v)


units = st.integers(0, 2**32 - 1).map(unit)
directions = st.integers(0, 2**32 - 1).map(lambda seed: unit(seed, 3))


def state(bloch):
    """[2, 2] complex: the density matrix of a Bloch vector."""
    x, y, z = bloch
    return 0.5 * (np.eye(2) + x * reference.SX + y * reference.SY + z * reference.SZ)


@settings(deadline=None)
@given(units, units)
def test_exact_is_the_trace_formula(q, wanted):
    """1 - F_avg = (2/3)(1 - |tr(V^dag U)|^2/4): Horodecki 1999, Nielsen 2002."""
    expected = reference.average_gate_infidelity(rotation.matrix(q), rotation.matrix(wanted))
    assert infidelity(q, Target(wanted)) == pytest.approx(expected, abs=ROUND_OFF)


@settings(deadline=None)
@given(units, units)
def test_exact_is_the_average_over_the_six_axial_states(q, wanted):
    """The six states along +-x, +-y, +-z average as all states do: Bowdrey et al. 2002."""
    u, v = rotation.matrix(q), rotation.matrix(wanted)
    fidelities = []
    for bloch in (*np.eye(3), *-np.eye(3)):
        rho = state(bloch)
        fidelities.append(np.trace(v @ rho @ v.conj().T @ u @ rho @ u.conj().T).real)
    assert infidelity(q, Target(wanted)) == pytest.approx(1 - np.mean(fidelities), abs=ROUND_OFF)


@settings(deadline=None)
@given(units, units)
def test_up_to_final_z_is_the_best_over_all_final_z(q, wanted):
    """A frame update may add any z(t): tr(V^dag z(t) U)/2 is A cos(t/2) + B sin(t/2), all real."""

    def overlap(turn):
        framed = reference.rotation(Z, turn) @ rotation.matrix(q)
        return np.trace(rotation.matrix(wanted).conj().T @ framed).real / 2

    a, b = overlap(0.0), overlap(math.pi)
    found = infidelity(q, Target(wanted, Z))
    assert found == pytest.approx(2 / 3 * (1 - (a * a + b * b)), abs=ROUND_OFF)
    turns = np.linspace(0, 2 * math.pi, 60)
    assert max(overlap(turn) ** 2 for turn in turns) <= 1 - 1.5 * found + ROUND_OFF


@settings(deadline=None)
@given(units, directions, directions)
def test_state_to_state_is_the_transfer_probability(q, start, end):
    target = Target(rotation.between(start, end), end, "state")
    u = rotation.matrix(q)
    expected = 1 - np.trace(state(end) @ u @ state(start) @ u.conj().T).real
    assert infidelity(q, target) == pytest.approx(expected, abs=ROUND_OFF)


@settings(deadline=None)
@given(units, st.floats(-10, 10), directions)
def test_every_member_is_accepted(q, angle, axis):
    for target in (Target(q), Target(q, Z), Target(q, axis, "state")):
        member = target.member(angle)
        assert np.linalg.norm(member) == pytest.approx(1, abs=ROUND_OFF)
        assert infidelity(member, target) < 1e-30
        assert infidelity(-member, target) < 1e-30
        rows = target.error_rows
        assert rows.shape == (3 if target.free_axis is None else 2, 4)
        assert np.max(np.abs(rows @ rows.T - np.eye(len(rows)))) < ROUND_OFF


@pytest.mark.parametrize("error", [1e-3, 1e-8, 1e-12])
def test_small_infidelities_keep_their_digits(error):
    """An over-rotation by 2e about the gate's axis: 1 - F_avg = (2/3) sin(e)^2, down to 1e-24."""
    wanted = rotation.about_z(math.pi / 2)
    q = rotation.product(rotation.about_z(2 * error), wanted)
    assert infidelity(q, Target(wanted)) == pytest.approx(
        2 / 3 * math.sin(error) ** 2, rel=TINY_RELATIVE if error > 1e-9 else 1e-3
    )


def test_infidelity_goes_over_batches(rng):
    q = rng.normal(size=(4, 3, 4))
    target = Target(rotation.about_x(1.0))
    assert infidelity(q, target).shape == (4, 3)
    assert infidelity(q, target)[2, 1] == pytest.approx(infidelity(q[2, 1], target), rel=1e-14)


def test_a_z_gate_needs_no_pulse_if_a_frame_update_may_follow():
    quarter = rotation.about_z(math.pi / 2)
    assert Target(quarter, Z).needs_no_pulse
    assert not Target(quarter).needs_no_pulse
    assert Target(rotation.IDENTITY).needs_no_pulse
    assert Target(-rotation.IDENTITY).needs_no_pulse
    assert not Target(rotation.NAMED_GATES["hadamard"], Z).needs_no_pulse
    assert Target(rotation.between(Z, Z), Z, "state").needs_no_pulse


@given(st.floats(-20, 20))
def test_angle_of_a_z_target(angle):
    found = Target(rotation.about_z(angle)).z_angle
    assert found is not None
    assert math.remainder(found - angle, 2 * math.pi) == pytest.approx(0, abs=1e-13)
    assert -math.pi - 1e-12 < found <= math.pi + 1e-12


def test_no_angle_for_what_is_no_z_rotation():
    assert Target(rotation.about_x(1.0)).z_angle is None
    assert Target(rotation.NAMED_GATES["hadamard"]).z_angle is None
