"""Wishes for the look of the waveform: smooth, narrow in band, zero at its ends.

Smoothness and band are costs, each a weighted sum of squares linear in the drive; the ends are
built into the parameters as an envelope, so that they are met exactly.
"""

from __future__ import annotations

import numpy as np

from shaper.job import Job


def envelope(job: Job, slices: int) -> np.ndarray | None:
    """[slice] unitless: what the drive is held below, or None if its ends are free.

    Rises as ``sin^2`` within the rise time and falls likewise; the first and the last slice are
    exactly zero. Slices of no duration beyond the job's own are zero too.
    """
    rise = job.shape.rise
    if rise <= 0:
        return None
    ramp = max(1, round(rise / job.slice_duration))
    rising = np.sin(0.5 * np.pi * np.minimum(np.arange(job.slices) / ramp, 1.0)) ** 2
    held = np.zeros(slices)
    held[: job.slices] = np.minimum(rising, rising[::-1])
    return held


def wished(job: Job) -> bool:
    """Whether the job wishes for anything that costs."""
    return job.shape.smoothness > 0 or job.shape.max_bandwidth is not None


def wishes(job: Job, slices: int) -> dict[str, tuple[np.ndarray, float]]:
    """Name to (matrix [equation, slice], weight) of each cost that the job asks for."""
    found = {}
    if job.shape.smoothness > 0:
        found["smoothness"] = (_padded(second_difference(job.slices), slices), job.shape.smoothness)
    if job.shape.max_bandwidth is not None:
        outside = out_of_band(job.slices, job.slice_duration, job.shape.max_bandwidth)
        found["out_of_band"] = (_padded(outside, slices), job.shape.band_weight)
    return found


def second_difference(slices: int) -> np.ndarray:
    """[slice - 2, slice] unitless: the squares of what it makes of a drive sum to their mean."""
    inner = max(slices - 2, 0)
    matrix = np.zeros((inner, slices))
    for k in range(inner):
        matrix[k, k : k + 3] = (1.0, -2.0, 1.0)
    return matrix / np.sqrt(max(inner, 1))


def out_of_band(slices: int, slice_duration: float, bandwidth: float) -> np.ndarray:
    """[slice, slice] unitless: the energy beyond +-bandwidth (Hz), as a share of full drive's.

    By Parseval the energy within the band is the quadratic form of the kernel
    ``sin(2 pi B (j - k) dt) / (pi (j - k))``; the rest is its complement, this is its root.
    Slices count as samples here: images beyond half the slice rate are the line's business.

    Source:
        The kernel of Slepian, Bell Syst. Tech. J. 57, 1371 (1978).
    """
    lag = np.arange(slices)[:, None] - np.arange(slices)[None, :]
    half_width = min(bandwidth * slice_duration, 0.5)
    inside = 2 * half_width * np.sinc(2 * half_width * lag)
    share, modes = np.linalg.eigh(np.eye(slices) - inside)
    return np.sqrt(np.clip(share, 0.0, None))[:, None] * modes.T / np.sqrt(slices)


def _padded(matrix: np.ndarray, slices: int) -> np.ndarray:
    return np.pad(matrix, ((0, 0), (0, slices - matrix.shape[1])))
