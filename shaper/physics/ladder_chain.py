"""The chain of slices on a ladder, forward and back: what ``physics.ladder`` is made of.

One slice of length dt has the half turn ``w = (Wx + i Wy)(1 + eps) dt/2``. A turn of the drive's
phase is diagonal, so an element of the slice is

    U[m, n] = g[m, n](s) w^(m-n),  m >= n,    U[n, m] = g[m, n](s) conj(w)^(m-n),    s = |w|^2

with ``g`` entire in ``s``. Its power series has coefficients that depend on detuning and
anharmonicity only: they are made once, in NumPy, and the loop is left with short polynomials in
``s``.

The chain carries the two columns that start in the qubit. Going back stores nothing along the way:
a change of a slice is ``dU = -i G U``, so the cotangent acts only through the Hermitian
``H = (X - X^dag)/2i``, ``X = (end state)(cotangent)^dag``; through a slice it becomes
``Y = H U``, ``H <- U^dag Y``, and ``dJ = Re i tr(Y^dag dU)`` is read off on the way (derived here).

Complex numbers are (re, im) pairs of arrays, for the compiler's sake.
"""

from __future__ import annotations

import jax
import jax.numpy as jnp
import numpy as np

Array = jax.Array


def coefficients(level: np.ndarray, powers: int, terms: int) -> np.ndarray:
    """Power series of every ``g[m, n]`` in ``s``.

    Args:
        level: [level, grid] rad. Diagonal of H dt.
        powers: of H dt in the exponential.
        terms: of the series, constant included.
    Returns:
        [element, term, 2, grid] unitless: lower triangle row by row; real and imaginary parts.
    """
    d, grid = level.shape
    root = np.sqrt(np.arange(1.0, d))[:, None, None, None]
    # entry [n, m, term]: (-i H dt)^k / k! without its factor (-i)^k and its power of w or w*
    power = np.zeros((d, d, terms, grid))
    power[np.arange(d), np.arange(d), 0] = 1.0
    row, column = np.arange(d - 1)[:, None], np.arange(d)[None, :]
    up_overlaps = (row + 1 > column)[..., None, None]  # H[n, n+1] (w*) meets a power of w
    down_overlaps = (row < column)[..., None, None]  # H[n+1, n] (w) meets a power of w*

    def times_s(x):
        return np.concatenate([np.zeros_like(x[:, :, :1]), x[:, :, :-1]], axis=2)

    parts = [power.copy(), np.zeros_like(power)]
    for k in range(1, powers + 1):
        upper, lower = root * power[1:], root * power[:-1]
        moved = level[:, None, None, :] * power
        moved[:-1] += np.where(up_overlaps, times_s(upper), upper)
        moved[1:] += np.where(down_overlaps, times_s(lower), lower)
        power = moved / k
        parts[k % 2] += power if k % 4 in (0, 3) else -power  # (-i)^k = 1, -i, -1, i
    return np.stack(parts, axis=3)[np.tril_indices(d)]


def _elements(series: Array) -> tuple:
    """[m][n][term] -> (re, im) of the lower triangle."""
    d = (np.sqrt(8 * series.shape[0] + 1).astype(int) - 1) // 2
    each = iter([tuple((part[0], part[1]) for part in element) for element in series])
    return tuple(tuple(next(each) for _ in range(m + 1)) for m in range(d))


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


def _kept(on: Array | None, new, old):
    """The new values where a slice is there, else the old ones."""
    return new if on is None else jax.tree.map(lambda a, b: jnp.where(on, a, b), new, old)


@jax.custom_vjp
def columns(x: Array, y: Array, on: Array | None, half: Array, series: Array) -> tuple:
    """What becomes of |0> and |1>, differentiable in x and y.

    Args:
        x, y: [slice] rad/s.
        on: [slice] bool. False: the slice has no duration. None: all have theirs.
        half: [grid] s. Half a slice times 1 + eps.
        series: [element, term, 2, grid], of ``coefficients``.
    Returns:
        [level][column] pairs of [grid].
    """
    elements = _elements(series)
    d = len(elements)

    def step(psi, drive):
        w = drive[0] * half, drive[1] * half
        s = w[0] * w[0] + w[1] * w[1]
        g = [[_horner(c, s) for c in row] for row in elements]
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
        return _kept(drive[2], tuple(new), psi), None

    zero, one = jnp.zeros_like(half), jnp.ones_like(half)
    start = tuple(
        tuple((one if level == column else zero, zero) for column in range(2)) for level in range(d)
    )
    return jax.lax.scan(step, start, (x, y, on))[0]


def _columns_forward(x, y, on, half, series):
    end = columns(x, y, on, half, series)
    return end, (x, y, on, half, series, end)


def _hermitian(end: tuple, cotangent: tuple) -> tuple:
    """Lower triangle of ``H`` at the end of the chain, row by row; the diagonal is real."""

    def outer(m, n):
        """X[m, n] = sum over columns of end[m] conj(cotangent[n])."""
        return _add(*(_times(end[m][c], _conj(cotangent[n][c])) for c in range(2)))

    def element(m, n):
        """((X - X^dag)/2i)[m, n]."""
        a, b = outer(m, n), outer(n, m)
        return 0.5 * (a[1] + b[1]), -0.5 * (a[0] - b[0])

    return tuple(
        tuple(element(m, n) if n < m else element(m, n)[0] for n in range(m + 1))
        for m in range(len(end))
    )


def _h_times(h: tuple, u: list) -> list:
    """Y = H U."""

    def element(m, k):
        return h[m][k] if k < m else _conj(h[k][m])

    d, rows = len(h), []
    for m in range(d):
        row = []
        for n in range(d):
            total = (h[m][m] * u[m][n][0], h[m][m] * u[m][n][1])
            for k in range(d):
                if k != m:
                    total = _add(total, _times(element(m, k), u[k][n]))
            row.append(total)
        rows.append(row)
    return rows


def _turned_back(u: list, product: list) -> tuple:
    """Lower triangle of U^dag Y."""
    rows = []
    for m in range(len(u)):
        row = []
        for n in range(m + 1):
            total = _times(_conj(u[0][m]), product[0][n])
            for k in range(1, len(u)):
                total = _add(total, _times(_conj(u[k][m]), product[k][n]))
            row.append(total if n < m else total[0])
        rows.append(tuple(row))
    return tuple(rows)


def _step_back(series: tuple, h: tuple, w: tuple) -> tuple[tuple, Array, Array]:
    """H before a slice, and dJ/dRe(w), dJ/dIm(w) of that slice."""
    d = len(series)
    s = w[0] * w[0] + w[1] * w[1]
    powers = _powers(w, d)
    g = [[_horner(c, s) for c in row] for row in series]
    u = _slice(g, powers)
    product = _h_times(h, u)
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
    return _turned_back(u, product), gx + 2 * along * w[0], gy + 2 * along * w[1]


def _back(kept: tuple, cotangents: tuple, gather):
    """Through the chain from its end; what ``gather`` makes of each slice's dJ/dx and dJ/dy."""
    x, y, on, half, series, end = kept
    elements = _elements(series)

    def step(h, drive):
        before, gx, gy = _step_back(elements, h, (drive[0] * half, drive[1] * half))
        there = half if on is None else drive[2] * half
        return _kept(drive[2], before, h), gather(gx * there, gy * there)

    return jax.lax.scan(step, _hermitian(end, cotangents), (x, y, on), reverse=True)[1]


def _columns_backward(kept, cotangent):
    gx, gy = _back(kept, cotangent, lambda gx, gy: (jnp.sum(gx), jnp.sum(gy)))
    return gx, gy, None, jnp.zeros_like(kept[3]), jnp.zeros_like(kept[4])


columns.defvjp(_columns_forward, _columns_backward)


def columns_and_jacobian(
    x: Array, y: Array, on: Array | None, half: Array, series: Array, cotangents: tuple
) -> tuple:
    """The columns, and the slopes of many functions of them, point by point.

    Args:
        x, y, on, half, series: as of ``columns``.
        cotangents: [level][column] pairs of [row, grid], as of the adjoint.
    Returns:
        [level][column] pairs of [grid], and [slice, 2, row, grid].
    """
    end, kept = _columns_forward(x, y, on, half, series)
    return end, _back(kept, cotangents, lambda gx, gy: jnp.stack([gx, gy]))
