"""Least-squares search on a ladder: damped Gauss-Newton steps from smooth starts.

The infidelity is a sum of squares of amplitudes linear in the propagator, few per grid point, and
their Jacobian comes from the ladder's own adjoint. So a Gauss-Newton step costs about ten
gradients and converges quadratically: 1e-9 in some tens of steps. The worst case over a grid is
reached by reweighting the points by what they lose (Lawson's iteration).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import jax
import jax.numpy as jnp
import numpy as np

from shaper.drive.bound import parameters, quadratures
from shaper.drive.line import filtered
from shaper.physics import leakage as quality
from shaper.physics.ladder import Ladder, derivative_corrected, plan, propagate_qubit
from shaper.rotation import euler_yxy
from shaper.target import Target

Array = jax.Array

_MODES = 5  # sine harmonics in a random start
_FIRST_DAMPING = 1e-2
_LARGEST_DAMPING = 1e8  # no step left that lowers the cost
_STILL = 1e-30  # cost that counts as zero


@dataclass(frozen=True)
class LadderPulse:
    """What the search found.

    Attributes:
        drive: [slice, 2] rad/s, inside the bound.
        infidelity: [grid] average gate infidelity at each point.
        leakage: [grid].
        costs: [start] mean cost over the grid that each start ended with.
    """

    drive: np.ndarray
    infidelity: np.ndarray
    leakage: np.ndarray
    costs: np.ndarray

    @property
    def worst(self) -> float:
        """Largest infidelity on the grid."""
        return float(np.max(self.infidelity))


def search_ladder(
    ladder: Ladder,
    target: Target,
    slices: int,
    slice_duration: float,
    rabi_max: float,
    *,
    bound: str = "circle",
    eps: np.ndarray | tuple = (0.0,),
    delta: np.ndarray | tuple = (0.0,),
    starts: int = 8,
    iterations: int = 150,
    rounds: int = 0,
    stop: float = 0.0,
    leakage_weight: float = 1.0,
    seed: int = 0,
    warm: np.ndarray | None = None,
    kernel: np.ndarray | None = None,
    between: Callable[[str, int, int, float], bool] = lambda *_: False,
) -> LadderPulse:
    """The best pulse found for a gate on a ladder.

    Args:
        slices, slice_duration: the clockwork; s.
        rabi_max: rad/s. Bound of the drive, ``circle`` or ``box``.
        eps, delta: [grid] points that the pulse must serve.
        starts: how many first guesses at most; the first is a derivative-corrected Gaussian.
        iterations: Gauss-Newton steps per start, and per round.
        rounds: of reweighting toward the worst point, from the best start.
        stop: no further start once the mean cost is at most this.
        leakage_weight: what lost population counts against a wrong rotation.
        warm: [slice, 2] rad/s, a first guess of the caller's, tried first.
        kernel: of ``drive.line.Taps`` on the slice clock: the search then sees what arrives
            behind the line, tail included. None: no line.
        between: called as ``between(stage, done, of, lowest cost)`` after each start and round;
            True ends the search with what is best so far.
    """
    eps, delta = np.broadcast_arrays(
        np.atleast_1d(np.asarray(eps, dtype=float)), np.atleast_1d(np.asarray(delta, dtype=float))
    )
    errors = _amplitudes(ladder, target, slice_duration, rabi_max, bound, leakage_weight, kernel)
    descend = jax.jit(_descent(errors, jnp.asarray(eps), jnp.asarray(delta), iterations))
    lost = jax.jit(lambda x: jax.vmap(lambda e, d: errors(x, e, d) @ errors(x, e, d))(eps, delta))
    even = np.full(len(eps), 1 / len(eps))
    rng = np.random.default_rng(seed)
    best, lowest, costs = None, math.inf, []
    for drive in _starts(rng, ladder, target, slices, slice_duration, rabi_max, starts, warm):
        x, cost = descend(jnp.asarray(parameters(drive / rabi_max, bound)), even)
        costs.append(float(cost))
        if costs[-1] < lowest or best is None:
            best, lowest = x, costs[-1]
        ended = between("exploring on the ladder", len(costs), starts, lowest)
        if lowest <= stop or ended:
            break
    if not ended:
        best = _toward_worst(descend, lost, best, even, rounds, between)
    drive = np.asarray(rabi_max * quadratures(best, bound))
    columns = _columns(ladder, drive, slice_duration, rabi_max, bound, eps, delta, kernel)
    return LadderPulse(
        drive,
        quality.infidelity(columns, target),
        quality.leakage(columns),
        np.array(costs),
    )


def _plan(ladder, slice_duration, rabi_max, bound, eps, delta):
    corner = math.sqrt(2) if bound == "box" else 1.0
    largest = corner * rabi_max * (1 + float(np.max(np.abs(eps))))
    return plan(ladder, slice_duration, largest, float(np.max(np.abs(delta))))


def _columns(ladder, drive, slice_duration, rabi_max, bound, eps, delta, kernel=None) -> np.ndarray:
    """[grid, level, 2] complex."""
    drive, step = _arrived(jnp.asarray(drive), slice_duration, kernel)
    steps = _plan(ladder, step, _overshoot(kernel) * rabi_max, bound, eps, delta)
    re, im = propagate_qubit(ladder, steps, drive, step, jnp.asarray(eps), jnp.asarray(delta))
    return np.asarray(re) + 1j * np.asarray(im)


def _arrived(drive: Array, slice_duration: float, kernel) -> tuple[Array, float]:
    """Drive at the qubit and the length of its slices."""
    if kernel is None:
        return drive, slice_duration
    return filtered(kernel, drive), slice_duration / kernel.shape[1]


def _overshoot(kernel) -> float:
    """Largest gain of the line for any waveform within its bound."""
    return 1.0 if kernel is None else float(np.max(np.sum(np.abs(kernel), axis=0)))


def _amplitudes(
    ladder, target, slice_duration, rabi_max, bound, leakage_weight, kernel=None
) -> Callable:
    """``(x, eps, delta) -> [component]``, real; the sum of squares is the cost of one point."""
    rows = quality.qubit_rows(target)
    outside = math.sqrt(leakage_weight) * quality.outside_columns(target)
    # room for 10 % amplitude and 10 % detuning error: the series then serve every grid point
    step = slice_duration if kernel is None else slice_duration / kernel.shape[1]
    steps = _plan(ladder, step, _overshoot(kernel) * rabi_max, bound, 0.1, 0.1 * rabi_max)

    def errors(x, eps, delta):
        drive, step = _arrived(rabi_max * quadratures(x, bound), slice_duration, kernel)
        re, im = propagate_qubit(ladder, steps, drive, step, eps[None], delta[None])
        re, im = re[0], im[0]
        parts = []
        for weights, spec, level in (
            (rows, "kij,ij->k", slice(0, 2)),
            (outside, "jc,ij->ic", slice(2, None)),
        ):
            a, b = jnp.asarray(weights.real), jnp.asarray(weights.imag)
            parts.append(jnp.einsum(spec, a, re[level]) - jnp.einsum(spec, b, im[level]))
            parts.append(jnp.einsum(spec, a, im[level]) + jnp.einsum(spec, b, re[level]))
        return jnp.concatenate([part.ravel() for part in parts])

    return errors


def _descent(errors: Callable, eps: Array, delta: Array, iterations: int) -> Callable:
    """``(x, weight) -> (x, cost)``: Levenberg-Marquardt on the weighted sum over the grid.

    Source:
        D. W. Marquardt, J. Soc. Indust. Appl. Math. 11, 431 (1963).
    """

    def one_point(x, e, d):
        value, pull = jax.vjp(lambda free: errors(free, e, d), x)
        return value, jax.vmap(lambda row: pull(row)[0])(jnp.eye(value.shape[0]))

    def linearize(x, weight):
        value, slope = jax.vmap(one_point, (None, 0, 0))(x, eps, delta)
        root = jnp.sqrt(weight)[:, None]
        value = (root * value).ravel()
        slope = (root[..., None, None] * slope).reshape(value.shape[0], -1)
        return value @ value, slope.T @ slope, slope.T @ value

    def descend(x, weight):
        size = x.size

        def step(state):
            count, best, trial, damping, cost, normal, gradient = state
            new = linearize(trial, weight)
            better = new[0] < cost
            best = jnp.where(better, trial, best)
            damping = jnp.where(better, damping / 4, damping * 5)
            cost, normal, gradient = (
                jnp.where(better, a, b) for a, b in zip(new, (cost, normal, gradient), strict=True)
            )
            scale = jnp.trace(normal) / size
            move = jnp.linalg.solve(normal + damping * scale * jnp.eye(size), gradient)
            return count + 1, best, best - move.reshape(x.shape), damping, cost, normal, gradient

        def unfinished(state):
            count, _, _, damping, cost, *_ = state
            return (count < iterations) & (damping < _LARGEST_DAMPING) & (cost > _STILL)

        # the first pass only linearizes at x: anything is better than infinity
        nothing = (jnp.inf, jnp.eye(size), jnp.zeros(size))
        end = jax.lax.while_loop(unfinished, step, (0, x, x, _FIRST_DAMPING, *nothing))
        return end[1], end[4]

    return descend


def _toward_worst(descend, lost, x, even, rounds, between):
    """Raise the weight of the points that lose most; keeps the pulse of the lowest worst case.

    Source:
        C. L. Lawson, thesis, University of California, Los Angeles (1961): weights of a
        least-squares fit multiplied by the error until the fit is the minimax one.
    """
    if rounds == 0:
        return x
    weight, best, lowest = even, x, float(np.max(lost(x)))
    for done in range(rounds):
        now = np.asarray(lost(x))
        weight = weight * np.sqrt(now / np.max(now) + 1e-12)  # root: slower, but without cycles
        weight = weight / np.sum(weight)
        x, _ = descend(x, weight)
        worst = float(np.max(lost(x)))
        if worst < lowest:
            best, lowest = x, worst
        if between("polishing on the ladder", done + 1, rounds, lowest):
            break
    return best


def _starts(
    rng, ladder, target, slices, slice_duration, rabi_max, count, warm
) -> Iterator[np.ndarray]:
    """The caller's guess, derivative-corrected Gaussians for y-x-y, then smooth random drives."""
    if warm is not None:
        yield np.asarray(warm, dtype=float)
        count -= 1
    if count > 0:
        yield _three_gaussians(ladder, target, slices, slice_duration)
    t = (np.arange(slices) + 0.5) / slices
    modes = np.sin(np.pi * np.outer(np.arange(1, _MODES + 1), t))  # zero at both ends
    decay = 1 / np.arange(1, _MODES + 1)
    for _ in range(count - 1):
        amplitude = rng.normal(size=(2, _MODES)) * decay
        drive = (amplitude @ modes).T
        yield 0.8 * rabi_max * drive / np.max(np.linalg.norm(drive, axis=1))


def _three_gaussians(ladder, target, slices, slice_duration) -> np.ndarray:
    """One derivative-corrected Gaussian where the axis lies on the equator, else y-x-y."""
    w, x, y, z = target.quaternion
    if abs(z) < 1e-12:
        turn = 2 * math.atan2(math.hypot(x, y), w)
        parts = [(turn, math.atan2(y, x), slices)]
    else:
        angles = [math.remainder(a, 2 * math.pi) for a in euler_yxy(target.quaternion)]
        third = slices // 3
        lengths = (third, slices - 2 * third, third)
        parts = [
            (angle, phase, n)
            for angle, phase, n in zip(
                angles, (math.pi / 2, 0.0, math.pi / 2), lengths, strict=True
            )
            if n > 0
        ]
    return np.concatenate(
        [
            derivative_corrected(angle, phase, n * slice_duration, n, ladder)
            for angle, phase, n in parts
        ]
    )
