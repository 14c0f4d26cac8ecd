"""Three and more levels of a weakly anharmonic ladder, with its own adjoint: leakage.

``H/hbar = sum_n [delta (1/2 - n) + alpha n (n-1)/2] |n><n| + (1 + eps)/2 sum_n sqrt(n)
[(Wx - i Wy) |n-1><n| + h.c.]``. On the two lowest levels this is the two-level Hamiltonian, sign of
``delta`` included; ``alpha`` is the second transition minus the first.

How a chain of slices is computed and differentiated is in ``physics.ladder_chain``.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import jax
import jax.numpy as jnp
import numpy as np

from shaper.errors import InputError
from shaper.physics.ladder_chain import coefficients, columns, columns_and_jacobian
from shaper.physics.two_level import require_float64

Array = jax.Array

MOST_LEVELS = 5
LARGEST_NORM = 1.5  # of H dt; a slice that exceeds it is cut into equal parts
WIDEST_BLOCK = 32  # grid points carried at once: their series must stay in the fastest cache
_VECTOR = 8  # doubles in the longest vector; blocks are multiples: shorter ones would be unrolled
# whole, into code whose compilation takes gigabytes
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


@jax.tree_util.register_dataclass
@dataclass(frozen=True)
class Chain:
    """Equal slices, ready for the compiler: made by ``make_chain``.

    Attributes:
        duration: [] s, of a part of a slice.
        series: [element, term, 2, grid], of ``ladder_chain.coefficients``.
        cuts: equal parts of a slice.
    """

    duration: Array
    series: Array
    cuts: int = field(metadata={"static": True})

    @property
    def levels(self) -> int:
        """Number of levels: they have ``n (n + 1) / 2`` elements."""
        return (math.isqrt(8 * self.series.shape[0] + 1) - 1) // 2


def make_chain(ladder: Ladder, steps: Steps, duration: float, delta: np.ndarray) -> Chain:
    """What a chain of equal slices needs to know of the ladder.

    Args:
        steps: from ``plan`` for the same slices and bounds.
        duration: s, of a slice.
        delta: [grid] rad/s detuning.
    """
    part = duration / steps.cuts
    level = [part * (np.asarray(delta) * (0.5 - n) + e) for n, e in enumerate(ladder.energies)]
    series = coefficients(np.stack(level), steps.powers, steps.terms)
    return Chain(np.asarray(part), series, steps.cuts)


@jax.jit
def propagate_qubit(
    chain: Chain, drive: Array, eps: Array, on: Array | None = None
) -> tuple[Array, Array]:
    """What becomes of |0> and |1>, at each grid point; differentiable in the drive.

    Args:
        chain: of the drive's slices, within the bounds of its ``plan``.
        drive: [slice, 2] rad/s.
        eps: [grid] unitless relative amplitude error. Not differentiated.
        on: [slice] bool; False: the slice has no duration. None: all have theirs.
    Returns:
        Real and imaginary part, each [grid, level, 2] unitless: final amplitude of each level,
        started in |0> and in |1>, up to one phase common to all.
    Raises:
        RuntimeError: if JAX is not in 64-bit mode.
    Source:
        Derived in ``ladder_chain``.
    """
    slices = _cut(chain, drive, on)
    index = _blocks(eps.shape[0], WIDEST_BLOCK)
    end = jax.lax.map(lambda errors: columns(*slices, *errors), _dealt(chain, eps, index))
    re, im = (
        jnp.stack([jnp.stack([pair[part].ravel() for pair in row], -1) for row in end], -2)
        for part in (0, 1)
    )
    return re[: eps.shape[0]], im[: eps.shape[0]]


def errors_and_jacobian(
    chain: Chain, drive: Array, eps: Array, rows: Array, on: Array | None = None
) -> tuple[Array, Array]:
    """Linear forms of the final amplitudes and their derivative, for Gauss-Newton steps.

    Args:
        chain, drive, eps, on: as in ``propagate_qubit``.
        rows: [row, 4 level, grid] unitless: of the real and imaginary part of what becomes of |0>,
            then of |1>, level by level.
    Returns:
        errors [row, grid] unitless and jacobian [slice, 2, row, grid] s/rad.
    """
    slices = _cut(chain, drive, on)
    grid, index = eps.shape[0], _blocks(eps.shape[0], _VECTOR)  # rows make them long enough
    levels = range(chain.levels)

    def block(errors):
        *errors, rows = errors
        forms = rows.reshape(rows.shape[0], chain.levels, 2, 2, -1)
        cotangents = [[(forms[:, m, c, 0], forms[:, m, c, 1]) for c in (0, 1)] for m in levels]
        end, jacobian = columns_and_jacobian(*slices, *errors, cotangents)
        value = sum(
            forms[:, m, c, part] * end[m][c][part]
            for m in levels
            for c in (0, 1)
            for part in (0, 1)
        )
        return value, jacobian

    dealt = *_dealt(chain, eps, index), jnp.moveaxis(jnp.asarray(rows)[:, :, index], 2, 0)
    value, jacobian = jax.lax.map(block, dealt)
    value = jnp.moveaxis(value, 0, 1).reshape(rows.shape[0], -1)[:, :grid]
    by_cut = jacobian.reshape(len(index), len(drive), chain.cuts, 2, *jacobian.shape[3:])
    jacobian = jnp.moveaxis(jnp.sum(by_cut, axis=2), 0, 3)
    return value, jacobian.reshape(*jacobian.shape[:3], -1)[..., :grid]


def _cut(chain: Chain, drive: Array, on: Array | None) -> tuple[Array, Array, Array | None]:
    """Both quadratures in slices short enough for the series, and which of them are there."""
    require_float64()
    x, y = jnp.repeat(drive[:, 0], chain.cuts), jnp.repeat(drive[:, 1], chain.cuts)
    return x, y, None if on is None else jnp.repeat(on, chain.cuts)


def _dealt(chain: Chain, eps: Array, index: np.ndarray) -> tuple[Array, Array]:
    """Half turns per drive and series, block by block."""
    half = (1 + jnp.asarray(eps)) * (chain.duration / 2)
    return half[index], jnp.moveaxis(jnp.asarray(chain.series)[..., index], -2, 0)


def _blocks(grid: int, widest: int) -> np.ndarray:
    """[block, point]: the grid in blocks of one width, filled up with its last point."""
    count = -(-grid // widest)
    width = -(-grid // (count * _VECTOR)) * _VECTOR
    return np.minimum(np.arange(count * width), grid - 1).reshape(count, width)


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
