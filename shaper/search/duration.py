"""The duration on the sample grid: the shortest that reaches a goal, or the best with decay.

Reachability need not be monotonic for a search that may miss, but nearly is. So durations grow from
the physical limit until one succeeds, and the gap between the longest failure and the shortest
success is halved until it is one slice. Every search starts from its neighbors' waveforms too,
stretched: what a longer pulse has learned, a shorter one need not learn again.

All durations share one compiled program: slices beyond the end have no duration. (Behind a
line, whose answer outlasts the waveform, they cannot be absent: every duration is compiled anew.)
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
from shaper.physics.decay import coherence_limit
from shaper.search.descent import Found, Progress, search

GROWTH = 1.3  # of the duration, until one succeeds
_PATIENCE = 3  # durations in a row that improve nothing, and longer ones are not tried
_ROUND = 32  # slices; array lengths are multiples of it
_SLACK = 0.9  # of the box's best known limit, which is not proven to be one


@dataclass(frozen=True)
class Tried:
    """What was found on the way to the duration.

    Attributes:
        job: the job with the duration found (or, if interrupted, the best one tried).
        found: its search.
        slices: [tried] of every duration tried, rising.
        infidelity: [tried] the best reached at each.
    """

    job: Job
    found: Found
    slices: np.ndarray
    infidelity: np.ndarray


class _Attempts:
    """Searches at several durations, each starting from its neighbors' waveforms too."""

    def __init__(self, job: Job, progress: Progress | None, stop: Callable[[], bool] | None):
        self.job, self.progress = job, progress
        self.stop = stop or (lambda: False)
        self.tried: dict[int, Found] = {}

    def at(self, slices: int, starts: int, give_up: bool) -> Found:
        """The best found so far at this duration, after one more search."""
        job, tried = self.job, self.tried
        this = replace(job, slices=slices, starts=starts)
        near = sorted(tried, key=lambda n: abs(n - slices))[:2]
        warm = [tried[n].drive / job.rabi_max for n in near]
        length = -(-slices // _ROUND) * _ROUND if job.line.kind == "none" else slices

        def named(stage: str, *rest) -> None:
            if self.progress is not None:
                self.progress(f"{slices} slices, {stage}", *rest)

        found = search(this, named, self.stop, warm=warm, slices=length, give_up=give_up)
        if slices not in tried or found.infidelity < tried[slices].infidelity:
            tried[slices] = found
        return tried[slices]

    def result(self, best: int) -> Tried:
        """All that was tried, and the duration chosen."""
        order = sorted(self.tried)
        return Tried(
            replace(self.job, slices=best),
            self.tried[best],
            np.array(order),
            np.array([self.tried[n].infidelity for n in order]),
        )


def _too_short(job: Job) -> int:
    """The most slices that are certainly (circle) or by all that is known (box) too few."""
    unit = job.slice_duration * job.rabi_max
    bound = limit(job.target, job.bound) * (1.0 if job.bound == "circle" else _SLACK)
    return max(0, math.ceil(bound / unit * (1 - 1e-9)) - 1)


def search_best(
    job: Job,
    progress: Progress | None = None,
    stop: Callable[[], bool] | None = None,
) -> Tried:
    """The duration at which worst case and decay together are least.

    A longer pulse can be more robust and decays more. To first order decay depends on the duration
    alone, ``t/(3 T1) + t/(3 Tphi)`` for every pulse, so it decides the duration and leaves the
    shape to the search. Durations grow until decay alone costs more than the best sum, or the sum
    has not fallen for some steps; then the neighborhood of the best is halved.

    Args:
        job: what to make, with T1 or T2; its own duration is not looked at.
        progress, stop: as for ``search_shortest``.
    """
    attempts = _Attempts(job, progress, stop)
    totals: dict[int, float] = {}

    def total(slices: int) -> float:
        if slices not in totals:
            found = attempts.at(slices, job.starts, give_up=False)
            decay = coherence_limit(slices * job.slice_duration, job.t1, job.t2)
            totals[slices] = found.infidelity + decay
        return totals[slices]

    def best() -> int:
        return min(totals, key=totals.get)

    guess, idle = max(_too_short(job) + 1, 2), 0
    while idle < _PATIENCE and guess <= MAX_SLICES and (not totals or not attempts.stop()):
        if totals and coherence_limit(guess * job.slice_duration, job.t1, job.t2) > min(
            totals.values()
        ):
            break
        before = min(totals.values(), default=math.inf)
        idle = 0 if total(guess) < before else idle + 1
        guess = max(guess + 1, math.ceil(guess * GROWTH))
    gap = best() // 8
    while gap >= max(1, best() // 32) and not attempts.stop():
        for near in (best() - gap, best() + gap):
            if near >= 2 and not attempts.stop():
                total(near)
        gap //= 2
    return attempts.result(best())


def search_shortest(
    job: Job,
    progress: Progress | None = None,
    stop: Callable[[], bool] | None = None,
) -> Tried:
    """The shortest waveform that reaches the job's ``stop_infidelity``.

    Args:
        job: what to make; its own duration is not looked at.
        progress, stop: as for ``search``; the stage's name then says the number of slices.
    Raises:
        ShaperError: if no duration up to the largest number of slices reaches the goal.
    """
    attempts = _Attempts(job, progress, stop)
    tried, stop = attempts.tried, attempts.stop
    fails = _too_short(job)

    def reaches(slices: int, starts: int = job.starts) -> bool:
        return attempts.at(slices, starts, give_up=True).infidelity <= job.stop_infidelity

    works, guess = None, max(fails + 1, 2)
    while works is None and (not tried or not stop()):  # one is tried in any case
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
        if works - fails == 1 and fails in tried and not stop():
            if reaches(fails, 2 * job.starts):  # once more, twice as wide
                works, fails = fails, max((n for n in tried if n < fails), default=fails - 1)
    return attempts.result(works if works is not None else max(tried))
