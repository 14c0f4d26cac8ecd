"""The search: many starts side by side, first for the mean over the box, then for its worst point.

The mean is smooth and leads far down; the worst case is what counts. So all starts go down the
mean on a coarse grid, and the best few then climb the ladder of powers on a finer one, the power
mean closing in on the maximum. At the end all that are left are measured on the score's own grid.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from shaper.bench import error_grid, score_grid
from shaper.job import Job

STATUSES = {
    "converged": "reached stop_infidelity",
    "stalled": "no step improves it any more: give it a longer duration or more starts",
    "step_limit": "still improving at the last step: raise iterations",
    "interrupted": "stopped by hand: what was best is kept",
    "nonfinite": "the infidelity is not a number: check the job's sizes",
}
EXPLORE_POINTS = (5, 7)  # amplitude, detuning: Gauss-Lobatto
POLISH_POINTS = (7, 11)
POWERS = (2.0, 4.0, 8.0, 16.0, 32.0, 64.0)
POLISHED = 8  # starts that are polished
POLISH_STEPS = 40  # for each power
CHUNK = 10  # steps between two looks at progress, interruption and convergence
STALL_CHUNKS = 3  # chunks of a relative gain below STALL_GAIN, and a start counts as stalled
STALL_GAIN = 1e-3

Progress = Callable[[str, int, int, float], None]  # stage, step, of how many, best infidelity


@dataclass(frozen=True)
class Found:
    """What the search brought home.

    Attributes:
        drive: [slice, 2] rad/s, within the bound.
        status: of the best start; a key of ``STATUSES``.
        names: of the starts' origins.
        statuses: of every start.
        infidelity: [start] of every start when it was last looked at, worst over its grid.
        history: [start, step] mean infidelity over the exploring grid after each step.
        best: index of the start that won.
    """

    drive: np.ndarray
    status: str
    names: list[str]
    statuses: list[str]
    infidelity: np.ndarray
    history: np.ndarray
    best: int


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
    from shaper.search.compiler import prepare

    prepare()
    from shaper.search.starts import starting_parameters

    parameters, names = starting_parameters(job)
    run = _Run(job, progress or (lambda *_: None), stop or (lambda: False))
    parameters, worst, history, statuses = run.explore(parameters)
    if job.has_tolerance and job.minimize == "worst" and not run.ended:
        chosen = np.argsort(history[:, -1] if history.size else worst)[:POLISHED]
        polished, polished_worst = run.polish(parameters[chosen])
        parameters[chosen], worst[chosen] = polished, polished_worst
    order = np.argsort(worst)[:POLISHED]
    score = run.measured(parameters[order])
    best = int(order[np.argmin(score)])
    worst[order] = score
    for k in range(len(names)):
        if not np.isfinite(worst[k]):
            statuses[k] = "nonfinite"
        elif job.stop_infidelity is not None and worst[k] <= job.stop_infidelity:
            statuses[k] = "converged"
    status = statuses[best]
    if run.interrupted and status != "converged":
        status = "interrupted"
    return Found(run.drive(parameters[best]), status, names, statuses, worst, history, best)


class _Run:
    """One search under way: the compiled programs, and the reasons to end it."""

    def __init__(self, job: Job, progress: Progress, stop: Callable[[], bool]):
        self.job, self.progress, self.stop = job, progress, stop
        self.interrupted = self.reached = False

    @property
    def ended(self) -> bool:
        return self.interrupted or self.reached

    def _look(self, stage: str, done: int, total: int, worst: np.ndarray) -> None:
        best = float(np.nanmin(worst))
        self.progress(stage, done, total, best)
        self.interrupted = self.interrupted or self.stop()
        goal = self.job.stop_infidelity
        self.reached = goal is not None and best <= goal

    def explore(self, parameters: np.ndarray):
        """All starts down the mean over the coarse grid."""
        from shaper.search import gauss_newton
        from shaper.search.objective import make_problem

        problem = make_problem(self.job, error_grid(self.job, *EXPLORE_POINTS))
        state = gauss_newton.begin(problem, parameters, 1.0)
        costs = [np.asarray(state.cost)[None]]
        steps = self.job.iterations
        self._look("exploring", 0, steps, np.asarray(state.worst))
        idle = np.zeros(len(parameters), dtype=int)
        done = 0
        while done < steps and not self.ended and not np.all(idle >= STALL_CHUNKS):
            state, cost = gauss_newton.advance(problem, state, 1.0, CHUNK)
            gain = costs[-1][-1] - np.asarray(cost)[-1]
            idle = np.where(gain < STALL_GAIN, idle + 1, 0)
            costs.append(np.asarray(cost))
            done += CHUNK
            self._look("exploring", done, steps, np.asarray(state.worst))
        statuses = ["stalled" if k >= STALL_CHUNKS else "step_limit" for k in idle]
        history = np.exp(np.concatenate(costs)).T
        return np.array(state.parameters), np.array(state.worst), history, statuses

    def polish(self, parameters: np.ndarray):
        """The best few up the ladder of powers on the finer grid."""
        from shaper.search import gauss_newton
        from shaper.search.objective import make_problem

        problem = make_problem(self.job, error_grid(self.job, *POLISH_POINTS))
        total = POLISH_STEPS * len(POWERS)
        best = parameters.copy()
        best_worst = np.full(len(parameters), np.inf)
        done = 0
        for power in POWERS:
            state = gauss_newton.begin(problem, best, power)
            for _ in range(POLISH_STEPS // CHUNK):
                state, _ = gauss_newton.advance(problem, state, power, CHUNK)
                done += CHUNK
                worst = np.asarray(state.worst)
                better = worst < best_worst
                best[better] = np.asarray(state.parameters)[better]
                best_worst = np.where(better, worst, best_worst)
                self._look("polishing", done, total, best_worst)
                if self.ended:
                    return best, best_worst
        return best, best_worst

    def drive(self, parameters: np.ndarray) -> np.ndarray:
        """[*batch, slice, 2] rad/s."""
        from shaper.drive.bound import quadratures

        return np.asarray(quadratures(parameters, self.job.bound)) * self.job.rabi_max

    def measured(self, parameters: np.ndarray) -> np.ndarray:
        """[start]: worst (or mean) infidelity on the grid on which pulses are scored."""
        import jax

        from shaper.search.objective import infidelities, make_problem

        problem = make_problem(self.job, score_grid(self.job))
        found = np.asarray(jax.jit(jax.vmap(infidelities, (None, 0)))(problem, parameters))
        if self.job.minimize == "mean":
            return found @ np.asarray(problem.weight)
        return found.max(axis=1)
