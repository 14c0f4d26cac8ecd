"""From free parameters to quadratures that cannot leave the disc or the box.

Circle: ``W = W_max p sin|p|/|p|``; box: ``W = W_max sin p`` for each quadrature. Both are entire
functions of ``p``, never exceed the bound, and reach it at a finite ``|p| = pi/2``, where a pulse
of shortest duration lives; a map that only approaches its bound would stall there.
"""

from __future__ import annotations

import jax
import jax.numpy as jnp
import numpy as np

Array = jax.Array

_BELOW_ONE = 1 - 2**-50  # keeps round-off of the map on the inner side of the bound
_SMALL = 1e-4  # rad^2; below it the series of sin(sqrt s)/sqrt s is exact to round-off


def _sinc(s: Array) -> Array:
    """sin(sqrt s)/sqrt s, differentiable at zero."""
    safe = jnp.where(s < _SMALL, 1.0, s)
    root = jnp.sqrt(safe)
    return jnp.where(s < _SMALL, 1 - s / 6 + s * s / 120 - s**3 / 5040, jnp.sin(root) / root)


def quadratures(parameters: Array, bound: str) -> Array:
    """Wx and Wy in units of W_max.

    Args:
        parameters: [*batch, slice, 2] rad, any size.
        bound: "circle" or "box".
    Returns:
        [*batch, slice, 2] unitless, within the bound.
    """
    if bound == "box":
        return _BELOW_ONE * jnp.sin(parameters)
    s = jnp.sum(parameters * parameters, axis=-1, keepdims=True)
    return _BELOW_ONE * _sinc(s) * parameters


def parameters(drive: np.ndarray, bound: str) -> np.ndarray:
    """Parameters in the inner branch whose quadratures are ``drive``; the inverse of the map.

    Args:
        drive: [*batch, slice, 2] in units of W_max; what lies outside is drawn to the bound.
    Returns:
        [*batch, slice, 2] rad, ``|p| <= pi/2``.
    """
    drive = np.asarray(drive, dtype=float)
    if bound == "box":
        return np.arcsin(np.clip(drive, -1, 1))
    radius = np.hypot(drive[..., 0], drive[..., 1])[..., None]
    angle = np.arcsin(np.clip(radius, 0, 1))
    return drive * np.divide(angle, radius, out=np.ones_like(radius), where=radius > 0)
