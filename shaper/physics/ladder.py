"""Three and more levels of a weakly anharmonic ladder, with its own adjoint: leakage.

``H/hbar = sum_n [delta (1/2 - n) + alpha n (n-1)/2] |n><n| + (1 + eps)/2 sum_n sqrt(n)
[(Wx - i Wy) |n-1><n| + h.c.]``. On the two lowest levels this is the two-level Hamiltonian, sign of
``delta`` included; ``alpha`` is the second transition minus the first.

One slice of length dt has the half turn ``w = (Wx + i Wy)(1 + eps) dt/2``. A turn of the drive's
phase is diagonal, so an element of the slice is

    U[m, n] = g[m, n](s) w^(m-n),  m >= n,    U[n, m] = g[m, n](s) conj(w)^(m-n),    s = |w|^2

with ``g`` entire in ``s``. Its power series has coefficients that depend on detuning and
anharmonicity only: they are made once, before the chain, and the loop is left with short
polynomials in ``s``.

The chain carries the two columns that start in the qubit. Its adjoint stores nothing along the way:
a change of a slice is ``dU = -i G U``, so the cotangent acts only through the Hermitian
``H = (X - X^dag)/2i``, ``X = (end state)(cotangent)^dag``; going back through a slice is
``Y = H U``, ``H <- U^dag Y``, and ``dJ = Re i tr(Y^dag dU)`` is read off on the way (derived here).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import partial

import jax
import jax.numpy as jnp
import numpy as np

from shaper.errors import InputError
from shaper.physics.two_level import require_float64

Array = jax.Array

MOST_LEVELS = 5
LARGEST_NORM = 1.5  # of H dt; a slice that exceeds it is cut into equal parts
WIDEST_BLOCK = 32  # grid points carried at once: their series must stay in the fastest cache
_VECTOR = 8  # doubles in the longest vector; blocks are multiples: rests go one by one
_TRUNCATION = 2e-16  # of a slice's elements: no more than their own round-off


@dataclass(frozen=True)
class Ladder:
    """The energy levels.

    Attributes:
        anharmonicity: rad/s. Second transition minus the first; negative for a transmon.
        levels: 3 to 5.
    """

    anharmonicity: float
    levels: int = 3

    def __post_init__(self):
        if not (math.isfinite(self.anharmonicity) and self.anharmonicity != 0):
            raise InputError(
                f"anharmonicity: expected a rate other than zero, got {self.anharmonicity:g} rad/s"
            )
        if not 3 <= self.levels <= MOST_LEVELS:
            raise InputError(f"levels: expected 3 to {MOST_LEVELS}, got {self.levels}")

    @property
    def energies(self) -> list[float]:
        """[level] rad/s above the harmonic ladder, centered: a common phase is left out."""
        raw = [self.anharmonicity * n * (n - 1) / 2 for n in range(self.levels)]
        return [e - (raw[0] + raw[-1]) / 2 for e in raw]


@dataclass(frozen=True)
class Steps:
    """How a slice is computed, all static: made by ``plan``.

    Attributes:
        cuts: equal parts of a slice.
        powers: of H dt in the exponential.
        terms: of the polynomials in ``s``, constant included.
    """

    cuts: int
    powers: int
    terms: int


def plan(
    ladder: Ladder, duration: float, largest_drive: float, largest_detuning: float = 0.0
) -> Steps:
    """Cuts and series lengths that leave the error of a slice below round-off.

    Args:
        duration: s. Length of a slice.
        largest_drive: rad/s. Bound of ``(1 + eps) |W|``; a box bound counts its corner.
        largest_detuning: rad/s. Bound of ``|delta|``.
    """
    top = ladder.levels - 1
    level = max(abs(e) + largest_detuning * abs(0.5 - n) for n, e in enumerate(ladder.energies))
    rise = sum(math.sqrt(n) for n in (top, top - 1))  # row sum bound of a + a^dag
    norm = duration * (level + largest_drive / 2 * rise)
    cuts = max(1, math.ceil(norm / LARGEST_NORM))
    norm /= cuts
    powers = 2
    while norm ** (powers + 1) / math.factorial(powers + 1) > _TRUNCATION:
        powers += 1
    kick = duration / cuts * largest_drive / 2 * rise  # each power of s costs two of these
    terms = 1
    while terms < powers and kick ** (2 * terms) / math.factorial(2 * terms) > _TRUNCATION:
        terms += 1
    return Steps(cuts, powers, terms)


def _coefficients(ladder: Ladder, steps: Steps, duration: Array, delta: Array) -> tuple:
    """Power series of every ``g[m, n]`` in ``s``: nested ``[m][n][term] -> (re, im)``, [grid]."""
    d, terms = ladder.levels, steps.terms
    level = jnp.stack(
        [duration * (delta * (0.5 - n) + e) for n, e in enumerate(ladder.energies)]
    )  # [level, grid]
    root = jnp.sqrt(jnp.arange(1.0, d))[:, None, None]
    # entry [n, m, term]: (-i H dt)^k / k! without its factor (-i)^k and its power of w or w*
    power = jnp.zeros((d, d, terms, delta.shape[0])).at[jnp.arange(d), jnp.arange(d), 0].set(1.0)
    row, column = jnp.arange(d - 1)[:, None], jnp.arange(d)[None, :]
    up_overlaps = (row + 1 > column)[..., None, None]  # H[n, n+1] (w*) meets a power of w
    down_overlaps = (row < column)[..., None, None]  # H[n+1, n] (w) meets a power of w*

    def times_s(x):
        return jnp.concatenate([jnp.zeros_like(x[:, :, :1]), x[:, :, :-1]], axis=2)

    def step(carry, k):
        power, re, im = carry
        upper = root[..., None] * power[1:]
        lower = root[..., None] * power[:-1]
        moved = level[:, None, None, :] * power
        moved = moved.at[:-1].add(jnp.where(up_overlaps, times_s(upper), upper))
        moved = moved.at[1:].add(jnp.where(down_overlaps, times_s(lower), lower))
        power = moved / k
        turn = k % 4  # (-i)^k = 1, -i, -1, i
        re = re + power * jnp.where(turn == 0, 1.0, jnp.where(turn == 2, -1.0, 0.0))
        im = im + power * jnp.where(turn == 3, 1.0, jnp.where(turn == 1, -1.0, 0.0))
        return (power, re, im), None

    start = (power, power, jnp.zeros_like(power))
    (_, re, im), _ = jax.lax.scan(step, start, jnp.arange(1, steps.powers + 1))
    return tuple(
        tuple(tuple((re[m, n, j], im[m, n, j]) for j in range(terms)) for n in range(m + 1))
        for m in range(d)
    )


def _times(a: tuple, b: tuple) -> tuple:
    """Product of two (re, im) pairs."""
    return a[0] * b[0] - a[1] * b[1], a[0] * b[1] + a[1] * b[0]


def _add(a: tuple, b: tuple) -> tuple:
    return a[0] + b[0], a[1] + b[1]


def _conj(a: tuple) -> tuple:
    return a[0], -a[1]


def _horner(series: tuple, s: Array) -> tuple:
    re, im = series[-1]
    for c_re, c_im in reversed(series[:-1]):
        re, im = re * s + c_re, im * s + c_im
    return re, im


def _slope(series: tuple, s: Array) -> tuple:
    """Derivative of ``_horner`` in s."""
    if len(series) == 1:
        return jnp.zeros_like(s), jnp.zeros_like(s)
    return _horner(tuple((k * re, k * im) for k, (re, im) in enumerate(series) if k), s)


def _powers(w: tuple, d: int) -> list:
    """w^1 .. w^(d-1); index 0 is unused."""
    powers = [None, w]
    for _ in range(2, d):
        powers.append(_times(powers[-1], w))
    return powers


def _slice(g: list, powers: list) -> list:
    """The matrix of one slice from its ``g`` and the powers of ``w``: [row][column] of pairs."""
    d = len(g)
    u = [[None] * d for _ in range(d)]
    for m in range(d):
        u[m][m] = g[m][m]
        for n in range(m):
            u[m][n] = _times(g[m][n], powers[m - n])
            u[n][m] = _times(g[m][n], _conj(powers[m - n]))
    return u


@partial(jax.custom_vjp, nondiff_argnums=(0, 1))
def _columns(ladder: Ladder, steps: Steps, x: Array, y: Array, duration, scale, delta):
    """Final qubit columns; x, y: [slice] rad/s; scale, delta: [grid] -> [level][column] pairs."""
    series = _coefficients(ladder, steps, duration, delta)
    d, half = ladder.levels, scale * (duration / 2)

    def step(psi, drive):
        w = drive[0] * half, drive[1] * half
        s = w[0] * w[0] + w[1] * w[1]
        g = [[_horner(c, s) for c in row] for row in series]
        u = _slice(g, _powers(w, d))
        new = []
        for row in u:
            pair = []
            for column in range(2):
                total = _times(row[0], psi[0][column])
                for k in range(1, d):
                    total = _add(total, _times(row[k], psi[k][column]))
                pair.append(total)
            new.append(tuple(pair))
        return tuple(new), None

    zero, one = jnp.zeros_like(scale), jnp.ones_like(scale)
    start = tuple(
        tuple((one if level == column else zero, zero) for column in range(2)) for level in range(d)
    )
    return jax.lax.scan(step, start, (x, y))[0]


def _columns_forward(ladder, steps, x, y, duration, scale, delta):
    end = _columns(ladder, steps, x, y, duration, scale, delta)
    return end, (x, y, duration, scale, delta, end)


def _columns_backward(ladder, steps, kept, cotangent):
    x, y, duration, scale, delta, end = kept
    series = _coefficients(ladder, steps, duration, delta)
    d, half = ladder.levels, scale * (duration / 2)

    def outer(m, n):
        """X[m, n] = sum over columns of end[m] conj(cotangent[n])."""
        return _add(*(_times(end[m][c], _conj(cotangent[n][c])) for c in range(2)))

    def hermitian(m, n):
        """((X - X^dag)/2i)[m, n]."""
        a, b = outer(m, n), outer(n, m)
        return 0.5 * (a[1] + b[1]), -0.5 * (a[0] - b[0])

    # lower triangle, row by row; the diagonal is real
    start = tuple(
        tuple(hermitian(m, n) if n < m else hermitian(m, n)[0] for n in range(m + 1))
        for m in range(d)
    )

    def element(h, m, n):
        if m == n:
            return h[m][m], None
        return h[m][n] if n < m else _conj(h[n][m])

    def matrix_times(h, u):
        """Y = H U."""
        rows = []
        for m in range(d):
            row = []
            for n in range(d):
                total = (h[m][m] * u[m][n][0], h[m][m] * u[m][n][1])
                for k in range(d):
                    if k != m:
                        total = _add(total, _times(element(h, m, k), u[k][n]))
                row.append(total)
            rows.append(row)
        return rows

    def turned_back(u, product):
        """Lower triangle of U^dag Y."""
        rows = []
        for m in range(d):
            row = []
            for n in range(m + 1):
                total = _times(_conj(u[0][m]), product[0][n])
                for k in range(1, d):
                    total = _add(total, _times(_conj(u[k][m]), product[k][n]))
                row.append(total if n < m else total[0])
            rows.append(tuple(row))
        return tuple(rows)

    def step(h, drive):
        w = drive[0] * half, drive[1] * half
        s = w[0] * w[0] + w[1] * w[1]
        powers = _powers(w, d)
        g = [[_horner(c, s) for c in row] for row in series]
        u = _slice(g, powers)
        product = matrix_times(h, u)
        along, gx, gy = 0.0, 0.0, 0.0  # dJ/ds, and dJ/dw at fixed s
        for m in range(d):
            for n in range(m + 1):
                p = m - n
                slope = _slope(series[m][n], s)
                low, high = _conj(product[m][n]), _conj(product[n][m])
                if p == 0:
                    total = low
                else:
                    total = _add(_times(low, powers[p]), _times(high, _conj(powers[p])))
                    if p == 1:
                        b, a = _times(g[m][n], low), _times(g[m][n], high)
                    else:
                        b = _times(g[m][n], _times(low, powers[p - 1]))
                        a = _times(g[m][n], _times(high, _conj(powers[p - 1])))
                    gx = gx - p * (a[1] + b[1])  # Re(i (a + b))
                    gy = gy + p * (a[0] - b[0])  # Im(i a) - Im(i b)
                along = along - (total[0] * slope[1] + total[1] * slope[0])  # Re(i C g')
        gx = jnp.sum((gx + 2 * along * w[0]) * half)
        gy = jnp.sum((gy + 2 * along * w[1]) * half)
        return turned_back(u, product), (gx, gy)

    _, (gx, gy) = jax.lax.scan(step, start, (x, y), reverse=True)
    none = jnp.zeros_like
    return gx, gy, none(duration), none(scale), none(delta)


_columns.defvjp(_columns_forward, _columns_backward)


@partial(jax.jit, static_argnums=(0, 1))
def propagate_qubit(
    ladder: Ladder, steps: Steps, drive: Array, duration: float, eps: Array, delta: Array
) -> tuple[Array, Array]:
    """What becomes of |0> and |1>, at each grid point; differentiable in the drive.

    Args:
        ladder, steps: static; ``steps`` from ``plan`` for the same slices and bounds.
        drive: [slice, 2] rad/s.
        duration: s. Length of every slice. Not differentiated.
        eps: [grid] unitless relative amplitude error. Not differentiated.
        delta: [grid] rad/s detuning. Not differentiated.
    Returns:
        Real and imaginary part, each [grid, level, 2] unitless: final amplitude of each level,
        started in |0> and in |1>, up to one phase common to all.
    Raises:
        RuntimeError: if JAX is not in 64-bit mode.
    Source:
        Derived in this room.
    """
    require_float64()
    x, y = drive[:, 0], drive[:, 1]
    if steps.cuts > 1:
        x, y = jnp.repeat(x, steps.cuts), jnp.repeat(y, steps.cuts)
    step = jnp.asarray(duration / steps.cuts, dtype=drive.dtype)
    grid = eps.shape[0]
    blocks = -(-grid // WIDEST_BLOCK)
    width = -(-grid // (blocks * _VECTOR)) * _VECTOR if grid > 1 else 1
    # the last block is filled up with copies of its last point, dropped again below
    index = jnp.minimum(jnp.arange(blocks * width), grid - 1).reshape(blocks, width)
    end = jax.lax.map(
        lambda errors: _columns(ladder, steps, x, y, step, *errors), (1 + eps[index], delta[index])
    )
    re, im = (
        jnp.stack([jnp.stack([pair[part].ravel() for pair in row], -1) for row in end], -2)
        for part in (0, 1)
    )
    return re[:grid], im[:grid]


def derivative_corrected(
    angle: float,
    phase: float,
    duration: float,
    slices: int,
    ladder: Ladder,
    correction: float = 1.0,
    width: float = 0.25,
) -> np.ndarray:
    """Gaussian pulse on the equator with a derivative quadrature, sampled at slice middles.

    ``W = E(t) - i correction E'(t)/alpha`` turned by ``phase``: 0 is the plain Gaussian, 1
    takes away most of the leakage, 1/2 most of the phase error.

    Args:
        angle: rad, the area of ``E``; phase: rad, of the axis on the equator.
        duration: s; slices: equal slices.
        width: standard deviation over duration.
    Returns:
        [slice, 2] rad/s. No bound is applied.
    Source:
        F. Motzoi, J. M. Gambetta, P. Rebentrost, F. K. Wilhelm, Phys. Rev. Lett. 103, 110501
        (2009).
    """
    t = ((np.arange(slices) + 0.5) / slices - 0.5) * duration
    sigma = width * duration
    bell = np.exp(-0.5 * (t / sigma) ** 2)
    pedestal = np.exp(-0.125 / width**2)
    scale = angle / (np.sum(bell - pedestal) * duration / slices)
    envelope = scale * (bell - pedestal)
    slope = -scale * bell * t / sigma**2
    turned = (envelope - 1j * correction * slope / ladder.anharmonicity) * np.exp(1j * phase)
    return np.stack([turned.real, turned.imag], axis=-1)
