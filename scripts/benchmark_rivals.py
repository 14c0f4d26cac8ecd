"""What the engine and the search are measured against: the three ways without this project.

``plain_scan``: JAX, a scan over the slices, reverse mode left to JAX. ``numpy_cost_and_gradient``:
NumPy by hand, all grid points at once, exact gradient from stored forward products. ``expm_cost``:
SciPy's matrix exponential slice by slice, for finite differences. None imports the project.

As a program it is the search that one writes by hand, SciPy's L-BFGS-B from many random starts:

python scripts/benchmark_rivals.py STARTS ITERATIONS SLICES [--until INFIDELITY] [--by-slice]

It is there twice: with all slices at once in every array, which is as fast as NumPy goes, and slice
by slice, the way such a script is mostly written (common practice).
"""

from __future__ import annotations

import json
import sys
import time
from collections.abc import Callable

import numpy as np
from scipy.linalg import expm
from scipy.optimize import minimize

PAULI = np.array([[[0, 1], [1, 0]], [[0, -1j], [1j, 0]], [[1, 0], [0, -1]]], dtype=complex)
QUARTER_TURN_Z = np.array([np.cos(np.pi / 4), 0, 0, np.sin(np.pi / 4)])
DIFFERENCE = 1e-6  # rad/s against a drive of order 0.1: half of the digits of a double
SEED = 7


def unitary(q: np.ndarray) -> np.ndarray:
    """[2, 2] from a quaternion (w, x, y, z): ``w - i (x sx + y sy + z sz)``."""
    return q[0] * np.eye(2) - 1j * np.einsum("c,cij->ij", q[1:], PAULI)


def plain_scan(eps, delta, weight, target, duration: float) -> Callable:
    """drive [slice, 2] -> (cost, gradient): a scan of products, compiled, reverse mode by JAX."""
    import jax
    import jax.numpy as jnp

    def times(p, q):
        w1, x1, y1, z1 = p
        w2, x2, y2, z2 = q
        return jnp.stack(
            [
                w1 * w2 - x1 * x2 - y1 * y2 - z1 * z2,
                w1 * x2 + x1 * w2 + y1 * z2 - z1 * y2,
                w1 * y2 - x1 * z2 + y1 * w2 + z1 * x2,
                w1 * z2 + x1 * y2 - y1 * x2 + z1 * w2,
            ]
        )

    def overlap(drive, e, d):
        def step(q, w):
            rate = jnp.stack([(1 + e) * w[0], (1 + e) * w[1], d])
            size = jnp.sqrt(jnp.sum(rate**2) + 1e-300)
            turn = jnp.concatenate(
                [jnp.cos(size * duration / 2)[None], jnp.sin(size * duration / 2) * rate / size]
            )
            return times(turn, q), None

        start = jnp.array([1.0, 0.0, 0.0, 0.0])
        return jnp.dot(jax.lax.scan(step, start, drive)[0], jnp.asarray(target))

    def cost(drive):
        found = jax.vmap(overlap, (None, 0, 0))(drive, jnp.asarray(eps), jnp.asarray(delta))
        return 1 - jnp.sum(jnp.asarray(weight) * found**2)

    return jax.jit(jax.value_and_grad(cost))


def slice_matrices(drive: np.ndarray, eps, delta, duration: float):
    """Propagators [slice, grid, 2, 2] and their derivatives [slice, grid, 2, 2] by each quadrature.

    ``exp(-i h.s) = cos|h| - i sinc|h| h.s`` with ``h`` the half turn.
    """
    half = 0.5 * duration
    h = np.stack(  # [3, slice, grid]
        np.broadcast_arrays(
            half * drive[:, :1] * (1 + eps), half * drive[:, 1:] * (1 + eps), half * delta
        )
    )
    angle = np.sqrt(np.sum(h * h, axis=0)) + 1e-150
    cos, sinc = np.cos(angle), np.sin(angle) / angle
    bend = (cos - sinc) / angle**2  # d sinc / d h = bend h
    step = np.empty((*angle.shape, 2, 2), dtype=complex)
    _fill(step, cos, sinc * h[0], sinc * h[1], sinc * h[2])
    slopes = []
    for c in (0, 1):
        v = bend * h[c] * h
        v[c] += sinc
        slope = np.empty_like(step)
        _fill(slope, -sinc * h[c], *v)
        slopes.append(slope * (half * (1 + eps))[:, None, None])
    return step, slopes


def _fill(out, w, x, y, z) -> None:
    out[..., 0, 0], out[..., 1, 1] = w - 1j * z, w + 1j * z
    out[..., 0, 1], out[..., 1, 0] = -y - 1j * x, y - 1j * x


def numpy_overlap(drive: np.ndarray, eps, delta, target: np.ndarray, duration: float):
    """Re tr(V^dag U)/2, [grid], and its derivative, [slice, 2, grid].

    Sines and derivatives for all slices at once; only the products run in a loop.
    """
    step, slopes = slice_matrices(drive, eps, delta, duration)
    before = np.empty_like(step)  # what the slices so far have done
    before[0] = np.eye(2)
    for k in range(len(drive) - 1):
        np.matmul(step[k], before[k], out=before[k + 1])
    after = np.empty_like(step)  # V^dag times what the later slices will do
    after[-1] = unitary(target).conj().T
    for k in range(len(drive) - 1, 0, -1):
        np.matmul(after[k], step[k], out=after[k - 1])
    around = np.matmul(before, after)  # tr(after dM before) = tr(around dM)
    value = 0.5 * np.einsum("gij,gji->g", around[0], step[0]).real
    slope = [0.5 * np.einsum("sgij,sgji->sg", around, s).real for s in slopes]
    return value, np.stack(slope, axis=1)


def sliced_overlap(drive: np.ndarray, eps, delta, target: np.ndarray, duration: float):
    """As ``numpy_overlap``: quaternions of the grid, a loop over the slices and one back."""

    def times(p, q):
        return (
            p[0] * q[0] - p[1] * q[1] - p[2] * q[2] - p[3] * q[3],
            p[0] * q[1] + p[1] * q[0] + p[2] * q[3] - p[3] * q[2],
            p[0] * q[2] - p[1] * q[3] + p[2] * q[0] + p[3] * q[1],
            p[0] * q[3] + p[1] * q[2] - p[2] * q[1] + p[3] * q[0],
        )

    half = 0.5 * duration
    scale, hz = half * (1 + eps), half * delta
    q = (np.ones_like(eps), *np.zeros((3, len(eps))))
    states, steps = [], []
    for x, y in drive:
        hx, hy = x * scale, y * scale
        angle = np.sqrt(hx * hx + hy * hy + hz * hz) + 1e-150
        cos, sinc = np.cos(angle), np.sin(angle) / angle
        steps.append((hx, hy, angle, cos, sinc))
        states.append(q)
        q = times((cos, sinc * hx, sinc * hy, sinc * hz), q)
    value = sum(t * c for t, c in zip(target, q, strict=True))
    slope = np.empty((len(drive), 2, len(eps)))
    costate = tuple(t + np.zeros_like(eps) for t in target)
    for k in range(len(drive) - 1, -1, -1):
        hx, hy, angle, cos, sinc = steps[k]
        w, a, b, c = states[k]
        pull = times(costate, (w, -a, -b, -c))  # the slope by each component of the step
        bend = (cos - sinc) / angle**2
        along = bend * (pull[1] * hx + pull[2] * hy + pull[3] * hz) - sinc * pull[0]
        slope[k] = (along * hx + sinc * pull[1]) * scale, (along * hy + sinc * pull[2]) * scale
        costate = times((cos, -sinc * hx, -sinc * hy, -sinc * hz), costate)
    return value, slope


def numpy_cost_and_gradient(eps, delta, weight, target, duration: float) -> Callable:
    """drive [slice, 2] -> (cost, gradient), by hand in NumPy."""

    def call(drive):
        value, slope = numpy_overlap(drive, eps, delta, target, duration)
        return 1 - np.sum(weight * value**2), slope @ (-2 * weight * value)

    return call


def expm_cost(eps, delta, weight, target, duration: float) -> Callable:
    """drive [slice, 2] -> cost, by ``scipy.linalg.expm`` of every slice at every grid point."""
    goal = unitary(target)

    def call(drive):
        cost = 1.0
        for e, d, w in zip(eps, delta, weight, strict=True):
            total = np.eye(2)
            for x, y in drive:
                field = 0.5 * ((1 + e) * (x * PAULI[0] + y * PAULI[1]) + d * PAULI[2])
                total = expm(-1j * duration * field) @ total
            cost -= w * abs(np.trace(goal.conj().T @ total) / 2) ** 2
        return cost

    return call


def central_differences(cost: Callable) -> Callable:
    """drive [slice, 2] -> (cost, gradient) from two more costs for every component."""

    def call(drive):
        gradient = np.empty_like(drive)
        for at in np.ndindex(drive.shape):
            nudge = np.zeros_like(drive)
            nudge[at] = DIFFERENCE
            gradient[at] = (cost(drive + nudge) - cost(drive - nudge)) / (2 * DIFFERENCE)
        return cost(drive), gradient

    return call


def box_grid(amplitude: float, detuning: float, points: tuple[int, int]):
    """Even product grid over the box, its edges included: eps, delta, equal weights, [grid]."""
    axes = (
        np.linspace(-amplitude, amplitude, points[0]),
        np.linspace(-detuning, detuning, points[1]),
    )
    eps, delta = (c.ravel() for c in np.meshgrid(*axes, indexing="ij"))
    return eps, delta, np.full(eps.size, 1 / eps.size)


def hand_written_search(
    starts: int,
    iterations: int,
    slices: int,
    duration: float,
    *,
    amplitude: float = 0.05,
    detuning: float = 0.1,
    until: float | None = None,
    overlap: Callable = numpy_overlap,
) -> dict:
    """Robust z(90) by L-BFGS-B from random starts, in units of the largest Rabi rate.

    Amplitude in a disc by ``sin(radius)``, the log of the mean infidelity over 3 x 5 points as
    cost, the worst of 41 x 41 points as the result: the same as the project's job.

    Args:
        duration: 1/W_max.
        until: stop after the start that is at or below this worst infidelity.
        overlap: ``numpy_overlap`` or ``sliced_overlap``.
    Returns:
        ``infidelity`` (worst, best start) and ``trail``: [[seconds since the first line, best so
        far], ...] after each start.
    """
    begin = time.perf_counter()
    step = duration / slices
    eps, delta, weight = box_grid(amplitude, detuning, (3, 5))
    fine_eps, fine_delta, _ = box_grid(amplitude, detuning, (41, 41))
    random = np.random.default_rng(SEED)

    def disc(p):
        """Drive and what maps its gradient back: W = sin(r) p / r."""
        r = np.sqrt(np.sum(p * p, axis=1, keepdims=True)) + 1e-12
        sinc, bend = np.sin(r) / r, (np.cos(r) - np.sin(r) / r) / r**2
        return sinc * p, lambda g: sinc * g + bend * p * np.sum(p * g, axis=1, keepdims=True)

    def log_mean(flat):
        drive, back = disc(flat.reshape(slices, 2))
        value, slope = overlap(drive, eps, delta, QUARTER_TURN_Z, step)
        mean = 2 / 3 * np.sum(weight * (1 - value**2))  # average gate infidelity
        gradient = slope @ (-4 / 3 * weight * value)
        return np.log(mean), (back(gradient) / mean).ravel()

    def worst(flat):
        drive = disc(flat.reshape(slices, 2))[0]
        total = np.broadcast_to(np.eye(2, dtype=complex), (fine_eps.size, 2, 2))
        for w in drive:
            total = slice_matrices(w[None], fine_eps, fine_delta, step)[0][0] @ total
        value = 0.5 * np.einsum("ji,gji->g", unitary(QUARTER_TURN_Z).conj(), total).real
        return float(np.max(2 / 3 * (1 - value**2)))

    best, trail = np.inf, []
    t = (np.arange(slices) + 0.5) / slices
    for _ in range(starts):
        phase = random.uniform(0, 2 * np.pi) + 3 * random.normal() * t
        for k in range(1, 8):
            phase += 2 * random.normal() / k * np.cos(np.pi * k * t + random.uniform(0, 2 * np.pi))
        first = 1.2 * np.stack([np.cos(phase), np.sin(phase)], axis=1)
        options = {"maxiter": iterations, "maxfun": 10 * iterations, "maxcor": 12}
        options |= {"ftol": 0.0, "gtol": 1e-9}
        found = minimize(log_mean, first.ravel(), jac=True, method="L-BFGS-B", options=options)
        best = min(best, worst(found.x))
        trail.append([time.perf_counter() - begin, best])
        if until is not None and best <= until:
            break
    return {"infidelity": best, "trail": trail}


if __name__ == "__main__":
    starts, iterations, slices = map(int, sys.argv[1:4])
    until = float(sys.argv[5]) if sys.argv[4:5] == ["--until"] else None
    overlap = sliced_overlap if "--by-slice" in sys.argv else numpy_overlap
    turn = np.pi * slices / 16
    found = hand_written_search(starts, iterations, slices, turn, until=until, overlap=overlap)
    print(json.dumps(found))
