"""Quaternions against SciPy's rotations and 2x2 exponentials; angles that come back."""

import math

import numpy as np
import pytest
import reference
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

from shaper import rotation

ROUND_OFF = 1e-14  # a few products of numbers of size one
EXPONENTIAL = 1e-13  # scipy.linalg.expm of angles up to ten turns
EULER_ROUND_OFF = 1e-14  # atan2 of components that are themselves rounded

angles = st.floats(-20, 20)
units = st.integers(0, 2**32 - 1).map(
    lambda seed: (lambda v: v / np.linalg.norm(v))(np.random.default_rng(seed).normal(size=4))
)
axes = st.tuples(*[st.floats(-5, 5)] * 3).filter(lambda v: np.linalg.norm(v) > 1e-3)
# middle angle at and near its ends, where z-y-z angles are not unique
half_turns = st.sampled_from([0.0, 1e-12, 1e-8, math.pi - 1e-8, math.pi]) | st.floats(0, math.pi)


def scipy_of(q):
    w, x, y, z = q
    return Rotation.from_quat([x, y, z, w])


def same_gate(p, q):
    """Distance of two rotations, blind to the sign of the quaternion."""
    return min(np.max(np.abs(p - q)), np.max(np.abs(p + q)))


@settings(deadline=None)
@given(axes, angles)
def test_axis_and_angle_are_scipys(axis, angle):
    q = rotation.from_axis_angle(axis, angle)
    n = np.asarray(axis) / np.linalg.norm(axis)
    expected = Rotation.from_rotvec(math.remainder(angle, 4 * math.pi) * n)
    assert np.max(np.abs(rotation.bloch_matrix(q) - expected.as_matrix())) < ROUND_OFF
    assert np.max(np.abs(scipy_of(q).as_matrix() - expected.as_matrix())) < ROUND_OFF


@settings(deadline=None)
@given(axes, angles)
def test_matrix_is_the_exponential_with_its_sign(axis, angle):
    """exp(-i angle n.sigma/2), so that a full turn is -1: the sign of SU(2) is kept."""
    found = rotation.matrix(rotation.from_axis_angle(axis, angle))
    assert np.max(np.abs(found - reference.rotation(axis, angle))) < EXPONENTIAL
    twice = rotation.matrix(rotation.from_axis_angle(axis, angle + 2 * math.pi))
    assert np.max(np.abs(twice + found)) < EXPONENTIAL


@settings(deadline=None)
@given(units, units)
def test_product_is_that_of_matrices_and_of_scipy(p, q):
    both = rotation.product(p, q)
    matrices = rotation.matrix(p) @ rotation.matrix(q)
    assert np.max(np.abs(rotation.matrix(both) - matrices)) < ROUND_OFF
    scipys = (scipy_of(p) * scipy_of(q)).as_matrix()
    assert np.max(np.abs(rotation.bloch_matrix(both) - scipys)) < ROUND_OFF


@settings(deadline=None)
@given(units)
def test_conjugate_is_the_inverse(q):
    assert np.max(np.abs(rotation.product(q, rotation.conjugate(q)) - rotation.IDENTITY)) < (
        ROUND_OFF
    )


def test_products_and_matrices_go_over_batches(rng):
    p, q = rng.normal(size=(5, 1, 4)), rng.normal(size=(3, 4))
    both = rotation.product(p, q)
    assert both.shape == (5, 3, 4)
    assert np.array_equal(both[4, 2], rotation.product(p[4, 0], q[2]))
    assert rotation.matrix(both).shape == (5, 3, 2, 2)
    assert rotation.bloch_matrix(both).shape == (5, 3, 3, 3)


@settings(deadline=None)
@given(angles, st.floats(-7, 7))
def test_turns_about_the_axes(angle, phase):
    for turn, axis in (
        (rotation.about_x(angle), (1, 0, 0)),
        (rotation.about_y(angle), (0, 1, 0)),
        (rotation.about_z(angle), (0, 0, 1)),
        (rotation.about_equator(angle, phase), (math.cos(phase), math.sin(phase), 0)),
    ):
        assert np.max(np.abs(rotation.matrix(turn) - reference.rotation(axis, angle))) < EXPONENTIAL


def test_the_order_of_signs_decides_the_sign_of_z():
    """The classic slip: listed in time order, y(+90) x(a) y(-90) is z(+a), the other is z(-a)."""
    y, a = rotation.about_y(math.pi / 2), 1.1
    x, back = rotation.about_x(a), rotation.about_y(-math.pi / 2)
    z = rotation.about_z
    assert np.max(np.abs(rotation.in_time_order(y, x, back) - z(a))) < ROUND_OFF
    assert np.max(np.abs(rotation.in_time_order(back, x, y) - z(-a))) < ROUND_OFF
    later_first = reference.rotation((0, 1, 0), -math.pi / 2) @ reference.rotation((1, 0, 0), a)
    expected = later_first @ reference.rotation((0, 1, 0), math.pi / 2)
    assert np.max(np.abs(rotation.matrix(rotation.in_time_order(y, x, back)) - expected)) < (
        EXPONENTIAL
    )


# the matrices as every textbook prints them (Nielsen and Chuang, section 4.2)
TEXTBOOK_GATES = {
    "hadamard": np.array([[1, 1], [1, -1]]) / math.sqrt(2),
    "s": np.diag([1, 1j]),
    "t": np.diag([1, np.exp(0.25j * math.pi)]),
    "s_inverse": np.diag([1, -1j]),
    "t_inverse": np.diag([1, np.exp(-0.25j * math.pi)]),
    "sqrt_x": np.array([[1 + 1j, 1 - 1j], [1 - 1j, 1 + 1j]]) / 2,
    "identity": np.eye(2),
}


def test_named_gates_are_the_textbooks():
    assert set(rotation.NAMED_GATES) == set(TEXTBOOK_GATES)
    for name, matrix in TEXTBOOK_GATES.items():
        overlap = np.trace(matrix.conj().T @ rotation.matrix(rotation.NAMED_GATES[name]))
        assert abs(overlap) / 2 == pytest.approx(1, abs=ROUND_OFF), name
        assert same_gate(rotation.from_matrix(matrix), rotation.NAMED_GATES[name]) < ROUND_OFF


@settings(deadline=None)
@given(units, st.floats(0, 7))
def test_unitary_comes_back_whatever_its_phase(q, phase):
    found = rotation.from_matrix(np.exp(1j * phase) * rotation.matrix(q))
    assert same_gate(found, q) < ROUND_OFF
    assert np.linalg.norm(found) == pytest.approx(1, abs=ROUND_OFF)


@pytest.mark.parametrize(
    ("matrix", "word"),
    [
        (np.eye(3), "2x2"),
        (np.diag([1.0, 1.0 + 1e-5]), "off by"),
        (np.zeros((2, 2)), "off by"),
        (np.full((2, 2), np.nan), "off by"),
        ([[1, 0], [1, 0]], "off by"),
    ],
)
def test_what_is_no_unitary_is_refused(matrix, word):
    with pytest.raises(ValueError, match=word):
        rotation.from_matrix(matrix)


@settings(deadline=None)
@given(st.floats(-7, 7), half_turns, st.floats(-7, 7))
def test_euler_angles_come_back(first, second, third):
    q = rotation.from_euler(first, second, third)
    a, b, c = rotation.euler_zyz(q)
    assert 0 <= b <= math.pi
    assert same_gate(rotation.from_euler(a, b, c), q) < EULER_ROUND_OFF


@settings(deadline=None)
@given(st.floats(-3, 3), st.floats(0.01, 3.13), st.floats(-3, 3))
def test_euler_angles_are_scipys(first, second, third):
    """Extrinsic in SciPy's words: in time order about fixed axes, lower-case letters."""
    q = rotation.from_euler(first, second, third)
    scipys = Rotation.from_euler("zyz", [first, second, third])
    assert np.max(np.abs(rotation.bloch_matrix(q) - scipys.as_matrix())) < ROUND_OFF
    turn = np.array(rotation.euler_zyz(q)) - scipys.as_euler("zyz")
    assert np.max(np.abs(np.remainder(turn + 1, 2 * math.pi) - 1)) < 1e-12  # near b = 0: 1/sin b


@settings(deadline=None)
@given(units)
def test_any_gate_is_y_x_y(q):
    a, b, c = rotation.euler_yxy(q)
    assert 0 <= b <= math.pi
    back = rotation.in_time_order(rotation.about_y(a), rotation.about_x(b), rotation.about_y(c))
    assert same_gate(back, q) < EULER_ROUND_OFF


def test_euler_angles_at_the_poles():
    for q in (*np.eye(4), *-np.eye(4)):
        assert same_gate(rotation.from_euler(*rotation.euler_zyz(q)), q) < EULER_ROUND_OFF
        a, b, c = rotation.euler_yxy(q)
        back = rotation.in_time_order(rotation.about_y(a), rotation.about_x(b), rotation.about_y(c))
        assert same_gate(back, q) < EULER_ROUND_OFF


@settings(deadline=None)
@given(axes, axes)
def test_between_carries_one_vector_into_the_other_the_short_way(start, end):
    q = rotation.between(start, end)
    a, b = (np.asarray(v) / np.linalg.norm(v) for v in (start, end))
    assert np.max(np.abs(rotation.bloch_matrix(q) @ a - b)) < 1e-11  # round-off over sin(angle)
    turn = 2 * math.acos(min(1.0, abs(q[0])))
    assert turn == pytest.approx(math.acos(np.clip(a @ b, -1, 1)), abs=1e-7)


def test_between_opposite_vectors():
    for start in ([0, 0, 1], [0, 0, -1], [1, 0, 0], [0.6, 0, 0.8]):
        q = rotation.between(start, [-v for v in start])
        assert np.max(np.abs(rotation.bloch_matrix(q) @ start + start)) < ROUND_OFF
        assert q[3] == 0  # the axis lies in the xy plane, where the drive is


@settings(deadline=None)
@given(units)
def test_canonical_is_one_of_two(q):
    one, other = rotation.canonical(q), rotation.canonical(-q)
    assert np.array_equal(one, other)
    assert one[0] > -1e-12


def test_half_turns_have_one_sign():
    assert np.array_equal(rotation.canonical([0, 0, -1, 0]), [0, 0, 1, 0])
    assert np.array_equal(rotation.canonical([1e-17, -1, 0, 0]), [-1e-17, 1, 0, 0])


@pytest.mark.parametrize(
    "call",
    [
        lambda: rotation.from_axis_angle((0, 0, 0), 1.0),
        lambda: rotation.from_axis_angle((1, 0), 1.0),
        lambda: rotation.from_axis_angle((1, 0, math.nan), 1.0),
        lambda: rotation.between((0, 0, 0), (0, 0, 1)),
        lambda: rotation.between((0, 0, 1), (0, 0)),
    ],
)
def test_no_direction_is_refused(call):
    with pytest.raises(ValueError, match="expected"):
        call()
