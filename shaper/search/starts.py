"""Where the search begins: the textbook pulses, stretched to the duration, and smooth chance.

Random starts run at nearly full amplitude with a phase that wanders smoothly: white noise of the
same strength would average to almost no drive at all.
"""

from __future__ import annotations

from collections.abc import Collection

import numpy as np

from shaper.composite.box import shortest_box
from shaper.composite.geodesic import geodesic_drive, time_optimal
from shaper.composite.sandwich import sandwich
from shaper.composite.sequence import Sequence, arc_rates
from shaper.drive.bound import parameters
from shaper.job import Job

_RANDOM_RADIUS = 1.2  # rad; sin(1.2) = 0.93 of the bound
_DRAW_IN = 0.98  # known pulses start a little inside the bound, where the map has a slope
_WANDER = 2.0  # rad, size of the phase's Fourier terms
_CHIRP = 3.0  # rad, size of its even drift


def starting_parameters(
    job: Job, warm: Collection[np.ndarray] = ()
) -> tuple[np.ndarray, list[str]]:
    """Parameters of every start, and the names of their origins.

    The sandwich and the time-optimal pulse come first, then drives that are known already, then
    smooth random ones from ``job.seed``, as many as make ``job.starts``; random start k is the same
    whatever else there is.

    Args:
        warm: drives [slice, 2] in W_max, stretched to the job's number of slices.
    Returns:
        [start, slice, 2] rad, and one name per start.
    """
    known = [("sandwich", _stretched(sandwich(job.target, job.bound), job))]
    if job.bound == "circle":
        known.append(("geodesic", _geodesic(job)))
    else:
        known.append(("box_optimal", _stretched(shortest_box(job.target), job)))
    known += [(f"warm_{k}", _resampled(drive, job)) for k, drive in enumerate(warm)]
    known = known[: max(job.starts, len(warm) + 1)]
    chance = [
        (f"random_{k}", _smooth_random(np.random.default_rng([job.seed, k]), job))
        for k in range(job.starts - len(known))
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
