"""A train of resonant rotations about axes in the xy plane, and its place on the sample grid.

What every composite pulse is on paper: angles and phases in time order. Played at the bound it
has a length; on a real sample clock it becomes a pulse.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from shaper.errors import InputError
from shaper.job import Job
from shaper.pulse import Pulse
from shaper.rotation import about_equator, in_time_order
from shaper.wiring import play, share_that_fits

_SAME_PHASE = 1e-12  # rad; neighboring arcs this close in phase are one arc
_NO_ANGLE = 1e-13  # rad; an arc this short is none: it would cost a whole sample for nothing
MAX_SAMPLES = 2**22  # of one pulse: beyond, no AWG plays it from memory
_SAMPLE_HAIR = 1e-9  # relative; a length this close above a whole number of samples is that number


@dataclass(frozen=True)
class Sequence:
    """Rotations one after another, each at full amplitude.

    Attributes:
        angles: [arc] rad, >= 0.
        phases: [arc] rad. Arc k turns about ``cos(phase) x + sin(phase) y``.
        source: citation, or "" for our own.
        name: for tables.
        uniform: play all arcs at one Rabi rate, the largest that all of them can have.
            Compensation of detuning rests on it; under the circle it makes no difference.
    """

    angles: np.ndarray
    phases: np.ndarray
    source: str = ""
    name: str = ""
    uniform: bool = False

    def __post_init__(self):
        angles = np.atleast_1d(np.asarray(self.angles, dtype=float))
        phases = np.atleast_1d(np.asarray(self.phases, dtype=float))
        if angles.shape != phases.shape or angles.ndim != 1:
            raise ValueError(f"arcs: expected as many phases as angles, got {angles}, {phases}")
        if not np.all(angles >= 0) or not np.all(np.isfinite([angles, phases])):
            raise ValueError(f"arcs: expected finite angles of at least 0, got {angles}, {phases}")
        object.__setattr__(self, "angles", angles)
        object.__setattr__(self, "phases", phases)

    @property
    def quaternion(self) -> np.ndarray:
        """[4]: what the sequence does without errors."""
        return in_time_order(
            *(about_equator(a, p) for a, p in zip(self.angles, self.phases, strict=True))
        )


def from_turns(turns: Iterable[tuple[float, float]], source: str = "", name: str = "") -> Sequence:
    """A sequence from signed rotations.

    A negative angle is a turn about the opposite axis; arcs without angle go, neighbors about one
    axis become one.

    Args:
        turns: (angle, phase) in time order, rad; the angle of any sign.
    """
    merged: list[list[float]] = []
    for angle, phase in turns:
        if merged:
            apart = math.remainder(phase - merged[-1][1], 2 * math.pi)
            if abs(apart) < _SAME_PHASE:
                merged[-1][0] += angle
                continue
            if abs(abs(apart) - math.pi) < _SAME_PHASE:
                merged[-1][0] -= angle
                continue
        if abs(angle) > _NO_ANGLE:
            merged.append([angle, phase])
        if merged and abs(merged[-1][0]) <= _NO_ANGLE:
            merged.pop()
    arcs = [(abs(a), p if a > 0 else p + math.pi) for a, p in merged if abs(a) > _NO_ANGLE]
    angles = np.array([a for a, _ in arcs])
    phases = np.array([math.remainder(p, 2 * math.pi) for _, p in arcs])
    return Sequence(angles, phases, source, name)


def concatenate(sequences: Iterable[Sequence], source: str = "", name: str = "") -> Sequence:
    """Sequences one after another, the first one first."""
    parts = list(sequences)
    return Sequence(
        np.concatenate([np.zeros(0)] + [p.angles for p in parts]),
        np.concatenate([np.zeros(0)] + [p.phases for p in parts]),
        source,
        name,
    )


def full_rate(phases: np.ndarray, bound: str) -> np.ndarray:
    """[arc] unitless: the largest Rabi rate along each phase, in units of W_max.

    One on the circle; ``1 / max(|cos|, |sin|)`` in the box, sqrt(2) along its diagonals.
    """
    phases = np.asarray(phases, dtype=float)
    if bound == "circle":
        return np.ones_like(phases)
    return 1 / np.maximum(np.abs(np.cos(phases)), np.abs(np.sin(phases)))


def arc_rates(sequence: Sequence, bound: str) -> np.ndarray:
    """[arc] unitless: the Rabi rate of each arc at the bound, in units of W_max."""
    rates = full_rate(sequence.phases, bound)
    return np.full_like(rates, np.min(rates, initial=np.inf)) if sequence.uniform else rates


def length(sequence: Sequence, bound: str) -> float:
    """Duration of the sequence at the bound, in units of 1/W_max."""
    return float(np.sum(sequence.angles / arc_rates(sequence, bound)))


def played_ideally(sequence: Sequence, job: Job) -> tuple[np.ndarray, np.ndarray]:
    """The sequence at the job's bound on a clock without grain.

    Returns:
        drive [arc, 2] rad/s and duration [arc] s; one arc of no length if there is none.
    """
    if len(sequence.angles) == 0:
        return np.zeros((1, 2)), np.zeros(1)
    rates = job.rabi_max * arc_rates(sequence, job.bound)
    direction = np.stack([np.cos(sequence.phases), np.sin(sequence.phases)], axis=-1)
    return rates[:, None] * direction, sequence.angles / rates


def place(sequence: Sequence, job: Job) -> Pulse:
    """The sequence on the job's sample grid, as it would really be loaded.

    Each arc is rounded up to whole samples and its amplitude lowered so that its angle stays
    exact; a uniform sequence stays uniform only as far as the samples allow. An arc longer than a
    whole number of samples by round-off only stays at that number and at the bound. A sequence
    without arcs is one sample of zero drive. Where the bench corrects mixer or line, the amplitude
    is lowered until the corrections fit under the bound.

    Raises:
        InputError: if the pulse would be longer than ``MAX_SAMPLES``.
    """
    keep = sequence.angles > _NO_ANGLE
    angles, phases = sequence.angles[keep], sequence.phases[keep]
    if len(angles) == 0:
        return play(job, np.zeros((1, 2)), np.ones(1, dtype=int), "composite", sequence.source)
    direction = np.stack([np.cos(phases), np.sin(phases)], axis=-1)  # [arc, 2]
    ceiling = job.rabi_max * arc_rates(sequence, job.bound)[keep]  # [arc] rad/s

    def on_grid(share: float) -> tuple[np.ndarray, np.ndarray]:
        exact = angles / (share * ceiling) * job.sample_rate
        samples = np.maximum(np.ceil(exact * (1 - _SAMPLE_HAIR)), 1).astype(int)
        require_playable(sequence.name, int(np.sum(samples)))
        rate = np.minimum(angles * job.sample_rate / samples, ceiling)
        return rate[:, None] * direction, samples

    share = share_that_fits(job, *on_grid(1.0))
    return play(job, *on_grid(share), "composite", sequence.source)


def require_playable(name: str, samples: int) -> None:
    """Refuse a pulse that no AWG holds, before its samples are made."""
    if samples > MAX_SAMPLES:
        raise InputError(
            f"drive.sample_rate_MSps: expected a rate at which {name or 'the pulse'} has at most "
            f"{MAX_SAMPLES} samples, got {samples} samples; lower the rate"
        )
