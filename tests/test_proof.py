"""The guaranteed worst case: never below any sample, and close to the largest."""

import math
from pathlib import Path

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from shaper import rotation
from shaper.evidence import proof_polynomial as polynomial
from shaper.evidence.proof import _Search, prove, prove_pulse
from shaper.job import parse_job
from shaper.physics.propagate import propagate
from shaper.pulse import make_pulse
from shaper.store import load_waveform
from shaper.target import Target, infidelity

ROBUST = Path(__file__).parent / "data" / "robust_z90.h5"
RABI_MAX = 2 * math.pi * 25e6  # rad/s, the Alder bench
SAMPLES = 100_000  # random points of the box, per pulse
# the samples are floats themselves; the smallest worst case here is some 1e-9
SAMPLE_ROUND_OFF = 1e-10  # relative, on an infidelity


def textbook_infidelity(drive, durations, rows, scale, eps, delta):
    """A second implementation: Cayley-Klein a, b of U = [[a, -b*], [b, a*]], slice by slice."""
    a, b = np.ones(eps.shape, complex), np.zeros(eps.shape, complex)
    for (wx, wy), tau in zip(drive, durations, strict=True):
        x, y, z = wx * (1 + eps), wy * (1 + eps), delta
        rate = np.sqrt(x * x + y * y + z * z)
        s = np.sin(rate * tau / 2) / np.where(rate > 0, rate, 1)
        p = np.cos(rate * tau / 2) - 1j * s * z
        r = s * (y - 1j * x)
        a, b = p * a - r.conj() * b, r * a + p.conj() * b
    q = np.stack([a.real, -b.imag, b.real, -a.imag])
    return scale * np.sum((rows @ q) ** 2, axis=0)


def largest_of_random_points(rng, drive, durations, target, amplitude, detuning, offset=0.0):
    eps = rng.uniform(-amplitude, amplitude, SAMPLES)
    delta = offset + rng.uniform(-detuning, detuning, SAMPLES)
    return textbook_infidelity(drive, durations, target.error_rows, target.scale, eps, delta).max()


def random_case(rng):
    """A pulse, a target that it meets at the center or misses, and a box of any size."""
    segments = int(rng.integers(1, 7))
    turn = 10 ** rng.uniform(-1, 1.5)  # rad, total
    share = rng.dirichlet(np.ones(segments))
    phase = rng.uniform(-np.pi, np.pi, segments)
    drive = np.stack([np.cos(phase), np.sin(phase)], -1) * rng.uniform(0.2, 1, (segments, 1))
    durations = turn * share
    amplitude = 10 ** rng.uniform(-4, -0.5)
    detuning = 10 ** rng.uniform(-2, 1.3) / np.sum(durations)
    offset = rng.choice([0.0, 0.3])
    q = propagate(drive, durations, 0.0, offset)
    if rng.uniform() < 0.3:
        q = rng.normal(size=4)
        q /= np.linalg.norm(q)
    kind = rng.integers(3)
    if kind == 0:
        target = Target(q)
    elif kind == 1:
        target = Target(q, np.array([0.0, 0.0, 1.0]))
    else:
        target = Target(q, np.array([0.6, 0.0, 0.8]), "state")
    return drive, durations, target, amplitude, detuning, offset


def test_never_below_a_random_sample_and_within_one_percent(rng):
    """200 random pulses of all kinds, 100,000 random points each."""
    tight = 0
    for _ in range(200):
        case = random_case(rng)
        proof = prove(*case)
        found = largest_of_random_points(rng, *case)
        assert found <= proof.guaranteed * (1 + SAMPLE_ROUND_OFF)
        assert proof.sampled <= proof.guaranteed
        assert proof.guaranteed <= 1.01 * proof.sampled
        tight += proof.guaranteed < 0.99 * case[2].scale
    assert tight > 100  # most have a worst case that is not the trivial one


def test_a_bound_at_every_tolerance(rng):
    """Coarse settings lean on each factor of the bound; it must carry them too."""
    for _ in range(60):
        case = random_case(rng)
        fine = prove(*case, tolerance=1e-3)
        for tolerance in (1.0, 0.1):
            coarse = prove(*case, tolerance=tolerance)
            assert fine.sampled <= coarse.guaranteed
            assert coarse.guaranteed <= (1 + tolerance) * coarse.sampled
            assert fine.guaranteed >= coarse.sampled


def selective_inversion(duration, resonance):
    """A weak half turn, resonant at one detuning only, in steps of 1/2 rad/s^-1."""
    steps = int(2 * duration)
    durations = np.full(steps, duration / steps)
    phase = resonance * (np.arange(steps) + 0.5) * durations
    return math.pi / duration * np.stack([np.cos(phase), np.sin(phase)], -1), durations


@pytest.mark.parametrize("duration", [100.0, 400.0, 1500.0])
def test_a_spike_between_grid_points_is_found(duration):
    """Nothing happens but within 1/duration of one detuning: there the qubit is inverted.

    For a target "leave it alone, up to z" the worst infidelity is then 2/3 (a half turn), by
    construction; a grid over the range sees a fraction of it.
    """
    drive, durations = selective_inversion(duration, 0.437)
    target = Target(rotation.IDENTITY, np.array([0.0, 0.0, 1.0]))
    proof = prove(drive, durations, target, 0.0, 1.0)
    grid = textbook_infidelity(
        drive, durations, target.error_rows, target.scale, np.zeros(41), np.linspace(-1, 1, 41)
    )
    assert np.max(grid) < 0.9 * proof.sampled
    assert proof.guaranteed <= 1.01 * proof.sampled
    # the staircase of phases weakens the resonant part by sinc(0.437/4), 0.2 %
    assert proof.sampled > 0.99 * target.scale
    assert abs(proof.at_delta - 0.437) < 1 / duration


@pytest.mark.parametrize("seed", range(4))
def test_spiky_pulses(seed):
    """Long pulses over a wide range of detuning: hundreds of features in the box."""
    rng = np.random.default_rng(seed)
    segments = 40
    phase = rng.uniform(-np.pi, np.pi, segments)
    drive = 0.02 * np.stack([np.cos(phase), np.sin(phase)], -1)
    durations = rng.uniform(1, 9, segments)
    target = Target(rotation.IDENTITY, np.array([0.0, 0.0, 1.0]))
    case = (drive, durations, target, 0.1, 1.5)
    proof = prove(*case)
    assert proof.boxes > 20
    assert largest_of_random_points(rng, *case) <= proof.guaranteed <= 1.01 * proof.sampled


def test_robust_pulse_from_a_file(rng):
    """A stored z(90), 8 pi / W_max long, made on a grid of 5 x 7 errors, over its whole box.

    Between the points of that grid it is worse by a fifth; the proof knows.
    """
    waveform = load_waveform(ROBUST)
    job, pulse = parse_job(waveform.job_text), waveform.pulses["shaped"]
    box = (job.target, job.amplitude_tolerance, job.detuning_tolerance)
    proof = prove_pulse(pulse, job)
    assert largest_of_random_points(rng, *pulse.played, *box) <= proof.guaranteed < 2e-6
    assert proof.guaranteed <= 1.01 * proof.sampled
    assert proof.guaranteed == pytest.approx(waveform.scores["shaped"].guaranteed, rel=1e-6)
    eps, delta = np.meshgrid(
        job.amplitude_tolerance * polynomial.samples(4),
        job.detuning_tolerance * polynomial.samples(6),
    )
    on_grid = infidelity(propagate(*pulse.played, eps, delta), job.target)
    assert np.max(on_grid) < 0.9 * proof.sampled


# ---- against closed forms


@pytest.mark.parametrize("amplitude", [0.3, 0.05, 1e-3, 1e-6])
def test_over_rotation_in_closed_form(amplitude):
    """A half turn with amplitude error a over-rotates by pi a: 2/3 sin(pi a / 2)^2 at worst."""
    exact = 2 / 3 * math.sin(math.pi * amplitude / 2) ** 2
    drive, durations = np.array([[RABI_MAX, 0.0]]), np.array([math.pi / RABI_MAX])
    proof = prove(drive, durations, Target(rotation.about_x(math.pi)), amplitude, 0.0)
    assert exact <= proof.guaranteed <= 1.01 * exact
    assert proof.at_delta == 0 and abs(proof.at_eps) == amplitude


@pytest.mark.parametrize("turn", [1e-3, 1.0, 3.0, 50.0])
def test_idle_qubit_in_closed_form(turn):
    """Left alone for T it turns by delta T about z: 2/3 sin(delta T / 2)^2, at most 2/3."""
    exact = 2 / 3 * (math.sin(turn / 2) ** 2 if turn < math.pi else 1)
    proof = prove(np.zeros((3, 2)), np.full(3, 1 / 3), Target(rotation.IDENTITY), 0.05, turn)
    assert exact <= proof.guaranteed * (1 + SAMPLE_ROUND_OFF)
    assert proof.guaranteed <= 1.01 * exact


def test_bb1_in_closed_form():
    """BB1 about a half turn: its error is even and of sixth order in the amplitude.

    Source: Wimperis, J. Magn. Reson. A 109, 221 (1994): phases arccos(-theta / 4 pi), 3 times it.
    """
    phi = math.acos(-1 / 4)
    phases, turns = np.array([0, phi, 3 * phi, phi]), np.array([1, 1, 2, 1]) * math.pi
    drive = RABI_MAX * np.stack([np.cos(phases), np.sin(phases)], -1)
    target = Target(rotation.about_x(math.pi))
    worst = [prove(drive, turns / RABI_MAX, target, a, 0.0).guaranteed for a in (0.02, 0.01)]
    assert worst[1] < 1e-8
    assert math.log2(worst[0] / worst[1]) == pytest.approx(6, abs=0.05)  # 1 % each is 0.03


def test_without_a_box_it_is_the_nominal_infidelity():
    drive, durations = np.array([[RABI_MAX, 0.0]]), np.array([1e-8])
    target = Target(rotation.about_x(1.5))
    exact = 2 / 3 * math.sin((RABI_MAX * 1e-8 - 1.5) / 2) ** 2
    proof = prove(drive, durations, target, 0.0, 0.0)
    assert proof.guaranteed == pytest.approx(exact, rel=1e-9) and proof.boxes == 1


# ---- what the bound is made of


@settings(max_examples=60, deadline=None)
@given(
    seed=st.integers(0, 2**32 - 1),
    degree=st.integers(0, 30),
    extra=st.integers(1, 90),
)
def test_samples_bound_a_polynomial(seed, degree, extra):
    """Riesz: also with hardly more samples than the degree."""
    rng = np.random.default_rng(seed)
    intervals = degree + extra if degree else 0
    p = np.polynomial.Chebyshev(rng.normal(size=degree + 1))
    largest = np.max(np.abs(p(np.cos(np.linspace(0, np.pi, 20_001)))))
    seen = np.max(np.abs(p(polynomial.samples(intervals))))
    # round-off of the series, whose terms are of size one
    assert largest <= polynomial.sampling_factor(degree, intervals) * seen + 1e-12


def test_sampling_factor_refuses_too_few_samples():
    with pytest.raises(ValueError, match="expected more than the degree 5, got 5"):
        polynomial.sampling_factor(5, 5)


@pytest.mark.parametrize("reach", [0.1, 1.0, 4.0])
@pytest.mark.parametrize("points", [1, 2, 5, 12])
def test_interpolation_error_holds_and_is_sharp(reach, points):
    """cos(reach x + phase) has just the derivatives allowed."""
    matrix = polynomial.evaluation_matrix(points, 400)
    nodes, fine = polynomial.chebyshev_zeros(points), polynomial.samples(400)
    worst = 0.0
    for phase in np.linspace(0, np.pi, 25):
        off = matrix @ np.cos(reach * nodes + phase) - np.cos(reach * fine + phase)
        worst = max(worst, np.max(np.abs(off)))
    bound = polynomial.interpolation_error(reach, points)
    round_off = 1e-14  # of the matrix, rows summing up to a few
    assert worst <= bound + round_off
    assert bound <= 4 * worst + round_off  # not far above: the phase that is worst is among them


def test_interpolation_matrix_and_lebesgue_bound():
    for points in (1, 2, 3, 8, 20, 45):
        matrix = polynomial.evaluation_matrix(points, 999)
        nodes = polynomial.chebyshev_zeros(points)
        fine = polynomial.samples(999)
        for power in {0, points // 2, points - 1}:
            np.testing.assert_allclose(matrix @ nodes**power, fine**power, atol=1e-13)
        assert np.max(np.sum(np.abs(matrix), axis=1)) <= polynomial.lebesgue_bound(points)
        assert np.max(np.sum(np.abs(matrix), axis=1)) >= 0.8 * polynomial.lebesgue_bound(points)


@settings(max_examples=100, deadline=None)
@given(seed=st.integers(0, 2**32 - 1))
def test_end_point_moves_no_faster_than_stated(seed):
    """T/2 per unit of detuning, half the total turn per unit of amplitude, and the mixed second."""
    rng = np.random.default_rng(seed)
    drive, durations = rng.normal(size=(5, 2)), rng.uniform(0.1, 2, 5)
    a, b = np.sum(np.hypot(*drive.T) * durations) / 2, np.sum(durations) / 2
    eps, delta, h, k = rng.uniform(-1, 1, 4)
    corners = [(0, 0), (h, 0), (0, k), (h, k)]
    q = [propagate(drive, durations, eps + i, delta + j) for i, j in corners]
    slack = 1 + 1e-9  # differences of floats
    assert np.linalg.norm(q[1] - q[0]) <= a * abs(h) * slack
    assert np.linalg.norm(q[2] - q[0]) <= b * abs(k) * slack
    assert np.linalg.norm(q[3] - q[2] - q[1] + q[0]) <= a * b * abs(h * k) * slack + 1e-14


def test_rounding_allowance_covers_the_propagator():
    """Against a product of 50-digit exponentials, also at large angles."""
    rng = np.random.default_rng(5)
    for segments, size in ((3, 1.0), (200, 1.0), (20, 1e4)):
        drive, durations = size * rng.normal(size=(segments, 2)), rng.uniform(0.1, 1, segments)
        search = _Search(drive, durations, Target(rotation.IDENTITY), 0.3, 5.0, 2.0)
        eps, delta = 0.3 * rng.uniform(-1, 1), 2 + 5 * rng.uniform(-1, 1)
        with mpmath.workdps(50):
            e, d = mpmath.mpf(eps), mpmath.mpf(delta)
            total = [mpmath.mpf(1), 0, 0, 0]
            for (wx, wy), tau in zip(drive.tolist(), durations.tolist(), strict=True):
                x, y, z = (1 + e) * wx * tau / 2, (1 + e) * wy * tau / 2, d * tau / 2
                angle = mpmath.sqrt(x * x + y * y + z * z)
                s = mpmath.sin(angle) / angle
                total = quaternion_product([mpmath.cos(angle), s * x, s * y, s * z], total)
            q = propagate(drive, durations, eps, delta)
            off = mpmath.norm([mpmath.mpf(c) - t for c, t in zip(q.tolist(), total, strict=True)])
        assert 0 < off <= search.node_error
        assert search.node_error < 1e-15 * (10 * segments + 10 * size * segments)  # nor absurd


def quaternion_product(p, q):
    return [
        p[0] * q[0] - p[1] * q[1] - p[2] * q[2] - p[3] * q[3],
        p[0] * q[1] + p[1] * q[0] + p[2] * q[3] - p[3] * q[2],
        p[0] * q[2] - p[1] * q[3] + p[2] * q[0] + p[3] * q[1],
        p[0] * q[3] + p[1] * q[2] - p[2] * q[1] + p[3] * q[0],
    ]


def test_cut_off_covers_the_interpolant(rng):
    """Interpolating q itself with few points: never further off than stated, and not far below."""
    closest = 0.0
    for _ in range(60):
        case = random_case(rng)
        search = _Search(*case)
        points = (int(rng.integers(1, 7)), int(rng.integers(1, 7)))
        intervals = (17, 17)
        half = search.half / search.cuts
        nodes = [half[i] * polynomial.chebyshev_zeros(points[i]) for i in (0, 1)]
        fine = [half[i] * polynomial.samples(intervals[i]) for i in (0, 1)]
        center = [search.box_center(0, axis) for axis in (0, 1)]
        matrices = map(polynomial.evaluation_matrix, points, intervals)

        def q_at(axes, case=case, center=center):
            eps, delta = np.meshgrid(center[0] + axes[0], center[1] + axes[1], indexing="ij")
            return propagate(*case[:2], eps, delta)

        off = np.einsum("ia,jb,abc->ijc", *matrices, q_at(nodes)) - q_at(fine)
        largest = np.max(np.linalg.norm(off, axis=-1))
        assert largest <= search.cut_off(points) + 1e-13  # round-off of the product
        closest = max(closest, largest / search.cut_off(points))
    assert closest > 0.5


@pytest.mark.parametrize("points", [(1, 1), (2, 3), (4, 4)])
def test_a_bound_with_too_few_points(rng, points):
    """With a bad interpolant the bound is loose, and a bound all the same."""
    for _ in range(60):
        case = random_case(rng)
        search = _Search(*case)
        search.try_points(*search.first_points())
        assert prove(*case).sampled <= search.bound(points, 0.01) * (1 + SAMPLE_ROUND_OFF)


# ---- limits and wiring


def test_rounding_floor_is_honest():
    """A perfect pulse on a tiny box: the bound stays above zero, at the level of round-off."""
    drive, durations = np.array([[RABI_MAX, 0.0]]), np.array([math.pi / RABI_MAX])
    proof = prove(drive, durations, Target(rotation.about_x(math.pi)), 1e-15, 0.0)
    exact = 2 / 3 * math.sin(math.pi * 1e-15 / 2) ** 2
    assert exact <= proof.guaranteed < 1e-24
    search = _Search(drive, durations, Target(rotation.about_x(math.pi)), 1e-15, 0.0, 0.0)
    assert proof.guaranteed >= 2 / 3 * search.node_error**2  # less cannot be known from floats


def test_too_many_boxes_give_the_trivial_bound():
    drive, durations = np.full((10, 2), 0.01), np.full(10, 100.0)
    proof = prove(drive, durations, Target(rotation.IDENTITY), 0.1, 1e5, max_boxes=100)
    assert proof.boxes > 100 and proof.guaranteed == pytest.approx(2 / 3)
    proof = prove(drive, durations, Target(rotation.IDENTITY), 0.1, 1e50)
    assert proof.guaranteed == pytest.approx(2 / 3)


@pytest.mark.parametrize(
    "box, fault",
    [
        ({"amplitude": -0.1}, "expected finite half widths"),
        ({"detuning": math.nan}, "expected finite half widths"),
        ({"offset": math.inf}, "expected finite half widths"),
        ({"tolerance": 1e-9}, "tolerance: expected 1e-4 to 1"),
        ({"durations": np.array([math.nan])}, "expected finite rates and durations"),
    ],
)
def test_bad_input(box, fault):
    arguments = {"amplitude": 0.1, "detuning": 1.0, "durations": np.ones(1), **box}
    with pytest.raises(ValueError, match=fault):
        prove(np.ones((1, 2)), target=Target(rotation.IDENTITY), **arguments)


def test_pulse_is_proved_as_its_codes_play_it(rng):
    job = parse_job(
        """title = "Quarter turn, Alder bench, alder-1"
[qubit]
detuning_MHz = 0.4
[drive]
rabi_max_MHz = 25.0
sample_rate_MSps = 1000.0
dac_bits = 5
[target]
gate = "x"
angle_deg = 90.0
[tolerance]
amplitude = 0.02
detuning_MHz = 0.5
[pulse]
duration_ns = 20.0
slice_ns = 10.0
"""
    )
    rate = 0.49 * RABI_MAX  # not one of the sixteen levels
    pulse = make_pulse(
        np.array([[rate, 0.0], [rate, 0.0]]),
        [10, 10],
        full_scale=job.rabi_max,
        bits=job.dac_bits,
        bound=job.bound,
        sample_rate=job.sample_rate,
        origin="composite",
    )
    proof = prove_pulse(pulse, job)
    played = 7 / 15 * RABI_MAX  # the nearest level
    box = (job.target, 0.02, 2 * math.pi * 0.5e6, 2 * math.pi * 0.4e6)
    as_played = prove(np.array([[played, 0.0]]), np.array([20e-9]), *box)
    assert proof.guaranteed == pytest.approx(as_played.guaranteed, rel=1e-9)
    assert largest_of_random_points(rng, *pulse.played, *box) <= proof.guaranteed
    assert abs(proof.guaranteed / prove(pulse.drive, [10e-9, 10e-9], *box).guaranteed - 1) > 0.1
