"""One line of the comparison: all that is said of a pulse, computed from its DAC codes."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from shaper.composite.sequence import Sequence, played_ideally
from shaper.evidence.levels import OnLevels, box_on_levels
from shaper.evidence.order import Leading, leading
from shaper.evidence.proof import prove_groups
from shaper.evidence.score import GroupFigures, box_infidelity, group_infidelities, together
from shaper.evidence.window import tolerance_window
from shaper.job import Job
from shaper.physics.decay import coherence_limit
from shaper.pulse import Pulse
from shaper.wiring import arriving

_LEVEL_POINTS = 9  # per axis, at least: levels cost a hundred times what the qubit does
_LEVEL_DENSITY = 2.0  # points per rad of reach
THRESHOLDS = (1e-4, 1e-3)  # of the tolerance windows


@dataclass(frozen=True)
class GroupRow(GroupFigures):
    """``GroupFigures`` with the proved upper bound over the qubit's box.

    Attributes:
        guaranteed: None if no qubit of the job has a tolerance.
    """

    guaranteed: float | None


@dataclass(frozen=True)
class Row:
    """One pulse of the comparison; every figure from its integer codes, unless it says otherwise.

    Of several qubits the infidelities are the largest, the mean is the mean by weight.

    Attributes:
        name: as in the file or the library.
        origin: "optimized" or "composite".
        source: citation, or "".
        duration: s.
        over_limit: duration over the shortest possible (circle) or known (box) for this target;
            nan where the target needs no pulse.
        peak: largest amplitude, rad/s.
        rms: of the amplitude over the duration, rad/s.
        energy: integral of the squared amplitude, rad^2/s.
        groups: the same four figures for every qubit of the job, the addressed one first.
        nominal: infidelity without errors.
        mean: infidelity over the tolerance box.
        worst: largest infidelity on the grid over the tolerance box.
        guaranteed: proved upper bound of it over the whole box; None without a tolerance.
        ideal_worst: ``worst`` of the sequence on paper, without sample grid and codes: the rest
            is the price of the grid. None where there is no sequence.
        amplitude_windows: largest +- relative amplitude error below each of ``THRESHOLDS``, for
            all qubits.
        detuning_windows: rad/s, likewise.
        amplitude_order, detuning_order: leading term of the addressed qubit's infidelity, of the
            sequence on paper where there is one, else of the float waveform; detuning in units of
            W_max.
        levels: what three levels make of it; None without an anharmonicity. All other
            infidelities are those of two levels.
        coherence: infidelity of idling as long, from the job's T1 and T2; None without them.
    """

    name: str
    origin: str
    source: str
    duration: float
    over_limit: float
    peak: float
    rms: float
    energy: float
    groups: tuple[GroupRow, ...]
    nominal: float
    mean: float
    worst: float
    guaranteed: float | None
    ideal_worst: float | None
    amplitude_windows: tuple[float, ...]
    detuning_windows: tuple[float, ...]
    amplitude_order: Leading
    detuning_order: Leading
    levels: OnLevels | None
    coherence: float | None

    @property
    def total(self) -> float:
        """Worst infidelity with decay, to first order the sum of both."""
        return self.worst_known + (self.coherence or 0.0)

    @property
    def worst_known(self) -> float:
        """Worst infidelity by the best model that the job allows: three levels, else two."""
        return self.worst if self.levels is None else self.levels.worst


def measure(
    name: str, pulse: Pulse, job: Job, shortest: float, sequence: Sequence | None = None
) -> Row:
    """All figures of one pulse.

    Args:
        pulse: on the sample grid.
        job: target, bound, tolerance, T1 and T2.
        shortest: s. Limit of the duration for this target.
        sequence: the pulse on paper, if there is one.
    """
    played = arriving(job, pulse)
    figures = group_infidelities(*played, job)
    nominal, mean, worst = together(figures, job)
    bounds: list[float | None] = [None] * len(figures)
    if job.has_tolerance:
        bounds = [proof.guaranteed for proof in prove_groups(pulse, job)]
    ideal = None if sequence is None else played_ideally(sequence, job)
    on_paper = ideal or (pulse.drive, pulse.segment_durations)
    decays = job.t1 is not None or job.t2 is not None
    return Row(
        name=name,
        origin=pulse.origin,
        source=pulse.source,
        duration=pulse.duration,
        over_limit=pulse.duration / shortest if shortest > 0 else math.nan,
        peak=pulse.peak,
        rms=pulse.rms,
        energy=pulse.energy,
        groups=tuple(
            GroupRow(f.name, f.nominal, f.mean, f.worst, bound)
            for f, bound in zip(figures, bounds, strict=True)
        ),
        nominal=nominal,
        mean=mean,
        worst=worst,
        guaranteed=max(bounds) if job.has_tolerance else None,
        ideal_worst=None if ideal is None else box_infidelity(*ideal, job)[2],
        amplitude_windows=_windows(*played, job, "amplitude"),
        detuning_windows=_windows(*played, job, "detuning"),
        amplitude_order=leading(*on_paper, job, "amplitude"),
        detuning_order=leading(*on_paper, job, "detuning"),
        levels=None if job.anharmonicity is None else box_on_levels(*played, job),
        coherence=coherence_limit(pulse.duration, job.t1, job.t2) if decays else None,
    )


def _windows(drive: np.ndarray, durations: np.ndarray, job: Job, error: str) -> tuple[float, ...]:
    """Below each threshold, the narrowest window of all qubits."""
    qubits = [job.for_group(group) for group in job.groups]
    return tuple(
        min(tolerance_window(drive, durations, qubit, error, limit) for qubit in qubits)
        for limit in THRESHOLDS
    )
