"""The sample clock and the integer codes of the DAC.

``W = code / (2^(bits-1) - 1) * full_scale``, full scale being the largest Rabi rate. The range
is symmetric; what would exceed it is refused, never clipped.
"""

from __future__ import annotations

import numpy as np

from shaper.errors import SafetyError

_ROUND_OFF = 1e-12  # relative; a float this close above the bound is the bound


def largest_code(bits: int) -> int:
    """The code of full scale: ``2^(bits-1) - 1``."""
    return 2 ** (bits - 1) - 1


def encode(drive: np.ndarray, full_scale: float, bits: int, bound: str) -> np.ndarray:
    """The nearest codes that do not leave the bound.

    Plain rounding can carry a point on the circle out of it by up to 0.7 code; there the nearest
    lattice point inside is taken.

    Args:
        drive: [sample, 2] rad/s.
        full_scale: rad/s of the largest code; the radius of the circle, or the half side of the
            box.
        bits: resolution, sign included, at most 16.
        bound: "circle" or "box".
    Returns:
        [sample, 2] int16.
    Raises:
        SafetyError: if the drive exceeds the bound.
    """
    top = largest_code(bits)
    exact = np.asarray(drive, dtype=float) / full_scale * top
    reach = np.hypot(*exact.T) if bound == "circle" else np.max(np.abs(exact), axis=1)
    if not np.all(reach <= top * (1 + _ROUND_OFF)):
        raise SafetyError(
            f"drive: expected at most {full_scale:.6g} rad/s ({bound}), "
            f"got {np.max(reach) / top * full_scale:.6g} rad/s"
        )
    codes = np.clip(np.rint(exact), -top, top)
    if bound == "circle":
        out = np.hypot(*codes.T) > top
        codes[out] = _nearest_inside(exact[out], top)
    return codes.astype(np.int16)


def _nearest_inside(exact: np.ndarray, top: int) -> np.ndarray:
    """Of the four lattice points around each point, the nearest within the circle."""
    inner, outer = np.trunc(exact), np.trunc(exact) + np.sign(exact)
    corners = np.stack(
        [np.stack([a[:, 0], b[:, 1]], -1) for a in (inner, outer) for b in (inner, outer)]
    )
    distance = np.hypot(*np.moveaxis(corners - exact, -1, 0))
    distance[np.hypot(*np.moveaxis(corners, -1, 0)) > top] = np.inf
    return np.take_along_axis(corners, np.argmin(distance, axis=0)[None, :, None], axis=0)[0]


def decode(codes: np.ndarray, full_scale: float, bits: int) -> np.ndarray:
    """[sample, 2] rad/s: the drive that the codes stand for."""
    return np.asarray(codes, dtype=float) / largest_code(bits) * full_scale


def padded_length(samples: int, granularity: int, minimum: int) -> int:
    """The shortest length the AWG takes: a multiple of the granularity, at least the minimum."""
    return -(-max(samples, minimum) // granularity) * granularity


def pad(codes: np.ndarray, granularity: int, minimum: int) -> np.ndarray:
    """[padded, 2] int16: the codes with zeros at the end, up to a length that the AWG takes."""
    codes = np.asarray(codes, dtype=np.int16)
    missing = padded_length(len(codes), granularity, minimum) - len(codes)
    return np.concatenate([codes, np.zeros((missing, 2), np.int16)])
