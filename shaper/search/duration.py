"""The shortest duration on the sample grid that reaches the goal over the tolerance box.

Reachability need not be monotonic for a search that may miss, but nearly is. So durations grow from
the physical limit until one succeeds, and the gap between the longest failure and the shortest
success is halved until it is one slice. Every search starts from its neighbors' waveforms too,
stretched: what a longer pulse has learned, a shorter one need not learn again.

All durations share one compiled program: slices beyond the end have no duration.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from shaper.composite.limit import limit
from shaper.errors import ShaperError
from shaper.job import Job
from shaper.job.schema import MAX_SLICES
from shaper.search.descent import Found, Progress, search

GROWTH = 1.3  # of the duration, until one succeeds
_ROUND = 32  # slices; array lengths are multiples of it
_SLACK = 0.9  # of the box's best known limit, which is not proven to be one
_LAST_TRIES = 1  # slices below the shortest success that get a second, wider search


@dataclass(frozen=True)
class Shortest:
    """What was found on the way to the shortest duration.

    Attributes:
        job: the job with the shortest duration that reaches the goal (or, if interrupted or out
            of reach, the last one tried).
        found: its search.
        slices: [tried] of every duration tried, rising.
        infidelity: [tried] the best reached at each.
    """

    job: Job
    found: Found
    slices: np.ndarray
    infidelity: np.ndarray


def search_shortest(
    job: Job,
    progress: Progress | None = None,
    stop: Callable[[], bool] | None = None,
) -> Shortest:
    """The shortest waveform that reaches the job's ``stop_infidelity``.

    Args:
        job: what to make; its own duration is not looked at.
        progress, stop: as for ``search``; the stage's name then says the number of slices.
    Raises:
        ShaperError: if no duration up to the largest number of slices reaches the goal.
    """
    stop = stop or (lambda: False)
    unit = job.slice_duration * job.rabi_max
    bound = limit(job.target, job.bound) * (1.0 if job.bound == "circle" else _SLACK)
    fails = max(0, math.ceil(bound / unit * (1 - 1e-9)) - 1)  # shorter than physics allows
    tried: dict[int, Found] = {}

    def attempt(slices: int, starts: int) -> Found:
        this = replace(job, slices=slices, starts=starts)
        near = sorted(tried, key=lambda n: abs(n - slices))[:2]
        warm = [tried[n].drive / job.rabi_max for n in near]
        length = -(-slices // _ROUND) * _ROUND if job.line.kind == "none" else slices

        def named(stage: str, *rest) -> None:
            if progress is not None:
                progress(f"{slices} slices, {stage}", *rest)

        found = search(this, named, stop, warm=warm, slices=length, give_up=True)
        if slices not in tried or found.infidelity < tried[slices].infidelity:
            tried[slices] = found
        return tried[slices]

    def reaches(slices: int, starts: int = job.starts) -> bool:
        return attempt(slices, starts).infidelity <= job.stop_infidelity

    works, guess = None, max(fails + 1, 2)
    while works is None and not stop():
        if guess > MAX_SLICES:
            raise ShaperError(
                f"shortest: expected stop_infidelity = {job.stop_infidelity:g} within {MAX_SLICES} "
                f"slices, the best was {min(f.infidelity for f in tried.values()):.2e}"
            )
        if reaches(guess):
            works = guess
        else:
            fails, guess = guess, max(guess + 1, math.ceil(guess * GROWTH))
    while works is not None and works - fails > 1 and not stop():
        middle = (works + fails) // 2
        if reaches(middle):
            works = middle
        else:
            fails = middle
        if works - fails == 1 and works > _LAST_TRIES and fails in tried and not stop():
            if reaches(fails, 2 * job.starts):  # once more, twice as wide
                works, fails = fails, max((n for n in tried if n < fails), default=fails - 1)
    best = works if works is not None else max(tried)
    order = sorted(tried)
    return Shortest(
        replace(job, slices=best),
        tried[best],
        np.array(order),
        np.array([tried[n].infidelity for n in order]),
    )
