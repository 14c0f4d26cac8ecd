"""Rigorous bounds for polynomials on [-1, 1] and for smooth functions near them.

Three published facts carry the proof of the worst infidelity. Each is a plain function here.
"""

from __future__ import annotations

import math

import numpy as np

_UP = 1 + 1e-12  # every bound is rounded up by far more than its own evaluation can err


def chebyshev_zeros(points: int) -> np.ndarray:
    """[points] the zeros of the Chebyshev polynomial of that degree, descending."""
    # as sines, so that they are symmetric to the last bit
    return np.sin(np.pi * (points - 1 - 2 * np.arange(points)) / (2 * points))


def interpolation_error(reach: float, points: int) -> float:
    """How far a function may be from its interpolant at the Chebyshev zeros.

    For ``|d^k f/dx^k| <= reach^k`` on [-1, 1] the error is at most
    ``reach^n 2^(1-n) / n! = 2 (reach/2)^n / n!`` with ``n`` points.

    Source:
        Remainder of interpolation at Chebyshev zeros: Abramowitz and Stegun, Handbook of
        Mathematical Functions, 25.2.3 with the nodes' product at most 2^(1-n).
    """
    if reach == 0:
        return 0.0
    return 2 * math.exp(points * math.log(reach / 2) - math.lgamma(points + 1)) * _UP


def points_needed(reach: float, error: float) -> int:
    """The fewest Chebyshev zeros with ``interpolation_error`` at most ``error`` (> 0)."""
    points = 1
    while interpolation_error(reach, points) > error:
        points += 1
    return points


def lebesgue_bound(points: int) -> float:
    """How much interpolation at the Chebyshev zeros can enlarge: at most ``1 + 2/pi ln n``.

    Source:
        Rivlin, Chebyshev Polynomials, theorem 1.2.
    """
    return (1 + 2 / math.pi * math.log(points)) * _UP


def sampling_factor(degree: int, intervals: int) -> float:
    """What bounds a polynomial everywhere on [-1, 1] from its values at ``cos(j pi / m)``.

    With ``x = cos(theta)`` it is a trigonometric polynomial, and around its largest value this
    falls no faster than ``cos(degree * theta)``; some sample lies within ``pi / (2 m)``. So
    ``max |p| <= max_j |p(x_j)| / cos(pi degree / (2 m))``, for every degree below ``m``.

    Source:
        M. Riesz, Jahresber. Dtsch. Math.-Ver. 23, 354 (1914); for sampling: Ehlich and Zeller,
        Math. Z. 86, 41 (1964).
    """
    if degree == 0:
        return 1.0
    if degree >= intervals:
        raise ValueError(f"intervals: expected more than the degree {degree}, got {intervals}")
    return 1 / math.cos(math.pi * degree / (2 * intervals)) * _UP


def samples(intervals: int) -> np.ndarray:
    """[intervals + 1] the points ``cos(j pi / m)``, ends included; the center alone for zero."""
    if intervals == 0:
        return np.zeros(1)
    return np.sin(np.pi * (intervals - 2 * np.arange(intervals + 1)) / (2 * intervals))


def evaluation_matrix(points: int, intervals: int) -> np.ndarray:
    """[sample, point]: from values at the Chebyshev zeros to the interpolant at ``samples``."""
    order = np.arange(points)
    zero_angle = np.pi * (order + 0.5) / points
    sample_angle = np.pi * np.arange(intervals + 1) / max(intervals, 1)
    if intervals == 0:
        sample_angle = np.array([np.pi / 2])
    to_coefficients = 2 / points * np.cos(np.outer(order, zero_angle))
    to_coefficients[0] /= 2
    return np.cos(np.outer(sample_angle, order)) @ to_coefficients
