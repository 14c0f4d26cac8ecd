"""One grid, one physics, for every pulse: the infidelities that all comparisons speak of."""

from __future__ import annotations

import numpy as np

from shaper.bench import score_grid
from shaper.evidence.proof import prove_pulse
from shaper.job import Job
from shaper.physics.propagate import propagate
from shaper.pulse import Pulse, Score
from shaper.target import infidelity


def score(pulse: Pulse, job: Job) -> Score:
    """Infidelity of a pulse against the job's target: nominal, and over the tolerance box.

    The box is sampled on ``bench.score_grid``, corners and edges included; the mean is exact for
    polynomials of the errors up to degree 79. Scored twice: the float waveform, and what the
    integer codes make of it. Without a tolerance all three figures are one; with one, the codes'
    worst case is also bounded for every point of the box (``evidence.proof``).

    Args:
        pulse: shaped or composite, on the sample grid.
        job: target, detuning and tolerance box.
    """
    floats = box_infidelity(pulse.drive, pulse.segment_durations, job)
    codes = box_infidelity(*pulse.played, job)
    guaranteed = prove_pulse(pulse, job).guaranteed if job.has_tolerance else None
    return Score(*floats, *codes, guaranteed)


def box_infidelity(
    drive: np.ndarray, durations: np.ndarray, job: Job
) -> tuple[float, float, float]:
    """Nominal, mean and worst infidelity of segments ``drive`` [n, 2] rad/s, ``durations`` [n] s.

    The worst is the largest on the grid, the nominal point among them.
    """
    nominal = float(infidelity(propagate(drive, durations, 0.0, job.detuning), job.target))
    if not job.has_tolerance:
        return nominal, nominal, nominal
    grid = score_grid(job)
    over_box = infidelity(propagate(drive, durations, grid.eps, grid.delta), job.target)
    return nominal, float(grid.weight @ over_box), max(nominal, float(np.max(over_box)))
