"""Smooth pulses, bell-shaped instead of rectangular, with first-order derivative correction.

For a weakly anharmonic qubit: a smooth envelope ``E`` has little energy at the second transition,
and the other quadrature, ``-share * dE/dt / anharmonicity``, takes out most of the rest. The whole
derivative makes the leakage least; half of it leaves a quarter of the leakage but cancels most of
the phase error that the level shift causes when the carrier stays on resonance.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from shaper.composite.sequence import Sequence, require_playable
from shaper.job import Job
from shaper.pulse import Pulse, make_pulse

_MOTZOI = "Motzoi, Gambetta, Rebentrost and Wilhelm, Phys. Rev. Lett. 103, 110501 (2009)"
_LUCERO = "Lucero et al., Phys. Rev. A 82, 042339 (2010)"
_MOST_STEPS = 2000  # of one rotation; with more samples than that, each step is several


def _cosine(t: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    return 1 - np.cos(2 * np.pi * t), 2 * np.pi * np.sin(2 * np.pi * t)


def _gaussian(t: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Standard deviation a quarter of the length, lifted so that it starts and ends at zero."""
    bell = np.exp(-8 * (t - 0.5) ** 2)
    return bell - math.exp(-2), -16 * (t - 0.5) * bell


@dataclass(frozen=True)
class Smooth:
    """One entry: envelope, and how much of the derivative goes into the other quadrature.

    Attributes:
        name: fit for a file.
        envelope: from time in units of the length, (0, 1), to value and slope.
        share: of the derivative correction; 0 is none.
        source: citation.
    """

    name: str
    envelope: Callable[[np.ndarray], tuple[np.ndarray, np.ndarray]]
    share: float
    source: str


SMOOTH = {
    entry.name: entry
    for shape, envelope in (("gaussian", _gaussian), ("cosine", _cosine))
    for entry in (
        Smooth(shape, envelope, 0.0, ""),
        Smooth(f"{shape}-derivative", envelope, 1.0, _MOTZOI),
        Smooth(f"{shape}-half-derivative", envelope, 0.5, f"{_MOTZOI}; half: {_LUCERO}"),
    )
}


def smooth_rotation(
    entry: Smooth,
    angle: float,
    phase: float,
    samples: int,
    sample_rate: float,
    anharmonicity: float | None = None,
) -> np.ndarray:
    """One rotation as a smooth pulse of so many samples.

    Args:
        angle: rad; the in-phase samples sum to it exactly.
        phase: rad. Axis of the rotation in the xy plane.
        anharmonicity: rad/s, second transition minus first; needed if the entry has a share.
    Returns:
        [sample, 2] rad/s, the envelope taken at the middle of each sample.
    Source:
        First-order set for the derivative quadrature: Motzoi et al., equation 8, with the sign of
        this project's Hamiltonian.
    """
    value, slope = entry.envelope((np.arange(samples) + 0.5) / samples)
    scale = angle * sample_rate / np.sum(value)
    in_phase = scale * value
    across = np.zeros(samples)
    if entry.share:
        across = -entry.share * scale * slope * (sample_rate / samples) / anharmonicity
    c, s = math.cos(phase), math.sin(phase)
    return np.stack([c * in_phase - s * across, s * in_phase + c * across], axis=-1)


def smooth_pulses(way: Sequence, job: Job) -> dict[str, Pulse]:
    """Every smooth entry of the library for a way to the job's target, by name.

    Each rotation of the way becomes the shortest smooth pulse that stays within the bound. The
    derivative corrections need the job's anharmonicity; without it they are left out.
    """
    found = {}
    for entry in SMOOTH.values():
        if (entry.share and job.anharmonicity is None) or len(way.angles) == 0:
            continue
        parts = [_shortest(entry, a, p, job) for a, p in zip(way.angles, way.phases, strict=True)]
        samples = np.concatenate([np.full(len(drive), held) for drive, held in parts])
        require_playable(entry.name, int(np.sum(samples)))
        found[entry.name] = make_pulse(
            np.concatenate([drive for drive, _ in parts]),
            samples,
            full_scale=job.rabi_max,
            bits=job.dac_bits,
            bound=job.bound,
            sample_rate=job.sample_rate,
            origin="composite",
            source="; ".join(s for s in (entry.source, way.source) if s),
        )
    return found


def _shortest(entry: Smooth, angle: float, phase: float, job: Job) -> tuple[np.ndarray, int]:
    """[step, 2] rad/s and samples a step: doubled until it fits under the bound, then bisected."""
    # no smooth pulse is shorter than the rectangular one
    held = math.ceil(angle / job.rabi_max * job.sample_rate / _MOST_STEPS)
    rate = job.sample_rate / held

    def made(steps: int) -> np.ndarray:
        return smooth_rotation(entry, angle, phase, steps, rate, job.anharmonicity)

    def fits(steps: int) -> bool:
        drive = made(steps)
        reach = np.hypot(*drive.T) if job.bound == "circle" else np.abs(drive)
        return bool(np.max(reach) <= job.rabi_max)

    long = 2
    while not fits(long):
        long *= 2
    short = long // 2  # too short, or a single step, which has no shape
    while long - short > 1:
        middle = (long + short) // 2
        long, short = (middle, short) if fits(middle) else (long, middle)
    return made(long), held
