"""The ladder against matrix exponentials, central differences and published leakage tables."""

from dataclasses import replace

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from scipy.linalg import expm

from shaper import rotation
from shaper.drive.line import filtered, first_order, taps
from shaper.errors import InputError
from shaper.job import parse_job
from shaper.physics import leakage, two_level
from shaper.physics.ladder import (
    Ladder,
    derivative_corrected,
    errors_and_jacobian,
    make_chain,
    plan,
    propagate_qubit,
)
from shaper.search.descent import search
from shaper.search.duration import search_shortest
from shaper.target import Target, infidelity

jax.config.update("jax_enable_x64", True)

EXACT = 2e-14  # round-off of some tens of slices
MHZ, NS = 2e6 * np.pi, 1e-9
TRANSMON = Ladder(-210 * MHZ)
HALF_TURN = Target(rotation.about_x(np.pi))


def textbook(ladder, drive, duration, eps=0.0, delta=0.0):
    """[level, level]: scipy.linalg.expm of the Hamiltonian, written out in operators."""
    d = ladder.levels
    n, a = np.arange(d), np.diag(np.sqrt(np.arange(1, d)), 1)
    total = np.eye(d, dtype=complex)
    for wx, wy in drive:
        h = np.diag(delta * (0.5 - n) + ladder.anharmonicity * n * (n - 1) / 2).astype(complex)
        h += (1 + eps) / 2 * ((wx - 1j * wy) * a + (wx + 1j * wy) * a.T)
        total = expm(-1j * h * duration) @ total
    return total


def columns(ladder, drive, duration, eps=(0.0,), delta=(0.0,)):
    """[grid, level, 2] complex from the engine; bounds rounded up, so that programs are shared."""
    reach = np.max(np.hypot(*np.asarray(drive).T)) * (1 + np.max(np.abs(eps)))
    steps = plan(ladder, duration, 2 ** np.ceil(np.log2(reach)), np.max(np.abs(delta)))
    chain = make_chain(ladder, steps, duration, np.asarray(delta))
    re, im = propagate_qubit(chain, jnp.asarray(drive), jnp.asarray(eps))
    return np.asarray(re) + 1j * np.asarray(im)


def without_phase(u):
    return u * np.exp(-1j * np.angle(u.ravel()[0]))


@pytest.mark.parametrize(
    ("levels", "duration"),
    [(3, 0.25 * NS), (3, 2 * NS), (4, 0.25 * NS), (5, 0.25 * NS)],  # the long one is cut
)
def test_propagator_is_the_matrix_exponential(rng, levels, duration):
    ladder = Ladder(-210 * MHZ, levels)
    drive = rng.normal(0, 60 * MHZ, (15, 2))
    drive[4] = 0.0
    eps, delta = np.array([0.0, 0.03, -0.05]), np.array([0.0, 1.5, -4.0]) * MHZ
    ours = columns(ladder, drive, duration, eps, delta)
    for k in range(3):
        theirs = textbook(ladder, drive, duration, eps[k], delta[k])[:, :2]
        assert np.max(np.abs(without_phase(ours[k]) - without_phase(theirs))) < 10 * EXACT


def test_wide_grid_is_carried_in_blocks(rng):
    drive = rng.normal(0, 30 * MHZ, (6, 2))
    eps = np.linspace(-0.05, 0.05, 301)
    together = columns(TRANSMON, drive, NS, eps, 10 * MHZ * eps)
    for k in (0, 127, 128, 300):
        alone = columns(TRANSMON, drive, NS, eps[k : k + 1], 10 * MHZ * eps[k : k + 1])
        assert np.max(np.abs(together[k] - alone[0])) < EXACT


@pytest.mark.parametrize("levels", [4])
def test_gradient_is_the_central_difference(rng, levels):
    ladder = Ladder(-210 * MHZ, levels)
    drive = rng.normal(0, 40 * MHZ, (12, 2))
    drive[0] = 0.0  # with the drive off, too
    eps, delta = jnp.array([0.0, 0.05]), np.array([0.0, 2 * MHZ])
    chain = make_chain(ladder, plan(ladder, NS / 4, 150 * MHZ, 2 * MHZ), NS / 4, delta)
    weight_re, weight_im = rng.normal(size=(2, 2, levels, 2))

    @jax.jit
    def cost(d):
        re, im = propagate_qubit(chain, d, eps)
        return jnp.sum(weight_re * re) ** 2 + jnp.sum(weight_im * im)

    ours = np.asarray(jax.grad(cost)(jnp.asarray(drive)))
    step = 1e-4 * MHZ
    for index in np.ndindex(3, 2):
        up, down = drive.copy(), drive.copy()
        up[index] += step
        down[index] -= step
        numeric = (cost(jnp.asarray(up)) - cost(jnp.asarray(down))) / (2 * step)
        assert ours[index] == pytest.approx(float(numeric), rel=1e-6, abs=1e-15)


def test_memory_does_not_grow_with_the_slices():
    """What the forward pass keeps for the backward pass is the same size for any length."""
    chain = make_chain(TRANSMON, plan(TRANSMON, NS, 60 * MHZ), NS, np.zeros(7))
    eps = jnp.zeros(7)

    def kept(slices):
        def end(drive):
            return propagate_qubit(chain, drive, eps)

        _, pull = jax.vjp(end, jnp.zeros((slices, 2)))
        return sum(leaf.size for leaf in jax.tree.leaves(pull)) - 2 * slices  # less the drive

    assert kept(400) == kept(40)


def test_far_third_level_is_the_two_level_engine(rng):
    """An anharmonicity of 5 THz leaves a qubit, with the sign of the detuning kept."""
    drive, eps, delta = rng.normal(0, 5 * MHZ, (30, 2)), np.array([0.02]), np.array([3 * MHZ])
    ladder = Ladder(5e6 * MHZ)
    duration = 4 * NS
    frozen = two_level.propagate(
        jnp.asarray(drive), jnp.full(30, duration), jnp.asarray(eps), jnp.asarray(delta), 1.0
    )
    m = textbook(ladder, drive, duration, 0.02, 3 * MHZ)[:2, :2]
    q = rotation.matrix(np.array([float(c[0]) for c in frozen]))
    assert abs(np.trace(q.conj().T @ m)) / 2 == pytest.approx(1, abs=1e-9)
    assert abs(np.trace(rotation.matrix(rotation.about_z(0.1)).conj().T @ q)) / 2 < 1 - 1e-3


# 20 ns half turn, sigma = 5 ns, anharmonicity -200 MHz: Taylor integration in 34 digits outside
# the project. Columns: leakage, leakage from |0>, from |1>, gate infidelity
PUBLISHED = {
    0.0: (6.81585165925e-05, 6.642570069896e-05, 6.989133248605e-05, 0.006780450224841),
    1.0: (2.317295427051e-09, 2.128040984055e-09, 2.506549870047e-09, 0.006997084337259),
    0.5: (1.706422283619e-05, 1.695453075362e-05, 1.717391491876e-05, 4.662678963662e-05),
    -1.0: (0.000273675211641, 0.0002400230290506, 0.0003073273942314, 0.06019314049578),
}


def extrapolated(make_drive, ladder, duration):
    """[level, 2]: midpoint slices at two sizes; their error falls as the square of the slice."""
    coarse, fine = (columns(ladder, make_drive(n), duration / n)[0] for n in (4000, 8000))
    return without_phase(fine) + (without_phase(fine) - without_phase(coarse)) / 3


@pytest.mark.parametrize("correction", PUBLISHED)
def test_published_derivative_corrections(correction):
    ladder = Ladder(-200 * MHZ)

    def drive(n):
        return derivative_corrected(np.pi, 0.0, 20 * NS, n, ladder, correction)

    end = extrapolated(drive, ladder, 20 * NS)
    lost = leakage.leakage(end), abs(end[2, 0]) ** 2, abs(end[2, 1]) ** 2
    assert (*lost, leakage.infidelity(end, HALF_TURN)) == pytest.approx(
        PUBLISHED[correction], rel=1e-5
    )


def test_published_first_order_set_with_detuning():
    """Its time-dependent detuning, played as a ramp of the drive's phase."""
    ladder = Ladder(-200 * MHZ)
    a = ladder.anharmonicity
    ramp = {}

    def drive(n):
        pulse = derivative_corrected(np.pi, 0.0, 20 * NS, n, ladder)
        ex = pulse[:, 0] - pulse[:, 0] ** 3 / (4 * a**2)
        step = -(pulse[:, 0] ** 2) / (2 * a) * 20 * NS / n
        phase = np.cumsum(step) - step / 2
        ramp["end"] = np.sum(step)
        turned = (ex + 1j * pulse[:, 1]) * np.exp(1j * phase)
        return np.stack([turned.real, turned.imag], axis=-1)

    end = extrapolated(drive, ladder, 20 * NS)
    end = np.exp(-1j * ramp["end"] * np.arange(3))[:, None] * end
    assert leakage.leakage(end) == pytest.approx(2.772134315669e-08, rel=1e-4)
    assert leakage.infidelity(end, HALF_TURN) == pytest.approx(8.435975919919e-07, rel=1e-4)


def pedersen(block, v):
    m = v.conj().T @ block
    return 1 - (abs(np.trace(m)) ** 2 + np.trace(m.conj().T @ m).real) / 6


def test_infidelity_is_pedersens_formula(rng):
    v = rotation.about_y(0.4)
    u = textbook(TRANSMON, rng.normal(0, 60 * MHZ, (9, 2)), NS)
    target = Target(v)
    assert leakage.infidelity(u[:, :2], target) == pytest.approx(
        pedersen(u[:2, :2], rotation.matrix(v)), abs=EXACT
    )
    axis = np.array([0.6, 0.0, 0.8])
    free = Target(v, axis)
    best = min(
        pedersen(u[:2, :2], rotation.matrix(free.member(angle)))
        for angle in np.linspace(0, 2 * np.pi, 20001)
    )
    assert leakage.infidelity(u[:, :2], free) == pytest.approx(best, abs=1e-7)
    begin, end = np.array([0.0, 0, 1]), np.array([1, 1, 0]) / np.sqrt(2)
    state = Target(rotation.between(begin, end), end, "state")
    arrived = abs(np.array([1, np.exp(-1j * np.pi / 4)]) / np.sqrt(2) @ u[:2, 0]) ** 2
    assert leakage.infidelity(u[:, :2], state) == pytest.approx(1 - arrived, abs=EXACT)


def test_without_leakage_it_is_the_two_level_infidelity(rng):
    for target in (HALF_TURN, Target(rotation.about_x(1.0), np.array([0.0, 0.0, 1.0]))):
        q = rng.normal(size=4)
        q /= np.linalg.norm(q)
        padded = np.vstack([rotation.matrix(q), np.zeros((1, 2))])
        assert leakage.infidelity(padded, target) == pytest.approx(infidelity(q, target))


def test_seepage_balances_leakage(rng):
    ladder = Ladder(-210 * MHZ, 4)
    u = textbook(ladder, rng.normal(0, 200 * MHZ, (9, 2)), NS)
    comes_in = np.sum(np.abs(u[:2, 2:]) ** 2) / 2
    assert leakage.seepage(u[:, :2]) == pytest.approx(comes_in, abs=EXACT)
    assert leakage.leakage(u[:, :2]) > 1e-3


def transmon_job(duration=10.0, slice_ns=0.5, more="", starts=6):
    """Half a turn with at most 60 MHz on three levels."""
    return parse_job(f"""
        [qubit]
        anharmonicity_MHz = -210.0
        [drive]
        rabi_max_MHz = 60.0
        sample_rate_MSps = 4000.0
        [target]
        gate = "x"
        angle_deg = 180.0
        [pulse]
        duration_ns = {duration}
        slice_ns = {slice_ns}
        {more}
        [search]
        starts = {starts}
        stop_infidelity = 1e-13
        """)


def test_search_reaches_round_off_where_the_gaussian_cannot():
    """Half a turn in 10 ns with 60 MHz: below 1e-12, checked by matrix exponentials."""
    found = search(transmon_job())
    assert found.status == "converged"
    assert np.max(np.hypot(*found.drive.T)) <= 60 * MHZ * (1 + 1e-12)
    u = textbook(TRANSMON, found.drive, 0.5 * NS)
    assert pedersen(u[:2, :2], rotation.matrix(HALF_TURN.quaternion)) < 1e-12
    assert np.sum(np.abs(u[2, :2]) ** 2) / 2 < 1e-12
    gaussian = derivative_corrected(np.pi, 0.0, 10 * NS, 20, TRANSMON, 0.5)
    u = textbook(TRANSMON, gaussian, 0.5 * NS)
    assert pedersen(u[:2, :2], rotation.matrix(HALF_TURN.quaternion)) > 1e-4


def test_search_through_a_line():
    """On three levels and behind a 150 MHz line at once; checked by matrix exponentials."""
    line = '[line]\nkind = "first_order"\nbandwidth_MHz = 150.0'
    found = search(transmon_job(12.0, more=line))
    kernel = taps(first_order(150e6), 0.5 * NS, 64).kernel
    u = textbook(TRANSMON, filtered(kernel, found.drive), 0.5 / 64 * NS)
    assert pedersen(u[:2, :2], rotation.matrix(HALF_TURN.quaternion)) < 1e-8  # of the cells
    u = textbook(TRANSMON, found.drive, 0.5 * NS)
    assert pedersen(u[:2, :2], rotation.matrix(HALF_TURN.quaternion)) > 1e-5


def test_wishes_hold_on_a_ladder_too():
    """Zero at both ends; smoother the more it counts; and a half turn without leakage."""
    roughness = []
    for weight in (1e-3, 10.0):
        shape = f"[shape]\nrise_ns = 3.0\nsmoothness = {weight}"
        found = search(transmon_job(14.0, more=shape, starts=3))
        assert np.all(found.drive[[0, -1]] == 0)
        u = textbook(TRANSMON, found.drive, 0.5 * NS)
        assert pedersen(u[:2, :2], rotation.matrix(HALF_TURN.quaternion)) < 1e-9
        roughness.append(np.sum(np.diff(found.drive, 2, axis=0) ** 2))
    assert roughness[1] < 0.9 * roughness[0]


def test_the_shortest_pulse_on_a_ladder_is_longer_than_on_two_levels():
    """Two levels need pi/W = 8.33 ns; nine of the ten slices of 1 ns are enough for three."""
    tried = search_shortest(transmon_job('"shortest"', 1.0))
    assert tried.found.infidelity <= 1e-13
    assert tried.job.slices >= 9
    before = tried.infidelity[list(tried.slices).index(tried.job.slices) - 1]
    assert before > 1e-13


def test_box_on_a_ladder_is_what_matrix_exponentials_find(rng):
    """The worst case of a robust search on three levels, leakage counted, point by point."""
    tolerance = "[tolerance]\namplitude = 0.01\ndetuning_MHz = 1.0"
    job = transmon_job(16.0, 1.0, more=tolerance, starts=2)
    found = search(replace(job, iterations=20, stop_infidelity=None))
    wanted = rotation.matrix(HALF_TURN.quaternion)
    worst = 0.0
    for e in (-1, 0, 1):
        for d in (-1, 0, 1):
            u = textbook(TRANSMON, found.drive, NS, 0.01 * e, MHZ * d)
            worst = max(worst, pedersen(u[:2, :2], wanted))
    assert worst <= found.infidelity * (1 + 1e-9)
    assert found.infidelity < 1.5 * worst


@pytest.mark.parametrize(("levels", "duration"), [(3, 0.1), (4, 0.6)])  # the long one is cut
def test_errors_and_jacobian_are_those_of_the_chain(rng, levels, duration):
    """Weighted at random, against the engine's columns and their adjoint; blocks and a rest."""
    ladder, grid = Ladder(-5.0, levels), 19
    drive, eps = rng.normal(size=(6, 2)), rng.normal(0, 0.05, grid)
    delta, rows = rng.normal(0, 0.3, grid), rng.normal(size=(5, 4 * levels, grid))
    chain = make_chain(ladder, plan(ladder, duration, 5.0, 1.5), duration, delta)
    on = np.array([1, 1, 0, 1, 1, 0], dtype=bool)  # two slices are not there

    weight = rng.normal(size=(5, grid))

    def sum_of(drive):
        ends = propagate_qubit(chain, drive, eps)
        return jnp.einsum("rg,rig,gi->", weight, rows, jnp.stack(ends, -1).reshape(grid, -1))

    errors, jacobian = map(np.asarray, errors_and_jacobian(chain, drive, eps, rows, on))
    value, slope = jax.value_and_grad(sum_of)(drive[on])
    assert np.sum(weight * errors) == pytest.approx(float(value), abs=100 * EXACT)
    found = np.einsum("rg,scrg->sc", weight, jacobian)
    assert found[on] == pytest.approx(np.asarray(slope), abs=100 * EXACT)
    assert np.all(jacobian[~on] == 0)


def test_leakage_weight_of_the_job_trades_rotation_for_leakage():
    """Half a turn in 3 ns: too short for both, so the optimum follows the weight.

    The more lost population counts, the less is lost and the more the rotation is off: true of
    the minimum of any weighted sum.
    """
    text = """
        [qubit]
        anharmonicity_MHz = -210.0
        [drive]
        rabi_max_MHz = 300.0
        sample_rate_MSps = 4000.0
        [target]
        gate = "x"
        angle_deg = 180.0
        [pulse]
        duration_ns = 3.0
        slice_ns = 0.25
        [search]
        starts = 2
        leakage_weight = {}
        """
    leaked, rotated = [], []
    for weight in (1.0, 100.0):
        job = parse_job(text.format(weight))
        assert job.leakage_weight == weight
        u = textbook(TRANSMON, search(job).drive, 0.25 * NS)
        leaked.append(np.sum(np.abs(u[2, :2]) ** 2) / 2)
        rotated.append(pedersen(u[:2, :2], rotation.matrix(job.target.quaternion)) - leaked[-1])
    assert leaked[0] > 100 * leaked[1] > 0
    assert 0 < 2 * rotated[0] < rotated[1]


def test_leakage_weight_of_one_needs_no_ladder():
    text = """
        [drive]
        rabi_max_MHz = 25.0
        sample_rate_MSps = 1000.0
        [target]
        gate = "s"
        [pulse]
        duration_ns = 40.0
        slice_ns = 1.0
        """
    assert parse_job(text).leakage_weight == 1
    assert parse_job(text + "[search]\nleakage_weight = 1.0").leakage_weight == 1


def test_bad_ladders_give_one_line():
    with pytest.raises(InputError, match="anharmonicity: expected a rate other than zero"):
        Ladder(0.0)
    with pytest.raises(InputError, match="levels: expected 3 to 5, got 6"):
        Ladder(-1e9, 6)
