"""Where the search begins: the textbook pulses, stretched to the duration, and smooth chance.

Random starts run at nearly full amplitude with a phase that wanders smoothly: white noise of the
same strength would average to almost no drive at all. On an anharmonic ladder they rise from zero
and fall back to it, and derivative-corrected Gaussians lead: sharp edges leak.
"""

from __future__ import annotations

import math
from collections.abc import Collection

import numpy as np

from shaper.composite.box import shortest_box
from shaper.composite.geodesic import geodesic_drive, time_optimal
from shaper.composite.sandwich import sandwich
from shaper.composite.sequence import Sequence, arc_rates
from shaper.drive.bound import parameters
from shaper.job import Job
from shaper.physics.ladder import Ladder, derivative_corrected
from shaper.rotation import euler_yxy

_RANDOM_RADIUS = 1.2  # rad; sin(1.2) = 0.93 of the bound
_DRAW_IN = 0.98  # known pulses start a little inside the bound, where the map has a slope
_WANDER = 2.0  # rad, size of the phase's Fourier terms
_CHIRP = 3.0  # rad, size of its even drift
_ON_EQUATOR = 1e-12
_MODES = 5  # sine harmonics of a start on a ladder
_MODES_REACH = 0.8  # of the bound, its largest amplitude
MOST_ON_A_LADDER = 16  # starts; more are not worth their time: nearly every one arrives


def starting_parameters(
    job: Job, warm: Collection[np.ndarray] = ()
) -> tuple[np.ndarray, list[str]]:
    """Parameters of every start, and the names of their origins.

    The sandwich and the time-optimal pulse come first, then drives that are known already, then
    smooth random ones from ``job.seed``, as many as make ``job.starts``; random start k is the same
    whatever else there is. On a ladder derivative-corrected Gaussians lead, and there are
    ``MOST_ON_A_LADDER`` starts at most.

    Args:
        warm: drives [slice, 2] in W_max, stretched to the job's number of slices.
    Returns:
        [start, slice, 2] rad, and one name per start.
    """
    count, random = job.starts, _smooth_random
    known = [("sandwich", _stretched(sandwich(job.target, job.bound), job))]
    if job.anharmonicity is not None:
        count, random = min(job.starts, MOST_ON_A_LADDER), _smooth_from_rest
        known.insert(0, ("derivative_corrected", _gaussians(job)))
    if job.bound == "circle":
        known.append(("geodesic", _geodesic(job)))
    else:
        known.append(("box_optimal", _stretched(shortest_box(job.target), job)))
    known += [(f"warm_{k}", _resampled(drive, job)) for k, drive in enumerate(warm)]
    known = known[: max(count, len(warm) + 1)]
    chance = [
        (f"random_{k}", random(np.random.default_rng([job.seed, k]), job))
        for k in range(count - len(known))
    ]
    names, values = zip(*known, *chance, strict=True)
    return np.stack(values), list(names)


def _resampled(drive: np.ndarray, job: Job) -> np.ndarray:
    """A drive stretched to the job's slices, as slice means."""
    edges = np.linspace(0, 1, len(drive) + 1)
    area = np.concatenate([np.zeros((1, 2)), np.cumsum(drive, axis=0)]) / len(drive)
    at = np.linspace(0, 1, job.slices + 1)
    mean = np.diff([np.interp(at, edges, area[:, c]) for c in (0, 1)], axis=1).T * job.slices
    return parameters(mean * _DRAW_IN, job.bound)


def _stretched(sequence: Sequence, job: Job) -> np.ndarray:
    """A sequence slowed down (or, if it must be, cut short) to the duration, slice by slice."""
    angles = np.asarray(sequence.angles, dtype=float)
    if not len(angles):
        return np.zeros((job.slices, 2))
    rates = arc_rates(sequence, job.bound)
    spans = angles / rates
    edges = np.concatenate([[0.0], np.cumsum(spans)]) / np.sum(spans)
    slow = min(1.0, float(np.sum(spans)) / (job.duration * job.rabi_max))
    phases = np.asarray(sequence.phases)
    drive = slow * rates[:, None] * np.stack([np.cos(phases), np.sin(phases)], axis=-1)
    turned = np.concatenate([np.zeros((1, 2)), np.cumsum(np.diff(edges)[:, None] * drive, axis=0)])
    at = np.linspace(0, 1, job.slices + 1)
    mean = np.diff([np.interp(at, edges, turned[:, c]) for c in (0, 1)], axis=1).T * job.slices
    return parameters(mean * _DRAW_IN, job.bound)


def _geodesic(job: Job) -> np.ndarray:
    """The time-optimal drive, slowed down to the duration."""
    best = time_optimal(job.target)
    slow = min(1.0, best.length / (job.duration * job.rabi_max))
    return parameters(slow * geodesic_drive(best, job.slices), job.bound)


def _smooth_random(rng: np.random.Generator, job: Job) -> np.ndarray:
    """Nearly full amplitude, a phase of a few random Fourier terms and a drift."""
    t = (np.arange(job.slices) + 0.5) / job.slices
    terms = max(2, int(job.duration * job.rabi_max / np.pi)) + 2
    phase = rng.uniform(0, 2 * np.pi) + _CHIRP * rng.normal() * t
    for k in range(1, terms):
        size, offset = _WANDER * rng.normal() / np.sqrt(1 + k), rng.uniform(0, 2 * np.pi)
        phase = phase + size * np.cos(np.pi * k * t + offset)
    return _RANDOM_RADIUS * np.stack([np.cos(phase), np.sin(phase)], axis=-1)


def _smooth_from_rest(rng: np.random.Generator, job: Job) -> np.ndarray:
    """A few sine harmonics of random size in each quadrature, zero at both ends."""
    t = (np.arange(job.slices) + 0.5) / job.slices
    modes = np.sin(np.pi * np.outer(np.arange(1, _MODES + 1), t))
    size = rng.normal(size=(2, _MODES)) / np.arange(1, _MODES + 1)
    drive = (size @ modes).T
    return parameters(_MODES_REACH * drive / np.max(np.linalg.norm(drive, axis=1)), job.bound)


def _gaussians(job: Job) -> np.ndarray:
    """One derivative-corrected Gaussian where the axis lies on the equator, else y, x, y."""
    w, x, y, z = job.target.quaternion
    thirds = [part * job.slices // 3 for part in range(4)]
    if abs(z) < _ON_EQUATOR:
        parts = [(2 * math.atan2(math.hypot(x, y), w), math.atan2(y, x), job.slices)]
    else:
        angles = [math.remainder(a, 2 * math.pi) for a in euler_yxy(job.target.quaternion)]
        lengths = np.diff(thirds).tolist()
        parts = list(zip(angles, (math.pi / 2, 0.0, math.pi / 2), lengths, strict=True))
    ladder = Ladder(job.anharmonicity, job.levels)
    drive = [
        derivative_corrected(angle, phase, n * job.slice_duration, n, ladder)
        for angle, phase, n in parts
        if n > 0
    ]
    drive = np.concatenate(drive) / job.rabi_max
    most = max(np.max(np.linalg.norm(drive, axis=1)), _DRAW_IN)
    return parameters(drive * _DRAW_IN / most, job.bound)  # its shape kept
