"""The engine: the two-level chain over a grid of errors, with its own adjoint.

``H/hbar = 1/2 [(1 + eps)(Wx sx + Wy sy) + delta sz]``, constant over each slice. With the half turn
``h = (dt/2) ((1 + eps) Wx, (1 + eps) Wy, delta)`` and ``S = |h|^2`` a slice is the quaternion

    q = (cos sqrt S, h sinc sqrt S)

and with ``a = sinc(2 sqrt S)``, ``b = sin^2(sqrt S)/S``, ``e = (1 - a)/S`` its derivative and its
action on vectors are

    vec(dq q*) = a dh + e h (h.dh) + b h x dh
    q* v q     = (1 - 2 b S) v - 2 a h x v + 2 b h (h.v)

All five are entire functions of ``S``: power series without square root or division, finite and
differentiable with the drive off.

The adjoint stores nothing along the chain. A change of the end point is ``dQ = (0, w) Q``, so the
cotangent ``l`` of ``Q`` acts only through the vector ``v = vec(l Q*)``. Going back through a slice
just turns ``v`` by that slice, so the backward pass carries one 3-vector a grid point, and reads
off ``dJ/dh = a v + e h (h.v) - b h x v`` on its way (the reduced adjoint of a left-trivialized
chain; derived here).

Components are separate arrays with the grid as vector axis; a search adds its starts to it. Cutting
the chain of a short grid into pieces carried side by side was measured and dropped: it gains a
fifth at 25 grid points and nothing with several starts, and compiles half as long again.
"""

from __future__ import annotations

import math
from functools import partial

import jax
import jax.numpy as jnp

Array = jax.Array

LONGEST_TURN = 1.0  # rad; a slice that can turn further is cut into equal parts
_ROUND_OFF = 1e-18


def require_float64() -> None:
    """Raise if JAX computes in float32: infidelities below 1e-7 would be noise.

    Raises:
        RuntimeError: says how to switch 64-bit mode on.
    """
    if not jax.config.jax_enable_x64:
        raise RuntimeError(
            "the engine needs float64: call jax.config.update('jax_enable_x64', True) first"
        )


def _terms(turn: float) -> int:
    """Number of series terms that leave a truncation below round-off up to ``turn`` rad."""
    count = 2
    while turn ** (2 * count) / math.factorial(2 * count) > _ROUND_OFF:
        count += 1
    return count


def _horner(coefficients: list[float], s: Array) -> Array:
    total = jnp.full_like(s, coefficients[-1])
    for c in reversed(coefficients[:-1]):
        total = total * s + c
    return total


def _half_turn_series(s: Array, terms: int) -> tuple[Array, Array]:
    """cos(sqrt s) and sinc(sqrt s)."""
    cos = [(-1) ** k / math.factorial(2 * k) for k in range(terms + 1)]
    sinc = [(-1) ** k / math.factorial(2 * k + 1) for k in range(terms + 1)]
    return _horner(cos, s), _horner(sinc, s)


def _turn_series(s: Array, terms: int) -> tuple[Array, Array, Array]:
    """a = sinc(2 sqrt s), b = (sin(sqrt s))^2 / s, e = (1 - a) / s."""
    b = [(-1) ** k * 2.0 * 4.0**k / math.factorial(2 * k + 2) for k in range(terms + 1)]
    e = [(-1) ** k * 4.0 ** (k + 1) / math.factorial(2 * k + 3) for k in range(terms + 1)]
    b, e = _horner(b, s), _horner(e, s)
    return 1 - e * s, b, e


def _times(p: tuple, q: tuple) -> tuple:
    """Quaternion product p q of component tuples."""
    p0, p1, p2, p3 = p
    q0, q1, q2, q3 = q
    return (
        p0 * q0 - p1 * q1 - p2 * q2 - p3 * q3,
        p0 * q1 + p1 * q0 + p2 * q3 - p3 * q2,
        p0 * q2 - p1 * q3 + p2 * q0 + p3 * q1,
        p0 * q3 + p1 * q2 - p2 * q1 + p3 * q0,
    )


def _chain(terms: int, x: Array, y: Array, half: Array, scale: Array, delta: Array):
    """The propagator; x, y, half: [slice]; scale, delta: [grid] -> 4 x [grid]."""

    def step(q, slice_):
        wx, wy, t = slice_
        hx, hy, hz = (t * wx) * scale, (t * wy) * scale, t * delta
        cos, sinc = _half_turn_series(hx * hx + hy * hy + hz * hz, terms)
        return _times((cos, sinc * hx, sinc * hy, sinc * hz), q), None

    start = (jnp.ones_like(scale), *(jnp.zeros_like(scale) for _ in range(3)))
    return jax.lax.scan(step, start, (x, y, half))[0]


def _step_back(terms: int, v: tuple, hx: Array, hy: Array, hz: Array):
    """The vector before a slice, and dJ/dhx, dJ/dhy of that slice."""
    s = hx * hx + hy * hy + hz * hz
    a, b, e = _turn_series(s, terms)
    v1, v2, v3 = v
    p1, p2, p3 = hy * v3 - hz * v2, hz * v1 - hx * v3, hx * v2 - hy * v1
    d = hx * v1 + hy * v2 + hz * v3
    gx, gy = a * v1 + e * d * hx - b * p1, a * v2 + e * d * hy - b * p2
    keep, a2, b2d = 1 - 2 * b * s, 2 * a, 2 * b * d
    before = (
        keep * v1 - a2 * p1 + b2d * hx,
        keep * v2 - a2 * p2 + b2d * hy,
        keep * v3 - a2 * p3 + b2d * hz,
    )
    return before, gx, gy


@partial(jax.custom_vjp, nondiff_argnums=(0,))
def _propagate(terms: int, x: Array, y: Array, half: Array, scale: Array, delta: Array):
    return _chain(terms, x, y, half, scale, delta)


def _propagate_forward(terms, x, y, half, scale, delta):
    total = _chain(terms, x, y, half, scale, delta)
    return total, (x, y, half, scale, delta, total)


def _propagate_backward(terms, kept, cotangent):
    x, y, half, scale, delta, (w, qx, qy, qz) = kept
    end = _times(cotangent, (w, -qx, -qy, -qz))[1:]  # v = vec(l Q*), 3 x [grid]

    def step(v, slice_):
        wx, wy, t = slice_
        v, gx, gy = _step_back(terms, v, (t * wx) * scale, (t * wy) * scale, t * delta)
        return v, (jnp.sum(gx * scale), jnp.sum(gy * scale))

    _, (gx, gy) = jax.lax.scan(step, end, (x, y, half), reverse=True)
    none = jnp.zeros_like
    return gx * half, gy * half, none(half), none(scale), none(delta)


_propagate.defvjp(_propagate_forward, _propagate_backward)


def _cut(drive: Array, durations: Array, longest_turn: float):
    """Slices short enough for the series, and its length: (drive, durations, cuts, terms)."""
    require_float64()
    cuts = max(1, math.ceil(longest_turn / LONGEST_TURN))
    if cuts > 1:
        drive = jnp.repeat(drive, cuts, axis=0)
        durations = jnp.repeat(durations / cuts, cuts)
    return drive, durations, cuts, _terms(min(longest_turn / cuts * (1 + 1e-9), LONGEST_TURN))


def propagate(
    drive: Array, durations: Array, eps: Array, delta: Array, longest_turn: float
) -> tuple[Array, Array, Array, Array]:
    """Propagator of the whole chain at each grid point, differentiable in the drive.

    Args:
        drive: [slice, 2] rad/s.
        durations: [slice] s. Not differentiated.
        eps: [grid] unitless relative amplitude error. Not differentiated.
        delta: [grid] rad/s detuning. Not differentiated.
        longest_turn: rad, static; no slice turns further at any grid point. Sets the length of
            the series; where it exceeds one radian the slices are cut.
    Returns:
        (w, x, y, z), each [grid], unit norm to round-off.
    Raises:
        RuntimeError: if JAX is not in 64-bit mode.
    Source:
        Slice: Nielsen and Chuang, Quantum Computation and Quantum Information, exercise 2.35.
        Adjoint: derived in this room.
    """
    drive, durations, _, terms = _cut(drive, durations, longest_turn)
    return _propagate(terms, drive[:, 0], drive[:, 1], 0.5 * durations, 1 + eps, delta)


def errors_and_jacobian(
    drive: Array, durations: Array, eps: Array, delta: Array, rows: Array, longest_turn: float
) -> tuple[Array, Array]:
    """The rotation errors ``E q`` and their derivative, point by point, for Gauss-Newton steps.

    The same backward pass as the adjoint, once for each row of ``E``, and not summed over the
    grid.

    Args:
        drive, durations, eps, delta, longest_turn: as in ``propagate``.
        rows: [row, 4, grid] unitless. The linear forms that vanish on the target.
    Returns:
        errors [row, grid] unitless and jacobian [slice, 2, row, grid] s/rad.
    """
    slices = drive.shape[0]
    drive, durations, cuts, terms = _cut(drive, durations, longest_turn)
    x, y, half, scale = drive[:, 0], drive[:, 1], 0.5 * durations, 1 + eps
    total = _chain(terms, x, y, half, scale, delta)
    errors = sum(rows[:, i] * total[i] for i in range(4))
    w, qx, qy, qz = total
    v = _times(tuple(rows[:, i] for i in range(4)), (w, -qx, -qy, -qz))[1:]  # 3 x [row, grid]

    def step(v, slice_):
        wx, wy, t = slice_
        v, gx, gy = _step_back(terms, v, (t * wx) * scale, (t * wy) * scale, t * delta)
        return v, jnp.stack([gx, gy]) * (t * scale)

    _, jacobian = jax.lax.scan(step, v, (x, y, half), reverse=True)
    return errors, jnp.sum(jacobian.reshape(slices, cuts, *jacobian.shape[1:]), axis=1)
