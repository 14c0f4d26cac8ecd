"""What is minimized: the infidelity over the tolerance box, as power means of a sum of squares.

The rotation errors ``r = E q`` of a grid point are scaled so that its infidelity is ``|r|^2``. The
mean over the box is the power mean with ``power = 1``; larger powers lean towards the worst point,
and in the limit are the maximum. The logarithm is minimized, so that 1e-4 and 1e-12 weigh alike.

Everything here is in units of ``W_max``: drive in W_max, time in 1/W_max, detuning in W_max.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import jax
import jax.numpy as jnp
import numpy as np

from shaper.bench import Grid
from shaper.drive.bound import quadratures
from shaper.job import Job
from shaper.physics import two_level

Array = jax.Array

_TINY = 1e-300  # keeps the logarithm of a perfect pulse finite


@jax.tree_util.register_dataclass
@dataclass(frozen=True)
class Problem:
    """One job's numbers, ready for the compiler.

    Attributes:
        durations: [slice] 1/W_max.
        eps: [grid] unitless.
        delta: [grid] W_max.
        weight: [grid] unitless, sums to 1.
        rows: [row, 4, grid] unitless; the infidelity of a point is ``|rows q|^2``.
        bound: "circle" or "box".
        longest_turn: rad; no slice turns further.
    """

    durations: Array
    eps: Array
    delta: Array
    weight: Array
    rows: Array
    bound: str = field(metadata={"static": True})
    longest_turn: float = field(metadata={"static": True})

    @property
    def slices(self) -> int:
        """Number of slices."""
        return self.durations.shape[0]

    @property
    def residuals(self) -> int:
        """Number of rotation errors, all grid points together."""
        return self.rows.shape[0] * self.rows.shape[2]


def make_problem(job: Job, grid: Grid) -> Problem:
    """The job on a grid of errors."""
    target = job.target
    rows = np.sqrt(target.scale) * target.error_rows[:, :, None] * np.ones(len(grid.eps))
    rate = (1 + np.max(np.abs(grid.eps))) * (1.0 if job.bound == "circle" else np.sqrt(2))
    reach = np.hypot(rate, np.max(np.abs(grid.delta)) / job.rabi_max)
    step = job.slice_duration * job.rabi_max
    return Problem(
        durations=np.full(job.slices, step),
        eps=grid.eps,
        delta=grid.delta / job.rabi_max,
        weight=grid.weight,
        rows=rows,
        bound=job.bound,
        longest_turn=_rounded_up(float(reach * step)),
    )


def _rounded_up(turn: float) -> float:
    """A few discrete values, so that jobs that differ by little share one compiled program."""
    return float(2 ** (np.ceil(4 * np.log2(turn)) / 4))


def rotation_errors(problem: Problem, parameters: Array) -> Array:
    """[row, grid] unitless: ``rows q`` at each grid point; parameters [slice, 2] rad."""
    drive = quadratures(parameters, problem.bound)
    q = two_level.propagate(
        drive, problem.durations, problem.eps, problem.delta, problem.longest_turn
    )
    return sum(problem.rows[:, i] * q[i] for i in range(4))


def infidelities(problem: Problem, parameters: Array) -> Array:
    """[grid] unitless: the infidelity at each grid point; parameters [slice, 2] rad."""
    return jnp.sum(rotation_errors(problem, parameters) ** 2, axis=0)


@jax.jit
def all_infidelities(problem: Problem, parameters: Array) -> Array:
    """[start, grid] unitless, for parameters [start, slice, 2] rad; one compiled program."""
    return jax.vmap(infidelities, (None, 0))(problem, parameters)


def log_power_mean(infidelity: Array, weight: Array, power: Array | float) -> Array:
    """Logarithm of ``(sum weight infidelity^power)^(1/power)``, without under- or overflow.

    Args:
        infidelity: [grid] unitless, >= 0.
        weight: [grid] unitless.
        power: [] at least 1.
    Returns:
        [] unitless; between the log of the mean and the log of the maximum.
    """
    top = jnp.max(infidelity) + _TINY
    return jnp.log(top) + jnp.log(jnp.sum(weight * (infidelity / top) ** power)) / power
