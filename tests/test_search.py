"""The search: it reaches what theory allows, no more, and the same each time.

Durations are chosen so that most searches share their compiled programs: 64 slices of which each
turns by the same angle, rounded up (``objective._rounded_up``).
"""

import math
from dataclasses import replace

import jax
import jax.numpy as jnp
import numpy as np
import pytest
import reference
from hypothesis import given, settings
from hypothesis import strategies as st
from job_case import SLICES, Z90_LIMIT, job_text, least_z90_infidelity, unitary_lines

from shaper.composite.limit import limit
from shaper.drive.bound import quadratures
from shaper.job import parse_job
from shaper.physics.propagate import propagate
from shaper.rotation import about_z, matrix
from shaper.search import batches, descent, gauss_newton, quasi_newton, stages
from shaper.search.objective import infidelities, log_power_mean, make_problem
from shaper.search.starts import starting_parameters
from shaper.target import Target, infidelity

jax.config.update("jax_enable_x64", True)

GOAL = 1e-9  # the default of jobs without a tolerance
TRACE = 1e-14  # the trace formula of the plain implementation loses digits below it
NEARLY = 5e-3  # two percent less drive, and arcs that end within a slice
STEPPED = 1e-3  # relative; how well a search must find the optimum of 64 slices
LONGEST = 4.757  # rad; 64 slices that turn by up to this share a program, from 4.0 on


def reference_infidelity(job, drive):
    durations = np.full(job.slices, job.slice_duration)
    wanted = matrix(job.target.quaternion)
    return reference.average_gate_infidelity(reference.propagator(drive, durations), wanted)


def reach(job, drive):
    return np.hypot(*drive.T) if job.bound == "circle" else np.max(np.abs(drive), axis=1)


@pytest.fixture(scope="module")
def just_enough():
    """z(90) at 1.001 of its limit, found with the default settings."""
    job = parse_job(job_text(1.001 * Z90_LIMIT))
    return job, descent.search(job)


@pytest.fixture(scope="module")
def too_short():
    """z(90) at 0.99 of its limit, and the looks at its progress."""
    job = parse_job(job_text(0.99 * Z90_LIMIT))
    looks = []
    return job, descent.search(job, lambda *look: looks.append(look)), looks


# ---- at the edge of what is possible


def test_a_thousandth_above_the_limit_is_enough(just_enough):
    job, found = just_enough
    assert found.status == "converged"
    assert found.infidelity <= GOAL
    assert reference_infidelity(job, found.drive) == pytest.approx(found.infidelity, abs=TRACE)
    assert np.max(reach(job, found.drive)) <= job.rabi_max


def test_below_the_limit_it_says_so_and_finds_what_theory_allows(too_short):
    """Never better than the best of all pulses of that length; as good as 64 slices can be."""
    job, found, _ = too_short
    assert found.status != "converged"
    floor = least_z90_infidelity(0.99 * Z90_LIMIT)
    assert found.infidelity >= floor * (1 - 1e-9)
    # The shortest exact z(90) of N equal slices takes T_N = 2 N arccos(cos(pi/N) /
    # cos((2 pi - a)/(2 N))); what is missing in time, squared, is what is missing in fidelity.
    a, n = math.pi / 2, SLICES
    stepped = 2 * n * math.acos(math.cos(math.pi / n) / math.cos((2 * math.pi - a) / (2 * n)))
    short = (1 - 0.99 * Z90_LIMIT / stepped) / (1 - 0.99)
    assert found.infidelity == pytest.approx(floor * short**2, rel=STEPPED)


def random_targets(bound, count):
    """Random z rotations and uniform rotations, of a length that shares the compiled program."""
    rng = np.random.default_rng(20260)
    speed = 1.0 if bound == "circle" else math.sqrt(2)
    z_turns, uniform = [], []
    while len(z_turns) < count or len(uniform) < count:
        angle, q = rng.uniform(-math.pi, math.pi), rng.normal(size=4)
        q /= np.linalg.norm(q)
        for kind, candidate in ((z_turns, about_z(angle)), (uniform, q)):
            turn = 1.02 * limit(Target(candidate), bound)
            if 4.0 < turn * speed < LONGEST and len(kind) < count:
                kind.append((unitary_lines(candidate), turn))
    return z_turns + uniform


@pytest.mark.parametrize("bound", ["circle", "box"])
def test_random_targets_just_above_the_limit(bound):
    for target, turn in random_targets(bound, 2):
        job = parse_job(job_text(turn, target, bound))
        found = descent.search(job)
        assert reference_infidelity(job, found.drive) <= GOAL
        assert np.max(reach(job, found.drive)) <= job.rabi_max


# ---- the same each time


def test_the_same_seed_gives_the_same_pulse_bit_for_bit(too_short):
    job, found, _ = too_short
    again = descent.search(job)
    assert again.drive.tobytes() == found.drive.tobytes()
    assert again.infidelity == found.infidelity
    assert again.statuses == found.statuses
    for name, leg in found.history.items():
        assert again.history[name].infidelity.tobytes() == leg.infidelity.tobytes()


def test_another_seed_starts_elsewhere(too_short):
    job, found, _ = too_short
    other = descent.search(replace(job, seed=job.seed + 1))
    mine, yours = found.history["exploring"].infidelity, other.history["exploring"].infidelity
    known = sum(not name.startswith("random") for name in found.names)
    assert np.array_equal(mine[:known, 0], yours[:known, 0])  # the textbook starts are the same
    assert not np.any(mine[known:, 0] == yours[known:, 0])
    assert other.infidelity == pytest.approx(found.infidelity, rel=STEPPED)  # and they agree


def test_a_start_does_not_depend_on_how_many_there_are():
    job = parse_job(job_text(4.2))
    many, names = starting_parameters(job)
    few, few_names = starting_parameters(replace(job, starts=5))
    assert few_names == names[:5] == ["sandwich", "geodesic", "random_0", "random_1", "random_2"]
    assert np.array_equal(few, many[:5])
    one, name = starting_parameters(replace(job, starts=1))
    assert (one.shape, name) == ((1, SLICES, 2), ["sandwich"])


@pytest.mark.parametrize("bound", ["circle", "box"])
@pytest.mark.parametrize("stretch", [1.0, 1.6])
def test_textbook_starts_are_nearly_their_target(bound, stretch):
    """However long the pulse: slowed down to it. Drawn in a little, where the map has a slope."""
    speed = 1.0 if bound == "circle" else math.sqrt(2)
    job = parse_job(job_text(stretch * 1.5 * math.pi / speed, bound=bound))
    values, names = starting_parameters(job)
    assert names[:3] == ["sandwich", "geodesic" if bound == "circle" else "box_optimal", "random_0"]
    for parameters in values[:2]:
        drive = np.asarray(quadratures(parameters, bound)) * job.rabi_max
        assert np.max(reach(job, drive)) <= job.rabi_max
        q = propagate(drive, np.full(SLICES, job.slice_duration), 0.0, 0.0)
        assert infidelity(q, job.target) < NEARLY


# ---- how it ends


def test_stop_keeps_the_best_so_far():
    job = parse_job(job_text(0.99 * Z90_LIMIT))
    asked = []

    def stop():
        asked.append(True)
        return len(asked) >= 2

    found = descent.search(job, stop=stop)
    assert found.status == "interrupted"
    assert len(asked) == 2
    steps = found.history["exploring"].infidelity.shape[1]
    assert steps <= 1 + 2 * descent.CHUNK
    best = np.nanmin(found.history["exploring"].infidelity[:, -1])
    assert found.infidelity == pytest.approx(best, rel=1e-9)


def test_progress_tells_stage_step_and_the_best_so_far(too_short):
    job, found, looks = too_short
    assert {look[0] for look in looks} == {"exploring"}
    assert [look[1] for look in looks] == sorted(look[1] for look in looks)
    assert all(0 < look[1] <= look[2] == job.iterations for look in looks)
    best = [look[3] for look in looks]
    assert best == sorted(best, reverse=True)
    assert best[-1] == pytest.approx(found.infidelity, rel=1e-6)


def test_every_start_has_a_status_with_a_remedy(too_short):
    job, found, _ = too_short
    assert len(found.statuses) == len(found.names) == job.starts
    assert set(found.statuses) <= set(descent.STATUSES)
    assert found.status == found.statuses[found.best]


# ---- the steps


def test_a_step_is_traced_once(just_enough):
    """The compiled program is the same for every chunk and for every job of one shape."""
    before = gauss_newton.advance._cache_size()
    for turn in (4.1, 4.3, 4.6):
        descent.search(replace(parse_job(job_text(turn)), iterations=10))
    assert gauss_newton.advance._cache_size() == before


def test_no_step_makes_it_worse(too_short):
    _, found, _ = too_short
    cost = found.history["exploring"].infidelity
    assert np.all(np.diff(cost, axis=1) <= 0)


def test_weights_of_the_steps_hold_the_gradient_of_the_power_mean(rng):
    """The least squares that a step solves has the slope of what is minimized, at any power."""
    job = parse_job(job_text(3.0, slices=10, tolerance=(0.05, 0.1)))
    problem = make_problem(job, (3, 5))
    parameters = rng.normal(size=(10, 2))

    def cost(p, power):
        return log_power_mean(infidelities(problem, p), problem.weight, power)

    slope_of = jax.jit(jax.grad(cost))
    errors, jacobian = jax.jit(gauss_newton._jacobian)(problem, parameters)
    for power in (1.0, 4.0, 64.0):
        slope = np.asarray(slope_of(parameters, power)).ravel()
        lean, residual = gauss_newton._lean(problem, errors, power)
        found = np.asarray(lean(jacobian).reshape(-1, errors.size) @ residual.ravel())
        cosine = found @ slope / (np.linalg.norm(found) * np.linalg.norm(slope))
        assert cosine == pytest.approx(1, abs=1e-12)


@pytest.mark.parametrize("points", [1, 15, 400])
def test_every_start_is_in_a_batch_and_batches_are_alike(points):
    for starts in (1, 2, 7, 16, 33, 100):
        dealt = batches.batches(starts, points)
        assert len({len(batch) for batch in dealt}) == 1
        assert sorted(set(np.concatenate(dealt))) == list(range(starts))
        spare = sum(map(len, dealt)) - starts
        assert 0 <= spare < len(dealt) or spare == 0


def test_the_number_of_cores_changes_nothing(monkeypatch):
    """Bit for bit: batches depend on the job only."""
    job = replace(parse_job(job_text(3.0, slices=20, tolerance=(0.05, 0.1))), starts=9)
    job = replace(job, iterations=20)
    found = []
    for count in (1, 3):
        monkeypatch.setattr(batches, "cores", lambda count=count: count)
        found.append(descent.search(job))
    assert np.array_equal(found[0].drive, found[1].drive)
    for name, leg in found[0].history.items():
        assert np.array_equal(leg.infidelity, found[1].history[name].infidelity, equal_nan=True)


def test_large_problems_go_down_by_quasi_newton_steps(monkeypatch):
    """The other method, taken where jacobians would not fit, reaches the same goal."""
    monkeypatch.setattr(stages, "LARGEST_JACOBIAN", 0)
    job = replace(parse_job(job_text(1.02 * Z90_LIMIT)), starts=4)
    problem = make_problem(job, (3, 5))
    assert stages.method_for(problem, job.starts) is quasi_newton
    found = descent.search(job)
    assert found.status == "converged"
    assert reference_infidelity(job, found.drive) <= GOAL


def test_the_size_decides_the_method():
    nominal = make_problem(parse_job(job_text(4.2)), (3, 5))
    assert stages.method_for(nominal, 32) is gauss_newton
    vast = make_problem(parse_job(job_text(60.0, slices=2000, tolerance=(0.05, 0.1))), (11, 15))
    assert stages.method_for(vast, 200) is quasi_newton


# ---- over a tolerance box


def over_the_box(job, drive, points=11):
    """[points^2]: infidelities by matrix exponentials on an even grid, edges included."""
    durations = np.full(job.slices, job.slice_duration)
    wanted = matrix(job.target.quaternion)
    side = np.linspace(-1, 1, points)
    errors = [(e * job.amplitude_tolerance, d * job.detuning_tolerance) for e in side for d in side]
    ends = [reference.propagator(drive, durations, *error) for error in errors]
    return np.array([reference.average_gate_infidelity(end, wanted) for end in ends])


@pytest.fixture(scope="module")
def robust():
    """z(90) within a box, by its worst point and by its mean; small, for the compiler's sake."""
    found = {}
    for minimize in ("worst", "mean"):
        search = f'minimize = "{minimize}"\nstarts = 8\niterations = 60'
        job = parse_job(job_text(3 * math.pi, slices=30, tolerance=(0.05, 0.1), search=search))
        pulse = descent.search(job)
        found[minimize] = job, pulse, over_the_box(job, pulse.drive)
    return found


def test_what_is_minimized_is_what_comes_out_small(robust):
    """Who lowers the worst case has the lower one, and who lowers the mean the lower mean."""
    worst, mean = robust["worst"][2], robust["mean"][2]
    assert np.max(worst) < 0.97 * np.max(mean)
    assert np.mean(mean) < 0.97 * np.mean(worst)
    for name, take in (("worst", np.max), ("mean", np.mean)):
        job, found, values = robust[name]
        assert np.max(reach(job, found.drive)) <= job.rabi_max
        # an even grid of 11 x 11 finds a little less, and its mean weighs the edges more
        assert found.infidelity == pytest.approx(take(values), rel=0.2)


def test_a_robust_pulse_beats_the_textbook_one(robust):
    """The sandwich's worst case over this box is 3.8e-2 in its 1.5 pi; twice the time: a third."""
    assert np.max(robust["worst"][2]) < 3.8e-2 / 3


def test_stages_narrow_down(robust):
    for name, names in (("worst", ["exploring", "refining", "finishing"]), ("mean", None)):
        history = robust[name][1].history
        assert list(history) == (names or ["exploring", "refining"])
        sizes = [len(leg.starts) for leg in history.values()]
        assert sizes == sorted(sizes, reverse=True)
        for leg in history.values():
            assert leg.infidelity.shape[0] == len(leg.starts)


def test_first_order_errors_vanish():
    """minimize = "first_order": infidelity of fourth order in either error, 16 times for twice."""
    text = job_text(
        4.2 * math.pi,
        slices=48,
        tolerance=(0.05, 0.1),
        search='minimize = "first_order"\nstarts = 8\nstop_infidelity = 1e-11',
    )
    job = parse_job(text)
    found = descent.search(job)
    durations = np.full(job.slices, job.slice_duration)
    for eps, delta in ((0.01, 0.0), (0.0, 0.02 * job.rabi_max)):
        small, large = (
            float(infidelity(propagate(found.drive, durations, s * eps, s * delta), job.target))
            for s in (1, 2)
        )
        assert 12 < large / small < 20
    assert reference_infidelity(job, found.drive) < 1e-10


# ---- the power mean


@settings(deadline=None, max_examples=50)
@given(
    st.lists(st.floats(0, 1), min_size=5, max_size=5),
    st.lists(st.floats(0.01, 1), min_size=5, max_size=5),
    st.sampled_from([1.0, 2.0, 4.0, 16.0]),
)
def test_power_mean_is_its_formula(values, weights, power):
    values, weights = np.array(values) + 1e-12, np.array(weights) / np.sum(weights)
    found = float(log_power_mean(values, weights, power))
    expected = math.log(float(weights @ values**power)) / power
    assert found == pytest.approx(expected, abs=1e-9)


def test_power_mean_neither_under_nor_overflows():
    weight = np.full(3, 1 / 3)
    tiny = float(log_power_mean(jnp.array([1e-30, 1e-31, 0.0]), weight, 256.0))
    assert tiny == pytest.approx(math.log(1e-30) - math.log(3) / 256, abs=1e-6)
    assert math.isfinite(float(log_power_mean(jnp.zeros(3), weight, 4.0)))
    slope = jax.grad(lambda v: log_power_mean(v, weight, 256.0))(jnp.array([1e-30, 1e-31, 0.0]))
    assert np.all(np.isfinite(slope))
