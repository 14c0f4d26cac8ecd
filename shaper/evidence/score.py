"""One grid, one physics, for every pulse: the infidelities that all comparisons speak of."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from shaper.bench import score_grid
from shaper.evidence.levels import box_on_levels
from shaper.evidence.proof import prove_pulse
from shaper.job import Job
from shaper.physics.propagate import propagate
from shaper.pulse import Pulse, Score
from shaper.target import infidelity
from shaper.wiring import arriving, wanted


@dataclass(frozen=True)
class GroupFigures:
    """What a pulse does to one of the job's qubits, against that qubit's own target.

    Attributes:
        name: of the qubit.
        nominal: infidelity without errors.
        mean: infidelity over its tolerance box.
        worst: largest infidelity on the grid over its box, the nominal point among them.
    """

    name: str
    nominal: float
    mean: float
    worst: float


def score(pulse: Pulse, job: Job, on_levels: bool = False) -> Score:
    """Infidelity of a pulse against the job's target: nominal, and over the tolerance box.

    Both go through all that stands between DAC and qubit (``wiring``).

    The box is sampled on ``bench.score_grid``, corners and edges included; the mean is exact for
    polynomials of the errors up to degree 79. Scored twice: the float waveform, and what the
    integer codes make of it. Without a tolerance all three figures are one; with one, the codes'
    worst case is also bounded for every point of the box (``evidence.proof``).

    Where the job has several qubits, nominal, worst and bound are the largest of theirs, the
    mean is their mean by weight.

    Args:
        pulse: shaped or composite, on the sample grid.
        job: target, detuning and tolerance box, of all its qubits.
        on_levels: take the job's anharmonicity and levels into account; the box is then sampled
            on the coarser grid of ``evidence.levels``, and no bound is proved.
    """
    if on_levels:
        floats, codes = (
            box_on_levels(*wanted(job, pulse), job),
            box_on_levels(*arriving(job, pulse), job),
        )
        return Score(
            floats.nominal, floats.mean, floats.worst, codes.nominal, codes.mean, codes.worst
        )
    floats = box_infidelity(*wanted(job, pulse), job)
    codes = box_infidelity(*arriving(job, pulse), job)
    guaranteed = prove_pulse(pulse, job).guaranteed if job.has_tolerance else None
    return Score(*floats, *codes, guaranteed)


def box_infidelity(
    drive: np.ndarray, durations: np.ndarray, job: Job
) -> tuple[float, float, float]:
    """Nominal, mean and worst infidelity of segments ``drive`` [n, 2] rad/s, ``durations`` [n] s.

    Of all qubits of the job together, as in ``score``.
    """
    return together(group_infidelities(drive, durations, job), job)


def together(figures: tuple[GroupFigures, ...], job: Job) -> tuple[float, float, float]:
    """Nominal (largest), mean (by weight) and worst (largest) of all qubits of the job."""
    weights = [group.weight for group in job.groups]
    return (
        max(f.nominal for f in figures),
        float(np.average([f.mean for f in figures], weights=weights)),
        max(f.worst for f in figures),
    )


def group_infidelities(
    drive: np.ndarray, durations: np.ndarray, job: Job
) -> tuple[GroupFigures, ...]:
    """The figures of every qubit of the job, the addressed one first; arguments as above."""
    found = []
    for group in job.groups:
        q = propagate(drive, durations, 0.0, group.detuning)
        nominal = mean = worst = float(infidelity(q, group.target))
        if group.has_tolerance:
            grid = score_grid(job.for_group(group), float(np.sum(durations)))
            over_box = infidelity(propagate(drive, durations, grid.eps, grid.delta), group.target)
            mean, worst = float(grid.weight @ over_box), max(nominal, float(np.max(over_box)))
        found.append(GroupFigures(group.name, nominal, mean, worst))
    return tuple(found)
