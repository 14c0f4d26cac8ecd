"""One line of the comparison: all that is said of a pulse, computed from its DAC codes."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from shaper.bench import error_grid
from shaper.composite.sequence import Sequence, played_ideally
from shaper.evidence.levels import level_infidelity, on_levels
from shaper.evidence.order import Leading, leading
from shaper.evidence.proof import prove_pulse
from shaper.evidence.score import box_infidelity
from shaper.evidence.window import tolerance_window
from shaper.job import Job
from shaper.physics.decay import coherence_limit
from shaper.pulse import Pulse

_LEVEL_POINTS = 9  # per axis: levels cost a hundred times what the qubit does
THRESHOLDS = (1e-4, 1e-3)  # of the tolerance windows


@dataclass(frozen=True)
class OnLevels:
    """Figures of a three-level ladder, leakage counted.

    Attributes:
        nominal: infidelity without errors.
        worst: largest infidelity on a coarse grid over the tolerance box, corners included.
        leakage: population lost from the qubit, without errors.
    """

    nominal: float
    worst: float
    leakage: float


@dataclass(frozen=True)
class Row:
    """One pulse of the comparison; every figure from its integer codes, unless it says otherwise.

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
        nominal: infidelity without errors.
        mean: infidelity over the tolerance box.
        worst: largest infidelity on the grid over the tolerance box.
        guaranteed: proved upper bound of it over the whole box; None without a tolerance.
        ideal_worst: ``worst`` of the sequence on paper, without sample grid and codes: the rest
            is the price of the grid. None where there is no sequence.
        amplitude_windows: largest +- relative amplitude error below each of ``THRESHOLDS``.
        detuning_windows: rad/s, likewise.
        amplitude_order, detuning_order: leading term of the infidelity, of the sequence on paper
            where there is one, else of the float waveform; detuning in units of W_max.
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
    played = pulse.played
    nominal, mean, worst = box_infidelity(*played, job)
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
        nominal=nominal,
        mean=mean,
        worst=worst,
        guaranteed=prove_pulse(pulse, job).guaranteed if job.has_tolerance else None,
        ideal_worst=None if ideal is None else box_infidelity(*ideal, job)[2],
        amplitude_windows=tuple(
            tolerance_window(*played, job, "amplitude", limit) for limit in THRESHOLDS
        ),
        detuning_windows=tuple(
            tolerance_window(*played, job, "detuning", limit) for limit in THRESHOLDS
        ),
        amplitude_order=leading(*on_paper, job, "amplitude"),
        detuning_order=leading(*on_paper, job, "detuning"),
        levels=None if job.anharmonicity is None else _on_levels(*played, job),
        coherence=coherence_limit(pulse.duration, job.t1, job.t2) if decays else None,
    )


def _on_levels(drive: np.ndarray, durations: np.ndarray, job: Job) -> OnLevels:
    nominal, leakage = on_levels(drive, durations, job)
    grid = error_grid(job, _LEVEL_POINTS, _LEVEL_POINTS)
    over_box = level_infidelity(drive, durations, job, grid.eps, grid.delta)
    return OnLevels(nominal, max(nominal, float(np.max(over_box))), leakage)
