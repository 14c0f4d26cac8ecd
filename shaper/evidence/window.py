"""The tolerance window: how far one error may go before the infidelity passes a threshold."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from scipy.optimize import brentq

from shaper.job import Job
from shaper.physics.propagate import propagate

LARGEST_AMPLITUDE = 0.9  # relative; beyond, a pulse is no pulse
LARGEST_DETUNING = 2.0  # of W_max
_POINTS_PER_TURN = 24  # of the scan: the infidelity swings at most twice while the qubit turns once
_FEWEST_POINTS = 200


def tolerance_window(
    drive: np.ndarray, durations: np.ndarray, job: Job, error: str, threshold: float
) -> float:
    """Largest ``w`` with infidelity at most the threshold on all of ``[-w, w]``.

    The other error is zero; the job's own detuning is the middle. Scanned outwards, finer than
    the infidelity can swing, then the crossing is refined. Zero if the pulse misses the threshold
    without errors; the end of the scan if it never does.

    Args:
        drive: [segment, 2] rad/s.
        durations: [segment] s.
        error: "amplitude" (relative) or "detuning" (rad/s).
        threshold: of the infidelity (average gate, or transfer).
    Returns:
        In the unit of the error.
    """
    drive, durations = np.asarray(drive, dtype=float), np.asarray(durations, dtype=float)
    if error == "amplitude":
        end = LARGEST_AMPLITUDE
        turns = end * float(np.sum(np.hypot(*drive.T) * durations)) / (2 * np.pi)
    else:
        end = LARGEST_DETUNING * job.rabi_max
        turns = end * float(np.sum(durations)) / (2 * np.pi)

    rows = job.target.error_rows

    def excess(size: np.ndarray) -> np.ndarray:
        """[2, point]: above the threshold, to either side."""
        both = np.stack([size, -size])
        eps, delta = (both, 0.0) if error == "amplitude" else (0.0, both)
        q = propagate(drive, durations, eps, job.detuning + delta)
        return job.target.scale * np.sum((q @ rows.T) ** 2, axis=-1) - threshold

    points = max(_FEWEST_POINTS, int(_POINTS_PER_TURN * turns) + 1)
    sizes = np.linspace(0.0, end, points)
    found = end
    for start in range(0, points - 1, _FEWEST_POINTS):  # outwards, piece by piece
        piece = sizes[start : start + _FEWEST_POINTS + 1]
        above = excess(piece) > 0
        if not np.any(above):
            continue
        for side in range(2):
            if not np.any(above[side]):
                continue
            first = int(np.argmax(above[side]))
            if first == 0:
                return float(piece[0])
            found = min(found, _crossing(excess, side, piece[first - 1], piece[first]))
        return found
    return found


def _crossing(
    excess: Callable[[np.ndarray], np.ndarray], side: int, inside: float, outside: float
) -> float:
    """Where one side passes the threshold, between a point below and one above it."""
    return float(
        brentq(lambda size: float(excess(np.array([size]))[side, 0]), inside, outside, rtol=1e-12)
    )
