"""The search: many starts side by side, first for the mean over the box, then for its worst point.

The mean is smooth and leads far down; the worst case is what counts. So all starts go down the
mean on the coarsest grid that still leads somewhere, the best go on on a finer one, and the best of
these climb the ladder of powers, whose mean closes in on the maximum, on grids fine enough that
nothing hides between their points. What is left is measured on the grid on which pulses are
scored.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from shaper.bench import error_grid, score_grid
from shaper.drive.bound import quadratures
from shaper.job import Job
from shaper.search import gauss_newton, quasi_newton
from shaper.search.compiler import prepare
from shaper.search.objective import Problem, all_infidelities, make_problem
from shaper.search.starts import starting_parameters

STATUSES = {
    "converged": "reached stop_infidelity",
    "stalled": "no step improves it any more: give it a longer duration or more starts",
    "step_limit": "still improving at the last step: raise iterations",
    "interrupted": "stopped by hand: what was best is kept",
    "nonfinite": "the infidelity is not a number: check the job's sizes",
}
CHUNK = 10  # steps between two looks at progress, interruption and convergence
STALL_CHUNKS = 3  # chunks of a relative gain below STALL_GAIN, and a start counts as stalled
STALL_GAIN = 1e-3


@dataclass(frozen=True)
class Stage:
    """A leg of the search.

    Attributes:
        name: for the progress line.
        points: of the Gauss-Lobatto grid along amplitude and detuning.
        kept: number of starts that take part, the best ones; all if None.
        powers: of the mean, one after the other.
        steps: for each power; the job's iterations if None.
    """

    name: str
    points: tuple[int, int]
    kept: int | None
    powers: tuple[float, ...]
    steps: int | None


EXPLORE = Stage("exploring", (3, 5), None, (1.0,), None)
REFINE = Stage("refining", (7, 11), 6, (1.0, 4.0, 16.0), 40)
FINISH = Stage("finishing", (11, 15), 2, (64.0, 256.0), 40)
LARGEST_JACOBIAN = 3e7  # doubles, all starts together; beyond it quasi-Newton steps are taken
MEASURED = 8  # starts that are measured on the score's grid at the end

Progress = Callable[[str, int, int, float], None]  # stage, step, of how many, best infidelity


@dataclass(frozen=True)
class Leg:
    """What one stage did.

    Attributes:
        starts: [kept] indices of the starts that took part.
        infidelity: [kept, step] the power mean over the stage's grid after each step.
    """

    starts: np.ndarray
    infidelity: np.ndarray


@dataclass(frozen=True)
class Found:
    """What the search brought home.

    Attributes:
        drive: [slice, 2] rad/s, within the bound.
        infidelity: of it, on the score's grid: worst, or mean if that was minimized.
        status: of the best start; a key of ``STATUSES``.
        names: of the starts' origins.
        statuses: of every start.
        best: index of the start that won.
        history: stage name to what it did.
    """

    drive: np.ndarray
    infidelity: float
    status: str
    names: list[str]
    statuses: list[str]
    best: int
    history: dict[str, Leg]


def method_for(problem: Problem, starts: int):
    """The room with the steps that suit the size: Gauss-Newton unless its jacobians grow too big.

    Measured on robust z rotations: a Gauss-Newton step leads as far as some hundred quasi-Newton
    steps and costs as much as ten, as long as there are a few hundred error components.
    """
    size = problem.residuals * 2 * problem.slices * starts
    return gauss_newton if size <= LARGEST_JACOBIAN else quasi_newton


def stages(job: Job) -> tuple[Stage, ...]:
    """The legs of this job's search."""
    if not job.has_tolerance:
        return (EXPLORE,)
    if job.minimize == "mean":
        return (EXPLORE, replace(REFINE, powers=(1.0,)))
    return (EXPLORE, REFINE, FINISH)


def search(
    job: Job,
    progress: Progress | None = None,
    stop: Callable[[], bool] | None = None,
) -> Found:
    """The best waveform found for the job.

    Args:
        job: what to make.
        progress: called between chunks of steps.
        stop: asked between chunks; True ends the search with what is best so far.
    Returns:
        the winner and what became of every start. The same job gives the same result, bit for
        bit, on the same machine and library versions.
    """
    prepare()
    parameters, names = starting_parameters(job)
    run = _Run(job, parameters, progress or (lambda *_: None), stop or (lambda: False))
    chosen = np.arange(len(names))
    for stage in stages(job):
        chosen = chosen[: stage.kept]
        chosen = run.leg(stage, chosen)
        if run.interrupted or run.reached:
            break
    return run.found(names)


class _Run:
    """One search under way: where the starts stand, what was best, and why it should end."""

    def __init__(self, job: Job, parameters: np.ndarray, progress: Progress, stop):
        self.job, self.progress, self.stop = job, progress, stop
        self.parameters = parameters
        self.status = np.full(len(parameters), "step_limit", dtype=object)
        self.interrupted = self.reached = False
        self.history: dict[str, Leg] = {}
        self.best = (np.inf, 0, parameters[0])  # score, start, parameters
        self._score_problem = make_problem(job, score_grid(job))

    def leg(self, stage: Stage, chosen: np.ndarray) -> np.ndarray:
        """One stage for the chosen starts; returns them, the best first."""
        problem = make_problem(self.job, error_grid(self.job, *stage.points))
        method = method_for(problem, len(chosen))
        steps = stage.steps or self.job.iterations
        costs, done = [], 0
        for power in stage.powers:
            state = method.begin(problem, self.parameters[chosen], power)
            if not costs:
                costs.append(np.asarray(state.cost)[None])
                self._look(stage, 0, steps * len(stage.powers), chosen, state)
            idle, end = np.zeros(len(chosen), dtype=int), done + steps
            while done < end and not (self.interrupted or self.reached):
                state, cost = method.advance(problem, state, power, min(CHUNK, steps))
                gain = np.asarray(state.cost) - costs[-1][-1]
                costs.append(np.asarray(cost))
                idle = np.where(-gain < STALL_GAIN, idle + 1, 0)
                done += len(cost)
                self._look(stage, done, steps * len(stage.powers), chosen, state)
                if np.all(idle >= STALL_CHUNKS):
                    break
            self.parameters[chosen] = np.asarray(state.parameters)
            stalled, lost = idle >= STALL_CHUNKS, ~np.isfinite(np.asarray(state.cost))
            self.status[chosen] = np.where(stalled, "stalled", "step_limit")
            self.status[chosen[lost]] = "nonfinite"
            order = np.argsort(self._remember(chosen, power))  # nan last
        self.history[stage.name] = Leg(chosen, np.exp(np.concatenate(costs)).T)
        return chosen[order]

    def _look(self, stage: Stage, done: int, total: int, chosen: np.ndarray, state) -> None:
        """Progress, interruption, and whether the goal is reached on the score's grid too."""
        found = np.asarray(state.worst if self._worst_counts else np.exp(state.cost))
        leader = int(np.nanargmin(found)) if np.any(np.isfinite(found)) else 0
        self.progress(stage.name, done, total, float(found[leader]))
        self.interrupted = self.interrupted or self.stop()
        goal = self.job.stop_infidelity
        if goal is not None and found[leader] <= goal:
            self.parameters[chosen] = np.asarray(state.parameters)
            self._remember(chosen[leader : leader + 1], power=1.0)
            self.reached = self.best[0] <= goal

    @property
    def _worst_counts(self) -> bool:
        return self.job.minimize == "worst" or self.job.stop_infidelity is not None

    def _remember(self, starts: np.ndarray, power: float) -> np.ndarray:
        """Score these starts as they stand, and keep the best ever seen.

        Returns:
            [start] what to rank them by: the mean over the score's grid while the mean is being
            lowered, which tells better how far a start will come, else the score itself.
        """
        padded = np.resize(starts, -(-len(starts) // MEASURED) * MEASURED)
        found = np.concatenate(
            [  # batches of one size: one compiled program
                np.asarray(all_infidelities(self._score_problem, self.parameters[batch]))
                for batch in padded.reshape(-1, MEASURED)
            ]
        )[: len(starts)]
        mean = found @ np.asarray(self._score_problem.weight)
        score = found.max(axis=1) if self._worst_counts else mean
        leader = int(np.argmin(np.where(np.isfinite(score), score, np.inf)))
        if score[leader] < self.best[0]:
            start = int(starts[leader])
            self.best = (float(score[leader]), start, self.parameters[start].copy())
        return mean if power == 1 else score

    def found(self, names: list[str]) -> Found:
        """The best ever seen, and what became of every start."""
        score, start, parameters = self.best
        goal = self.job.stop_infidelity
        if goal is not None and score <= goal:
            self.status[start] = "converged"
        elif self.interrupted:
            self.status[start] = "interrupted"
        drive = np.asarray(quadratures(parameters, self.job.bound)) * self.job.rabi_max
        statuses = [str(s) for s in self.status]
        return Found(drive, score, statuses[start], names, statuses, start, self.history)
