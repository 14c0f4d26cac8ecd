"""Rotations of the Bloch sphere as unit quaternions. The sign convention stands here, once.

``U = exp(-i angle n.sigma/2)`` is a positive (right-hand) rotation by ``angle`` about the unit
vector ``n``. Its quaternion is ``(w, x, y, z)`` with ``U = w - i (x sx + y sy + z sz)``, that is
``w = cos(angle/2)`` and ``(x, y, z) = n sin(angle/2)``. ``q`` and ``-q`` are one gate. Products
are written like matrices: in ``product(later, earlier)`` the right factor acts first.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

_UNITARY_TOLERANCE = 1e-6  # largest |U^dag U - 1| taken for a typed-in unitary

IDENTITY = np.array([1.0, 0.0, 0.0, 0.0])


def from_axis_angle(axis: Sequence[float], angle: float) -> np.ndarray:
    """Rotation by ``angle`` (rad, any sign and size) about ``axis`` (any length but zero).

    Returns:
        [4] unitless. ``(cos(angle/2), n sin(angle/2))``.
    Raises:
        ValueError: if the axis has no direction.
    """
    n = np.asarray(axis, dtype=float)
    length = np.linalg.norm(n)
    if n.shape != (3,) or not np.isfinite(length) or length == 0.0:
        raise ValueError(f"axis: expected three numbers, not all zero, got {axis}")
    return np.concatenate([[math.cos(angle / 2)], math.sin(angle / 2) * n / length])


def about_x(angle: float) -> np.ndarray:
    """Rotation by ``angle`` (rad) about x."""
    return from_axis_angle((1, 0, 0), angle)


def about_y(angle: float) -> np.ndarray:
    """Rotation by ``angle`` (rad) about y."""
    return from_axis_angle((0, 1, 0), angle)


def about_z(angle: float) -> np.ndarray:
    """Rotation by ``angle`` (rad) about z."""
    return from_axis_angle((0, 0, 1), angle)


def about_equator(angle: float, phase: float) -> np.ndarray:
    """Rotation by ``angle`` (rad) about ``cos(phase) x + sin(phase) y``: one pulse on resonance."""
    return from_axis_angle((math.cos(phase), math.sin(phase), 0.0), angle)


NAMED_GATES = {
    "hadamard": from_axis_angle((1, 0, 1), math.pi),
    "s": about_z(math.pi / 2),
    "t": about_z(math.pi / 4),
    "s_inverse": about_z(-math.pi / 2),
    "t_inverse": about_z(-math.pi / 4),
    "sqrt_x": about_x(math.pi / 2),
    "identity": IDENTITY,
}


def product(later: np.ndarray, earlier: np.ndarray) -> np.ndarray:
    """Quaternion of ``U_later U_earlier``; both ``[*batch, 4]``, broadcast against each other."""
    w1, x1, y1, z1 = np.moveaxis(np.asarray(later, dtype=float), -1, 0)
    w2, x2, y2, z2 = np.moveaxis(np.asarray(earlier, dtype=float), -1, 0)
    return np.stack(
        [
            w1 * w2 - x1 * x2 - y1 * y2 - z1 * z2,
            w1 * x2 + x1 * w2 + y1 * z2 - z1 * y2,
            w1 * y2 - x1 * z2 + y1 * w2 + z1 * x2,
            w1 * z2 + x1 * y2 - y1 * x2 + z1 * w2,
        ],
        axis=-1,
    )


def conjugate(q: np.ndarray) -> np.ndarray:
    """The inverse rotation, ``[*batch, 4]``."""
    return np.asarray(q, dtype=float) * np.array([1.0, -1.0, -1.0, -1.0])


def in_time_order(*rotations: np.ndarray) -> np.ndarray:
    """The rotations one after another, the first one first, ``[4]``."""
    total = IDENTITY
    for q in rotations:
        total = product(q, total)
    return total


def canonical(q: np.ndarray) -> np.ndarray:
    """Of ``q`` and ``-q`` the one with ``w > 0`` (at ``w = 0``: first nonzero one positive)."""
    q = np.asarray(q, dtype=float)
    leading = next((c for c in q if abs(c) > 1e-12), 1.0)
    return q if leading > 0 else -q


def matrix(q: np.ndarray) -> np.ndarray:
    """The SU(2) matrix ``w - i (x sx + y sy + z sz)``, ``[*batch, 2, 2]`` complex."""
    w, x, y, z = np.moveaxis(np.asarray(q, dtype=float), -1, 0)
    return np.stack(
        [np.stack([w - 1j * z, -y - 1j * x], -1), np.stack([y - 1j * x, w + 1j * z], -1)], -2
    )


def from_matrix(unitary: np.ndarray) -> np.ndarray:
    """Quaternion of a 2x2 unitary, its global phase removed.

    Raises:
        ValueError: if the shape is not 2x2 or ``U^dag U`` is off the identity by more than 1e-6.
    """
    u = np.asarray(unitary, dtype=complex)
    if u.shape != (2, 2):
        raise ValueError(f"unitary: expected a 2x2 matrix, got shape {u.shape}")
    off = float(np.max(np.abs(u.conj().T @ u - np.eye(2))))
    if not off <= _UNITARY_TOLERANCE:
        raise ValueError(f"unitary: expected U^dag U = 1 within 1e-6, it is off by {off:.3g}")
    u = u / np.sqrt(np.linalg.det(u))
    a, b = (u[0, 0] + u[1, 1].conj()) / 2, (u[1, 0] - u[0, 1].conj()) / 2
    q = np.array([a.real, -b.imag, b.real, -a.imag])
    return canonical(q / np.linalg.norm(q))


def from_euler(first: float, second: float, third: float) -> np.ndarray:
    """Euler angles in time order: z(first), then y(second), then z(third); rad."""
    return in_time_order(about_z(first), about_y(second), about_z(third))


def euler_zyz(q: np.ndarray) -> tuple[float, float, float]:
    """Angles (rad) with ``from_euler(*angles) = +-q``; the middle one in [0, pi]."""
    w, x, y, z = np.asarray(q, dtype=float)
    second = 2 * math.atan2(math.hypot(x, y), math.hypot(w, z))
    total = math.atan2(z, w) if math.hypot(w, z) > 0 else 0.0  # (first + third) / 2
    apart = math.atan2(-x, y) if math.hypot(x, y) > 0 else total  # (third - first) / 2
    return total - apart, second, total + apart


def euler_yxy(q: np.ndarray) -> tuple[float, float, float]:
    """Angles (rad) in time order y(a), x(b), y(c) whose product is ``+-q``; b in [0, pi].

    The form that a drive with only x and y can play. Found from z-y-z after turning the axes
    cyclically, (y, x, y) -> (z, y, z) with x -> y, y -> z, z -> x.
    """
    w, x, y, z = np.asarray(q, dtype=float)
    return euler_zyz(np.array([w, z, x, y]))


def bloch_matrix(q: np.ndarray) -> np.ndarray:
    """The rotation of Bloch vectors, ``[*batch, 3, 3]``: Rodrigues' formula in quaternion form."""
    w, x, y, z = np.moveaxis(np.asarray(q, dtype=float), -1, 0)
    rows = [
        [w * w + x * x - y * y - z * z, 2 * (x * y - w * z), 2 * (x * z + w * y)],
        [2 * (x * y + w * z), w * w - x * x + y * y - z * z, 2 * (y * z - w * x)],
        [2 * (x * z - w * y), 2 * (y * z + w * x), w * w - x * x - y * y + z * z],
    ]
    return np.stack([np.stack(row, -1) for row in rows], -2)


def between(start: Sequence[float], end: Sequence[float]) -> np.ndarray:
    """The shortest rotation that carries the Bloch vector ``start`` into ``end``.

    Opposite vectors: half a turn about an axis in the xy plane where there is one.
    Raises:
        ValueError: if either vector has no direction.
    """
    a, b = (np.asarray(v, dtype=float) for v in (start, end))
    for name, v in (("start", a), ("end", b)):
        if v.shape != (3,) or not np.linalg.norm(v) > 0:
            raise ValueError(f"{name}: expected a Bloch vector, not zero, got {list(v)}")
    a, b = a / np.linalg.norm(a), b / np.linalg.norm(b)
    angle = math.atan2(np.linalg.norm(np.cross(a, b)), a @ b)
    axis = np.cross(a, b)
    if np.linalg.norm(axis) < 1e-12:
        axis = np.array([-a[1], a[0], 0.0]) if math.hypot(a[0], a[1]) > 1e-12 else (1.0, 0.0, 0.0)
    return from_axis_angle(axis, angle)
