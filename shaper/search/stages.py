"""The legs of a search: which starts, on which grid, for which powers, by which method."""

from __future__ import annotations

from dataclasses import dataclass, replace

from shaper.job import Job
from shaper.search import gauss_newton, quasi_newton
from shaper.search.objective import Problem


@dataclass(frozen=True)
class Stage:
    """A leg of the search.

    Attributes:
        name: for the progress line.
        points: fewest of the Gauss-Lobatto grid along amplitude and detuning.
        per_radian: points per rad of an error's reach, where that is more.
        kept: number of starts that take part, the best ones; all if None.
        powers: of the mean, one after the other.
        steps: for each power; the job's iterations if None.
    """

    name: str
    points: tuple[int, int]
    per_radian: float
    kept: int | None
    powers: tuple[float, ...]
    steps: int | None


EXPLORE = Stage("exploring", (3, 5), 0.7, None, (1.0,), None)
REFINE = Stage("refining", (11, 15), 2.5, 8, (1.0, 4.0, 16.0), 40)
FINISH = Stage("finishing", (11, 15), 2.5, 3, (64.0, 256.0), 40)  # the grid again: one program
# on a ladder: one grid for all, since its one program takes seconds to compile
ON_A_LADDER = tuple(
    replace(stage, points=(7, 9), per_radian=1.8, kept=kept)
    for stage, kept in ((EXPLORE, None), (REFINE, 4), (FINISH, 2))
)
LARGEST_JACOBIAN = 3e7  # doubles, all starts together; beyond it quasi-Newton steps are taken


def method_for(problem: Problem, starts: int):
    """The room with the steps that suit the size: Gauss-Newton unless its jacobians grow too big.

    Measured on robust z rotations: a Gauss-Newton step leads as far as some hundred quasi-Newton
    steps and costs as much as ten, as long as there are a few hundred error components.
    """
    size = problem.equations * 2 * problem.slices * starts
    return gauss_newton if size <= LARGEST_JACOBIAN else quasi_newton


def worst_counts(job: Job) -> bool:
    """Whether a pulse is judged by its worst point over the box, and not by the mean."""
    return job.minimize != "mean" or job.stop_infidelity is not None


def stages(job: Job) -> tuple[Stage, ...]:
    """The legs of this job's search."""
    two_levels = job.anharmonicity is None
    explore, refine, finish = (EXPLORE, REFINE, FINISH) if two_levels else ON_A_LADDER
    if not job.has_tolerance or job.minimize == "first_order":
        return (explore,)
    if job.minimize == "mean":
        return (explore, replace(refine, powers=(1.0,)))
    return (explore, refine, finish)
