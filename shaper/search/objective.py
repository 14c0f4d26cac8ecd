"""What is minimized: the infidelity over the tolerance box, as power means of a sum of squares.

The errors ``r = E q`` of a grid point, linear in its propagator, are scaled so that its infidelity
is ``|r|^2``; on an anharmonic ladder what leaks is among them. The
mean over the box is the power mean with ``power = 1``; larger powers lean towards the worst point,
and in the limit are the maximum. The logarithm is minimized, so that 1e-4 and 1e-12 weigh alike.
Wishes for the look of the waveform are added to it, each a weight times a sum of squares.

Everything here is in units of ``W_max``: drive in W_max, time in 1/W_max, detuning in W_max.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import jax
import jax.numpy as jnp
import numpy as np

from shaper.bench import Grid, dense_grid, line_taps, score_grid
from shaper.drive.bound import quadratures
from shaper.drive.line import filtered, fourth_order
from shaper.job import Job
from shaper.physics import ladder, leakage, two_level
from shaper.physics.ladder import Chain, Ladder, make_chain, plan, propagate_qubit
from shaper.search import shape

Array = jax.Array

_TINY = 1e-60  # keeps the logarithm of a perfect pulse, and its slope, finite
_GOOD_ENOUGH = 1e-9  # infidelity that wishes need not yield to, where the job names none
_SLOPE_REACH = 1e-3  # rad; how far the ends of a central difference lie from the center


@jax.tree_util.register_dataclass
@dataclass(frozen=True)
class Problem:
    """One job's numbers, ready for the compiler.

    Attributes:
        durations: [slice] 1/W_max; slices of no duration are not there.
        eps: [grid] unitless.
        delta: [grid] W_max.
        weight: [point] unitless, sums to 1.
        rows: [row, component, grid] unitless; the infidelity of a point is ``|rows q|^2``. Two
            levels have the four components of a quaternion, a ladder those of
            ``ladder.errors_and_jacobian``.
        envelope: [slice] unitless, in [0, 1]; the drive is held below it. None: no envelope.
        kernel: [tap, cell] complex, of the line (``drive.line.Taps``); None: no line.
        mix: [point, grid] unitless. What is minimized are these combinations of the grid's
            errors, for slopes by differences. None: the grid points themselves.
        wishes: name to (matrix [equation, slice], weight): costs ``weight |matrix drive|^2``.
        floor: [] infidelity that is good enough: below it only the wishes count. Zero without
            wishes.
        bound: "circle" or "box".
        longest_turn: rad; no slice (with a line: no cell) turns further. Of two levels.
        chain: of slices (with a line: of cells) on the ladder; None: two levels.
        on: [slice] bool, which slices are there, for the ladder; None: all.
    """

    durations: Array
    eps: Array
    delta: Array
    weight: Array
    rows: Array
    envelope: Array | None
    kernel: Array | None
    mix: Array | None
    chain: Chain | None
    on: Array | None
    wishes: dict[str, tuple[Array, Array]]
    floor: Array
    bound: str = field(metadata={"static": True})
    longest_turn: float = field(metadata={"static": True})

    @property
    def slices(self) -> int:
        """Number of slices."""
        return self.durations.shape[0]

    @property
    def equations(self) -> int:
        """Number of squares in the sum."""
        wishes = sum(2 * matrix.shape[0] for matrix, _ in self.wishes.values())
        return self.rows.shape[0] * self.weight.shape[0] + wishes


def make_problem(
    job: Job,
    points: tuple[int, int] | None = None,
    slices: int | None = None,
    per_radian: float = 0.0,
    *,
    weighted: bool = True,
) -> Problem:
    """The job on a grid of errors, all its qubits together.

    Args:
        points: fewest of the Gauss-Lobatto grid along amplitude and detuning; None: the grid on
            which pulses are scored, without wishes.
        slices: length of the arrays, at least the job's own; the rest has no duration.
        per_radian: points per rad of an error's reach, where that is more (``bench.points_for``).
        weighted: whether the errors carry the qubits' weights and that of leakage.
    """
    scored = points is None
    if job.minimize == "first_order":
        parts = [_slopes(job, group) for group in job.groups]
    else:
        parts = [_box(job, group, points, per_radian) for group in job.groups]
    grids, mixes = zip(*parts, strict=True)
    rows_of = _rows if job.anharmonicity is None else _ladder_rows
    rows = [
        rows_of(job, group, weighted)[:, :, None] * np.ones(len(grid.eps))
        for group, grid in zip(job.groups, grids, strict=True)
    ]
    delta = np.concatenate([grid.delta for grid in grids]) / job.rabi_max
    eps = np.concatenate([grid.eps for grid in grids])
    step = job.slice_duration * job.rabi_max
    rate = (1 + np.max(np.abs(eps))) * (1.0 if job.bound == "circle" else np.sqrt(2))
    durations = np.zeros(slices or job.slices)
    durations[: job.slices] = step
    kernel = None if (taps := line_taps(job)) is None else fourth_order(taps.kernel)
    if kernel is not None:  # shorter steps, and a line may overshoot
        step /= kernel.shape[1]
        rate *= max(1.0, float(np.max(np.sum(np.abs(kernel), axis=0))))
    most_delta = float(np.max(np.abs(delta)))
    chain = None
    if job.anharmonicity is not None:
        levels = Ladder(job.anharmonicity / job.rabi_max, job.levels)
        chain = make_chain(levels, plan(levels, step, rate, most_delta), step, delta)
    shares = np.array([1.0 if weighted else group.weight for group in job.groups])
    shares /= np.sum(shares)
    return Problem(
        durations=durations,
        eps=eps,
        delta=delta,
        weight=np.concatenate([w * grid.weight for w, grid in zip(shares, grids, strict=True)]),
        rows=np.concatenate(rows, axis=2),
        envelope=shape.envelope(job, len(durations)),
        kernel=kernel,
        mix=_block_diagonal(mixes) if job.minimize == "first_order" else None,
        chain=chain,
        on=None if len(durations) == job.slices else durations > 0,
        wishes={} if scored else shape.wishes(job, len(durations)),
        floor=(job.stop_infidelity or _GOOD_ENOUGH) if shape.wished(job) else 0.0,
        bound=job.bound,
        longest_turn=_rounded_up(float(np.hypot(rate, most_delta) * step)),
    )


def _box(job: Job, group, points, per_radian: float) -> tuple[Grid, None]:
    alone = job.for_group(group)
    return (score_grid(alone) if points is None else dense_grid(alone, points, per_radian)), None


def _slopes(job: Job, group) -> tuple[Grid, np.ndarray]:
    """Center and arms of a small cross, and the differences that give errors and slopes.

    A slope is taken times the tolerance: what it would add at the edge of the box. The central
    difference is off by the third derivative times 1e-6/6 of its reach squared.
    """
    turn = job.rabi_max * job.duration
    eps = _SLOPE_REACH / turn if group.amplitude_tolerance else 0.0
    delta = _SLOPE_REACH / job.duration if group.detuning_tolerance else 0.0
    grid = Grid(
        np.array([0.0, eps, -eps, 0.0, 0.0]),
        np.array([0.0, 0.0, 0.0, delta, -delta]) + group.detuning,
        np.full(3, 1 / 3),
    )
    along_eps = group.amplitude_tolerance / (2 * eps) if eps else 0.0
    along_delta = group.detuning_tolerance / (2 * delta) if delta else 0.0
    mix = np.array(
        [
            [1.0, 0.0, 0.0, 0.0, 0.0],
            [0.0, along_eps, -along_eps, 0.0, 0.0],
            [0.0, 0.0, 0.0, along_delta, -along_delta],
        ]
    )
    return grid, mix


def _rows(job: Job, group, weighted: bool) -> np.ndarray:
    """[3, 4]: error rows of a qubit, by its weight; a third row of zeros where an axis is free."""
    rows = np.zeros((3, 4))
    rows[: len(group.target.error_rows)] = group.target.error_rows
    return np.sqrt((group.weight if weighted else 1.0) * group.target.scale) * rows


def _ladder_rows(job: Job, group, weighted: bool) -> np.ndarray:
    """[row, 4 level]: real and imaginary parts of the errors in the qubit, then of what leaks."""
    inside = leakage.qubit_rows(group.target)  # [k, 2, 2]
    weights = leakage.outside_columns(group.target)  # [column, c]
    if weighted:
        weights = np.sqrt(job.leakage_weight) * weights
    forms = np.zeros((len(inside), job.levels, 2), dtype=complex)
    forms[:, :2] = inside
    for level in range(2, job.levels):
        outside = np.zeros((weights.shape[1], job.levels, 2), dtype=complex)
        outside[:, level] = weights.T
        forms = np.concatenate([forms, outside])
    real = np.stack([forms.real, -forms.imag], axis=-1)  # of (re, im) of an amplitude
    imaginary = np.stack([forms.imag, forms.real], axis=-1)
    return np.concatenate([real, imaginary]).reshape(2 * len(forms), -1)


def _block_diagonal(blocks) -> np.ndarray:
    total = np.zeros(np.sum([block.shape for block in blocks], axis=0))
    row = column = 0
    for block in blocks:
        total[row : row + block.shape[0], column : column + block.shape[1]] = block
        row, column = row + block.shape[0], column + block.shape[1]
    return total


def _rounded_up(turn: float) -> float:
    """A few discrete values, so that jobs that differ by little share one compiled program."""
    return float(2 ** (np.ceil(4 * np.log2(turn)) / 4))


def drive_of(problem: Problem, parameters: Array) -> Array:
    """[slice, 2] W_max: what the DAC plays; parameters [slice, 2] rad."""
    drive = quadratures(parameters, problem.bound)
    return drive if problem.envelope is None else drive * problem.envelope[:, None]


def at_qubit(problem: Problem, drive: Array) -> tuple[Array, Array]:
    """What arrives at the qubit of a drive: [cell, 2] W_max and [cell] 1/W_max."""
    if problem.kernel is None:
        return drive, problem.durations
    taps, cells = problem.kernel.shape
    longer = problem.slices + taps - 1
    step = problem.durations[0] / cells
    return filtered(problem.kernel, drive), jnp.full(longer * cells, step)


def rotation_errors(problem: Problem, parameters: Array) -> Array:
    """[row, point] unitless: what should vanish; parameters [slice, 2] rad."""
    drive, durations = at_qubit(problem, drive_of(problem, parameters))
    eps, delta = problem.eps, problem.delta
    if problem.chain is None:
        q = two_level.propagate(drive, durations, eps, delta, problem.longest_turn)
    else:
        ends = propagate_qubit(problem.chain, drive, eps, problem.on)
        q = jnp.stack(ends, axis=-1).reshape(len(eps), -1).T
    errors = sum(problem.rows[:, i] * q[i] for i in range(problem.rows.shape[1]))
    return errors if problem.mix is None else errors @ problem.mix.T


def errors_and_jacobian(problem: Problem, drive: Array, durations: Array) -> tuple[Array, Array]:
    """Errors [row, point] and their derivative [cell, 2, row, point] by the drive at the qubit."""
    eps, delta, rows = problem.eps, problem.delta, problem.rows
    if problem.chain is None:
        turn = problem.longest_turn
        found = two_level.errors_and_jacobian(drive, durations, eps, delta, rows, turn)
    else:
        found = ladder.errors_and_jacobian(problem.chain, drive, eps, rows, problem.on)
    return found if problem.mix is None else tuple(f @ problem.mix.T for f in found)


def infidelities(problem: Problem, parameters: Array) -> Array:
    """[point] unitless: the infidelity at each grid point; parameters [slice, 2] rad."""
    return jnp.sum(rotation_errors(problem, parameters) ** 2, axis=0)


@jax.jit
def all_infidelities(problem: Problem, parameters: Array) -> Array:
    """[start, point] unitless, for parameters [start, slice, 2] rad; one compiled program."""
    return jax.vmap(infidelities, (None, 0))(problem, parameters)


def wish_costs(problem: Problem, parameters: Array) -> dict[str, Array]:
    """Each wish's cost, weight included; parameters [slice, 2] rad."""
    drive = drive_of(problem, parameters)
    return {
        name: weight * jnp.sum((matrix @ drive) ** 2)
        for name, (matrix, weight) in problem.wishes.items()
    }


@jax.jit
def all_wish_costs(problem: Problem, parameters: Array) -> dict[str, Array]:
    """Each wish's cost [start], for parameters [start, slice, 2] rad; one compiled program."""
    return jax.vmap(wish_costs, (None, 0))(problem, parameters)


def log_power_mean(infidelity: Array, weight: Array, power: Array | float) -> Array:
    """Logarithm of ``(sum weight infidelity^power)^(1/power)``, without under- or overflow.

    Args:
        infidelity: [point] unitless, >= 0.
        weight: [point] unitless.
        power: [] at least 1.
    Returns:
        [] unitless; between the log of the mean and the log of the maximum.
    """
    top = jnp.max(infidelity) + _TINY
    mean = jnp.sum(weight * (infidelity / top) ** power)
    return jnp.log(top) + jnp.log(mean + _TINY) / power


def measure(problem: Problem, power: Array, parameters: Array) -> tuple[Array, Array]:
    """The cost, log(power mean + floor) plus wishes, and the largest infidelity on the grid."""
    found = infidelities(problem, parameters)
    wishes = sum(wish_costs(problem, parameters).values(), jnp.zeros(()))
    mean = log_power_mean(found, problem.weight, power)
    return jnp.logaddexp(mean, jnp.log(problem.floor)) + wishes, jnp.max(found)
