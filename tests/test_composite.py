"""The sandwich, the time-optimal drives and the box-bound sequences against published figures."""

import math

import numpy as np
import pytest
import reference
from hypothesis import given, settings
from hypothesis import strategies as st

from shaper import rotation
from shaper.composite import (
    Sequence,
    geodesic_drive,
    length,
    limit,
    place,
    sandwich,
    shortest_box,
    stepped,
    stepped_z_length,
    time_optimal,
)
from shaper.composite.geodesic import stepped_on_grid
from shaper.composite.sequence import concatenate, from_turns, full_rate
from shaper.job import parse_job
from shaper.physics.propagate import propagate
from shaper.target import Target, infidelity

DEG = math.pi / 180
EXACT = 1e-24  # infidelity of a sequence that is its target to 1e-12 in the rotation
TEN_DIGITS = 1e-9  # relative; the figures are quoted to about ten digits
TWELVE_DIGITS = 1e-12  # absolute, for durations quoted to thirteen
ROUND_OFF = 1e-14  # relative; sums of a few terms

# Total angle T W_max of the shortest z(theta) up to the global sign, sqrt(theta (4 pi - theta)):
# Garon, Glaser and Sugny, Phys. Rev. A 88, 043422 (2013); others solved in 50 digits from
# alpha = U11, b = |U21|: -s x + atan2(s sin x, cos x) = |arg alpha|, s = sqrt(1 - b^2/sin^2 x).
TIME_OPTIMAL = [  # target, length, phase rate / W_max, phase at the start
    (rotation.about_z(45 * DEG), 3.04183400698, -1.80739222823, 0.0),
    (rotation.about_z(90 * DEG), 4.155936441033, -1.13389341903, 0.0),
    (rotation.about_z(135 * DEG), 4.90480995836, -0.800640769025, 0.0),
    (rotation.about_z(180 * DEG), 5.4413980927, -0.57735026919, 0.0),
    (rotation.NAMED_GATES["hadamard"], 3.937910650848, -0.520028221453, 1.023912336),
    (rotation.about_x(90 * DEG), 1.570796326795, 0.0, 0.0),
    (rotation.about_x(180 * DEG), 3.14159265359, 0.0, 0.0),
    (rotation.from_axis_angle((1, 2, 3), 2.0), 3.396652116953, -0.969599847596, 2.75384540526),
]

# T_N in units of 1/W_max by z angle (degrees) and number of slices: 50-digit mpmath of
# 2 N arccos(cos(pi/N) / cos((2 pi - theta)/(2 N))), confirmed there by a search over all phases
# and amplitudes.
STEPPED = {
    (45, 4): 3.327377029669,
    (45, 256): 3.041892464052,
    (90, 8): 4.218009915095,
    (90, 64): 4.156875725102,
    (135, 16): 4.917199415328,
    (180, 8): 5.477074070896,
    (180, 256): 5.441432237734,
}

# Box bound: best values of a multi-start root search over the structures of the maximum
# principle, polished in mpmath; an independent search with 24 free slices found nothing shorter.
BOX = [
    (rotation.about_z(45 * DEG), 2.4015080413813),
    (rotation.about_z(90 * DEG), 3.3321622036188),
    (rotation.about_z(135 * DEG), 3.8875225708886),
    (rotation.about_z(180 * DEG), 4.4428829381584),
    (rotation.NAMED_GATES["hadamard"], 3.3116358295291),
    (rotation.about_x(180 * DEG), 3.1415926535898),
    (rotation.about_x(90 * DEG), 1.5707963267949),
    (rotation.from_axis_angle((1, 2, 3), 2.0), 2.7263738364459),
]

# Process infidelity of the z(theta) sandwich: exact values in 50-digit mpmath.
# theta (degrees): eps = 0.01, 0.05, 0.1, -0.1, then detuning / Rabi rate = the same.
SANDWICH = {
    30: (2.35432938e-05, 0.000604392515, 0.00249381853, 0.002171913)
    + (0.000250236742, 0.00626802193, 0.0250274596, 0.02451566),
    90: (0.000186008689, 0.00473761748, 0.0193108624, 0.0173967504)
    + (0.000301319848, 0.00764619831, 0.0309717372, 0.0283100786),
    135: (0.000350373601, 0.00883083558, 0.0354383033, 0.0334273646)
    + (0.000273044707, 0.00704187269, 0.0290681652, 0.0244231301),
    180: (0.000493378764, 0.0122737652, 0.0483446176, 0.0483446176)
    + (0.000203123378, 0.00537992084, 0.0229088881, 0.016734816),
}
ERRORS = (0.01, 0.05, 0.1, -0.1)

# from whole numbers: on the axes exactly, or clearly off them
unit_quaternions = (
    st.lists(st.integers(-100, 100), min_size=4, max_size=4)
    .filter(any)
    .map(lambda q: np.array(q) / np.linalg.norm(q))
)


def job(bound="circle", rate_MSps=1000.0, rabi_MHz=25.0):
    return parse_job(
        f"""
        [drive]
        rabi_max_MHz = {rabi_MHz}
        bound = "{bound}"
        sample_rate_MSps = {rate_MSps}
        dac_bits = 16
        [target]
        gate = "z"
        angle_deg = 90.0
        [pulse]
        duration_ns = {1e3 / rate_MSps * 60}
        slice_ns = {1e3 / rate_MSps}
        """
    )


def process_infidelity(sequence, target, eps=0.0, detuning=0.0):
    """1 - |tr(V^dag U)|^2/4 with a Rabi rate of 1 and the detuning in units of it."""
    drive = np.stack([np.cos(sequence.phases), np.sin(sequence.phases)], axis=-1)
    q = propagate(drive, sequence.angles, eps, detuning)
    return 1.5 * infidelity(q, target)


def test_the_order_of_signs_decides_the_sign_of_z():
    """y(+90) x(theta) y(-90) in time order is z(+theta); the classic slip gives z(-theta)."""
    theta = 50 * DEG
    y_plus = reference.rotation((0, 1, 0), math.pi / 2)
    y_minus = reference.rotation((0, 1, 0), -math.pi / 2)
    x = reference.rotation((1, 0, 0), theta)
    assert np.allclose(y_minus @ x @ y_plus, reference.rotation((0, 0, 1), theta), atol=1e-14)
    assert np.allclose(y_plus @ x @ y_minus, reference.rotation((0, 0, 1), -theta), atol=1e-14)

    found = sandwich(Target(rotation.about_z(theta)), "circle")
    assert np.allclose(found.angles, [math.pi / 2, theta, math.pi / 2])
    assert np.allclose(found.phases, [math.pi / 2, 0, -math.pi / 2])
    backwards = Sequence(found.angles, found.phases[::-1])
    assert infidelity(backwards.quaternion, Target(rotation.about_z(-theta))) < EXACT


@pytest.mark.parametrize("theta", SANDWICH)
def test_sandwich_infidelity_under_both_errors(theta):
    target = Target(rotation.about_z(theta * DEG))
    found = sandwich(target, "circle")
    for column, error in enumerate(ERRORS):
        amplitude = process_infidelity(found, target, eps=error)
        detuned = process_infidelity(found, target, detuning=error)
        assert amplitude == pytest.approx(SANDWICH[theta][column], rel=5e-9)  # nine digits quoted
        assert detuned == pytest.approx(SANDWICH[theta][column + 4], rel=5e-9)


@pytest.mark.parametrize("theta_deg", [30, 45, 90, 120, 180])
def test_sandwich_series_coefficients(theta_deg):
    """eps^2: theta^2/4 + (pi^2/4) sin^2(theta/2); f^2: 2 + sin(theta). Derived by computer algebra.

    Richardson extrapolation of the even part over two small errors reads off the coefficient.
    """
    theta = theta_deg * DEG
    target = Target(rotation.about_z(theta))
    found = sandwich(target, "circle")

    def leading(**unit):
        def even(h):
            values = [
                process_infidelity(found, target, **{k: s * h for k in unit}) for s in (1, -1)
            ]
            return sum(values) / 2 / h**2

        return (4 * even(1e-3) - even(2e-3)) / 3

    expected = theta**2 / 4 + math.pi**2 / 4 * math.sin(theta / 2) ** 2
    assert leading(eps=1) == pytest.approx(expected, rel=1e-8)  # what is left is of order h^4
    assert leading(detuning=1) == pytest.approx(2 + math.sin(theta), rel=1e-8)


@pytest.mark.parametrize("theta_deg", [0, 30, 180, 200, 270, 350, -90, 765])
def test_sandwich_takes_the_shortest_turn(theta_deg):
    """Duration pi + theta, theta wrapped to at most pi; z(0) needs no pulse."""
    target = Target(rotation.about_z(theta_deg * DEG))
    wrapped = abs(math.remainder(theta_deg * DEG, 2 * math.pi))
    expected = math.pi + wrapped if wrapped > 0 else 0.0
    assert length(sandwich(target, "circle"), "circle") == pytest.approx(expected, rel=ROUND_OFF)
    assert infidelity(sandwich(target, "circle").quaternion, target) < EXACT


def test_sandwich_in_the_box_is_turned_by_45_degrees():
    """Both quadratures at their bound: (pi + theta)/sqrt 2."""
    for theta in (0.3, math.pi / 2, math.pi):
        found = sandwich(Target(rotation.about_z(theta)), "box")
        assert length(found, "box") == pytest.approx((math.pi + theta) / math.sqrt(2), rel=1e-14)
        assert np.allclose(np.abs(np.cos(found.phases)), math.sqrt(0.5))
    # x(90) is shorter along its own axis
    assert length(sandwich(Target(rotation.about_x(1.0)), "box"), "box") == pytest.approx(1.0)


@settings(deadline=None, max_examples=60)
@given(q=unit_quaternions, bound=st.sampled_from(["circle", "box"]))
def test_sandwich_meets_any_target(q, bound):
    target = Target(q)
    found = sandwich(target, bound)
    assert infidelity(found.quaternion, target) < EXACT
    assert len(found.angles) <= 3
    assert np.all(found.angles <= math.pi + 1e-12)
    assert length(found, bound) >= limit(target, bound) * (1 - 1e-12)


@pytest.mark.parametrize("q, duration, rate, phase", TIME_OPTIMAL)
def test_time_optimal_against_published(q, duration, rate, phase):
    found = time_optimal(Target(q))
    assert found.length == pytest.approx(duration, abs=1e-11)  # quoted to eleven decimals
    assert found.rate == pytest.approx(rate, abs=1e-11)
    assert found.phase == pytest.approx(phase, abs=TEN_DIGITS)


@settings(deadline=None, max_examples=60)
@given(theta=st.floats(1e-6, 3.14), sign=st.sampled_from([1, -1]))
def test_time_optimal_z_closed_form(theta, sign):
    """sqrt(theta (4 pi - theta)), phase rate against the sense of the turn."""
    found = time_optimal(Target(rotation.about_z(sign * theta)))
    assert found.length == pytest.approx(math.sqrt(theta * (4 * math.pi - theta)), rel=1e-11)
    assert found.rate * found.length == pytest.approx(sign * (theta - 2 * math.pi), rel=1e-11)


@settings(deadline=None, max_examples=40)
@given(q=unit_quaternions)
def test_the_geodesic_is_its_target(q):
    """Second order in the slice: from 200 to 400 slices the rotation error falls fourfold."""
    target, found = Target(q), time_optimal(Target(q))
    errors = []
    for slices in (400, 800):
        drive = geodesic_drive(found, slices)
        end = propagate(drive, np.full(slices, found.length / slices), 0.0, 0.0)
        errors.append(math.sqrt(infidelity(end, target)))
    assert errors[0] < 1e-3
    assert errors[1] <= errors[0] / 3.5 + 1e-12


@pytest.mark.parametrize("theta_deg, slices", STEPPED)
def test_stepped_z_against_published(theta_deg, slices):
    theta = theta_deg * DEG
    target = Target(rotation.about_z(theta))
    assert stepped_z_length(theta, slices) == pytest.approx(
        STEPPED[theta_deg, slices], abs=TWELVE_DIGITS
    )
    found = stepped(target, slices)
    assert np.sum(found.angles) == pytest.approx(STEPPED[theta_deg, slices], abs=TWELVE_DIGITS)
    assert np.allclose(np.diff(found.phases), (theta - 2 * math.pi) / slices)
    assert infidelity(found.quaternion, target) < EXACT


@settings(deadline=None, max_examples=40)
@given(q=unit_quaternions, slices=st.integers(16, 400))
def test_stepped_is_exact_for_any_target(q, slices):
    target = Target(q)
    found = stepped(target, slices)
    assert infidelity(found.quaternion, target) < EXACT
    assert np.sum(found.angles) >= time_optimal(target).length * (1 - 1e-12)


@pytest.mark.parametrize("q, duration", BOX)
def test_shortest_box_against_published(q, duration):
    found = shortest_box(Target(q))
    assert length(found, "box") == pytest.approx(duration, abs=TWELVE_DIGITS)
    assert infidelity(found.quaternion, Target(q)) < EXACT


@settings(deadline=None, max_examples=40)
@given(q=unit_quaternions)
def test_shortest_box_is_exact_and_not_longer_than_the_sandwich(q):
    target = Target(q)
    found = shortest_box(target)
    assert infidelity(found.quaternion, target) < EXACT
    assert length(found, "box") <= length(sandwich(target, "box"), "box") * (1 + 1e-12)
    # the box holds the circle of W_max and lies in that of sqrt(2) W_max
    assert length(found, "box") >= time_optimal(target).length / math.sqrt(2) * (1 - 1e-12)


def test_twenty_random_targets_under_the_box(rng):
    for q in rng.normal(size=(20, 4)):
        target = Target(q / np.linalg.norm(q))
        found = shortest_box(target)
        assert infidelity(found.quaternion, target) < EXACT
        assert length(found, "box") <= length(sandwich(target, "box"), "box") * (1 + 1e-12)


@settings(deadline=None, max_examples=8)
@given(q=unit_quaternions, bound=st.sampled_from(["circle", "box"]))
def test_one_turn_is_enough_with_a_free_axis_or_an_axis_in_the_plane(q, bound):
    free = Target(q, np.array([0.0, 0.0, 1.0]))
    found = sandwich(free, bound)
    assert infidelity(found.quaternion, free) < EXACT
    expected = 2 * math.asin(min(1.0, math.hypot(q[1], q[2])))
    if bound == "circle":  # asin near a half turn loses half the digits
        assert length(found, bound) == pytest.approx(expected, abs=1e-7)
    assert length(found, bound) >= limit(free, bound) * (1 - 1e-9)
    flat = Target(rotation.from_axis_angle((q[0], 0.3 + abs(q[1]), 0.0), 2.0))
    assert sandwich(flat, "circle").angles == pytest.approx([2.0])
    end = rotation.bloch_matrix(q) @ [0.0, 0.6, 0.8]
    state = Target(rotation.between((0.0, 0.6, 0.8), end), end, "state")
    assert infidelity(sandwich(state, bound).quaternion, state) < EXACT
    assert length(sandwich(state, bound), bound) >= limit(state, bound) * (1 - 1e-9)


def test_a_free_axis_takes_the_shortest_member():
    """Up to a final z every gate is one pulse along the equator, 2 arcsin|U21| long."""
    q = rotation.from_axis_angle((1, 2, 3), 2.0)
    free = Target(q, np.array([0.0, 0.0, 1.0]))
    expected = 2 * math.asin(math.hypot(q[1], q[2]))
    assert time_optimal(free).length == pytest.approx(expected, rel=1e-10)
    assert infidelity(sandwich(free, "circle").quaternion, free) < EXACT
    inversion = Target(rotation.between((0, 0, 1), (0, 0, -1)), np.array([0.0, 0.0, -1.0]), "state")
    assert limit(inversion, "circle") == pytest.approx(math.pi, rel=1e-10)
    assert limit(inversion, "box") == pytest.approx(math.pi / math.sqrt(2), rel=1e-9)
    phase_gate = Target(rotation.about_z(1.0), np.array([0.0, 0.0, 1.0]))
    assert limit(phase_gate, "circle") == limit(phase_gate, "box") == 0.0
    assert len(sandwich(phase_gate, "box").angles) == 0


@settings(deadline=None, max_examples=60)
@given(
    turns=st.lists(st.tuples(st.floats(0, 7), st.floats(-7, 7)), max_size=5),
    bound=st.sampled_from(["circle", "box"]),
)
def test_placing_keeps_every_angle_and_the_bound(turns, bound):
    """Each arc is rounded up to whole samples and its amplitude lowered: same rotation."""
    sequence = Sequence(np.array([a for a, _ in turns]), np.array([p for _, p in turns]))
    here = job(bound)
    pulse = place(sequence, here)
    end = propagate(pulse.drive, pulse.segment_durations, 0.0, 0.0)
    assert infidelity(end, Target(sequence.quaternion)) < 1e-17  # a hair of 1e-9 of a sample
    exact = sequence.angles / (here.rabi_max * full_rate(sequence.phases, bound))
    assert pulse.duration >= np.sum(exact) * (1 - 1e-9)
    assert pulse.duration <= np.sum(exact) + max(len(turns), 1) / here.sample_rate + 1e-15
    reach = np.hypot(*pulse.drive.T) if bound == "circle" else np.max(np.abs(pulse.drive), axis=1)
    assert np.all(reach <= here.rabi_max * (1 + 1e-12))


def test_round_off_does_not_add_a_sample():
    """25 MHz turns by 90 degrees in 10 ns exactly: ten samples, not eleven."""
    quarter = Sequence([math.pi / 2 * (1 + 1e-12)], [0.0])
    assert place(quarter, job()).samples.tolist() == [10]
    assert place(Sequence([math.pi / 2 * (1 + 1e-6)], [0.0]), job()).samples.tolist() == [11]
    assert place(Sequence([], []), job()).samples.tolist() == [1]


def test_the_sandwich_on_a_coarse_grid_is_still_exact():
    """7 MSps against 1 MHz: no arc is a whole number of samples."""
    target = Target(rotation.about_z(50 * DEG))
    pulse = place(sandwich(target, "circle"), job(rate_MSps=7.0, rabi_MHz=1.0))
    assert pulse.samples.tolist() == [2, 1, 2]
    assert infidelity(propagate(pulse.drive, pulse.segment_durations, 0, 0), target) < EXACT


def test_the_geodesic_on_the_grid_is_exact_and_short():
    target, here = Target(rotation.about_z(math.pi / 2)), job()
    pulse = place(stepped_on_grid(target, here), here)
    assert infidelity(propagate(pulse.drive, pulse.segment_durations, 0, 0), target) < EXACT
    shortest = time_optimal(target).length / here.rabi_max
    assert shortest < pulse.duration < shortest + 2 / here.sample_rate


def test_turns_merge_and_wrong_arcs_are_refused():
    merged = from_turns([(0.5, 0.0), (0.25, 0.0), (-0.75, math.pi / 2), (0.0, 1.0)])
    assert merged.angles.tolist() == [0.75, 0.75]
    assert merged.phases.tolist() == [0.0, -math.pi / 2]
    assert len(from_turns([(0.5, 0.0), (0.5, math.pi)]).angles) == 0
    assert concatenate([merged, merged]).angles.tolist() == [0.75] * 4
    with pytest.raises(ValueError, match="at least 0"):
        Sequence([-1.0], [0.0])
    with pytest.raises(ValueError, match="as many phases"):
        Sequence([1.0], [0.0, 1.0])
