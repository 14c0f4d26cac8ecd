"""The search: many starts side by side, first for the mean over the box, then for its worst point.

The mean is smooth and leads far down; the worst case is what counts. So all starts go down the
mean on the coarsest grid that still leads somewhere, the best go on on a finer one, and the best of
these climb the ladder of powers, whose mean closes in on the maximum, on grids fine enough that
nothing hides between their points. What is left is measured on the grid on which pulses are
scored.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import jax
import numpy as np

from shaper.job import Job
from shaper.search.batches import advance
from shaper.search.checkpoint import Checkpoint
from shaper.search.compiler import prepare
from shaper.search.objective import (
    Problem,
    all_infidelities,
    all_wish_costs,
    drive_of,
    make_problem,
)
from shaper.search.stages import Stage, method_for, stages, worst_counts
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
MEASURED = 8  # starts that are measured on the score's grid at once

Progress = Callable[[str, int, int, float], None]  # stage, step, of how many, best infidelity


@dataclass(frozen=True)
class Leg:
    """What one stage did.

    Attributes:
        starts: [kept] indices of the starts that took part.
        infidelity: [kept, step] the power mean over the stage's grid after each step, times the
            exponential of what the wishes cost.
        wishes: name to [kept, step] cost of each wish, weight included; nan between two looks.
    """

    starts: np.ndarray
    infidelity: np.ndarray
    wishes: dict[str, np.ndarray] = field(default_factory=dict)


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


def search(
    job: Job,
    progress: Progress | None = None,
    stop: Callable[[], bool] | None = None,
    *,
    checkpoint: Checkpoint | None = None,
    warm: Sequence[np.ndarray] = (),
    slices: int | None = None,
    give_up: bool = False,
) -> Found:
    """The best waveform found for the job.

    Args:
        job: what to make.
        progress: called between chunks of steps.
        stop: asked between chunks; True ends the search with what is best so far.
        checkpoint: where the search is kept from time to time, and taken up again.
        warm: drives [slice, 2] in W_max, of any number of slices, to start from as well; they
            take the places of the last random starts.
        slices: length of the arrays, see ``make_problem``.
        give_up: end as soon as ``stop_infidelity`` is out of reach by all appearances: the mean
            over the box, which no worst case is below, stays above it.
    Returns:
        the winner and what became of every start. The same job gives the same result, bit for
        bit, on the same machine and library versions, resumed or not.
    """
    prepare()
    parameters, names = starting_parameters(job, warm)
    padding = (slices or job.slices) - job.slices
    run = _Run(job, np.pad(parameters, ((0, 0), (0, padding), (0, 0))), names, give_up)
    if checkpoint is not None:
        run.restore(checkpoint.load())
    progress, stop = progress or (lambda *_: None), stop or (lambda: False)
    while not run.ended:
        run.advance()
        progress(*run.report())
        run.interrupted = run.interrupted or stop()
        if checkpoint is not None and (run.interrupted or checkpoint.due):
            checkpoint.save(run.snapshot())
    return run.found()


class _Run:
    """One search under way: where the starts stand, what was best, and how far it has come.

    All that ``advance`` changes is in ``snapshot``.
    """

    def __init__(self, job: Job, parameters: np.ndarray, names: list[str], give_up: bool):
        self.job, self.names, self.stages, self.give_up = job, names, stages(job), give_up
        self.parameters = parameters
        self.status = np.full(len(names), "step_limit", dtype="U12")
        self.best_score, self.best_start, self.best = np.inf, 0, parameters[0]
        self.best_rank = np.inf  # score and wishes together
        self.legs: list[Leg] = []
        self.interrupted = self.reached = False
        self._score_problem = make_problem(job, slices=parameters.shape[1], weighted=False)
        self._rank_problem = self._score_problem
        if job.leakage_weight != 1 or any(group.weight != 1 for group in job.groups):
            self._rank_problem = make_problem(job, slices=parameters.shape[1])
        self._enter(0, np.arange(len(names)))

    @property
    def ended(self) -> bool:
        """Whether there is nothing more to do."""
        return self.interrupted or self.reached or self.stage_number >= len(self.stages)

    def _enter(self, number: int, chosen: np.ndarray) -> None:
        """Begin a stage with the best of the chosen starts."""
        self.stage_number, self.power_number = number, 0
        if number < len(self.stages):
            stage = self.stages[number]
            self.chosen = chosen[: stage.kept]
            self.costs: list[np.ndarray] = []
            self.wish_costs: list[dict[str, np.ndarray]] = []
            self._make_problem()
            self._begin_power()

    def _make_problem(self) -> None:
        stage = self.stages[self.stage_number]
        length = self.parameters.shape[1]
        self.problem = make_problem(self.job, stage.points, length, stage.per_radian)
        self.method = method_for(self.problem, len(self.chosen))

    def _begin_power(self) -> None:
        self.state = self.method.begin(self.problem, self.parameters[self.chosen])
        self.done, self.idle = 0, np.zeros(len(self.chosen), dtype=int)

    def advance(self) -> None:
        """One chunk of steps, and whatever follows from it."""
        stage = self.stages[self.stage_number]
        steps = stage.steps or self.job.iterations
        power = stage.powers[self.power_number]
        chunk = min(CHUNK, steps - self.done)
        self.state, costs = advance(self.method, self.problem, self.state, power, chunk)
        gain = costs[0] - costs[-1]
        self.idle = np.where(gain < STALL_GAIN, self.idle + 1, 0)
        self.costs.append(costs[1:] if self.costs else costs)
        if self.problem.wishes:
            self._log_wishes(len(self.costs[-1]))
        self.done += chunk
        self._look_for_goal()
        if self.reached or self.done >= steps or np.all(self.idle >= STALL_CHUNKS):
            self._end_power(stage, power)

    def _log_wishes(self, steps: int) -> None:
        found = all_wish_costs(self.problem, self.state.parameters)
        self.wish_costs.append(
            {
                name: np.vstack([np.full((steps - 1, len(cost)), np.nan), cost])
                for name, cost in found.items()
            }
        )

    def _leg(self) -> Leg:
        """What the stage has done so far."""
        names = self.wish_costs[0] if self.wish_costs else ()
        wishes = {name: np.concatenate([c[name] for c in self.wish_costs]).T for name in names}
        return Leg(self.chosen, np.exp(np.concatenate(self.costs)).T, wishes)

    def _end_power(self, stage: Stage, power: float) -> None:
        self.parameters[self.chosen] = self.state.parameters
        self.status[self.chosen] = np.where(self.idle >= STALL_CHUNKS, "stalled", "step_limit")
        self.status[self.chosen[~np.isfinite(self.state.cost)]] = "nonfinite"
        rank = self._remember(self.chosen, power)
        order = np.argsort(rank)  # nan last
        if self.give_up and power == 1 and not np.nanmin(rank) <= self.job.stop_infidelity:
            order = order[:0]  # nobody goes on
        self.power_number += 1
        if self.power_number < len(stage.powers) and not self.reached and len(order):
            self._begin_power()
            return
        self.legs.append(self._leg())
        self._enter(self.stage_number + 1 if len(order) else len(self.stages), self.chosen[order])

    def _look_for_goal(self) -> None:
        """Whether the leader meets the goal, on the score's grid too."""
        goal = self.job.stop_infidelity
        found = self.state.worst
        if goal is None or self.problem.wishes or not np.any(found <= goal):
            return  # with wishes there is always something left to gain
        leader = int(np.nanargmin(found))
        self.parameters[self.chosen] = self.state.parameters
        self._remember(self.chosen[leader : leader + 1], power=1.0)
        self.reached = self.best_score <= goal

    def _remember(self, starts: np.ndarray, power: float) -> np.ndarray:
        """Score these starts as they stand, and keep the best ever seen.

        Returns:
            [start] what to rank them by, weights included: the mean over the score's grid while
            the mean is being lowered, which tells better how far a start will come, else what is
            scored.
        """
        found = self._on_the_score_grid(self._score_problem, starts)
        counted = found
        if self._rank_problem is not self._score_problem:
            counted = self._on_the_score_grid(self._rank_problem, starts)
        score, _ = self._judged(self._score_problem, found)
        ranked, mean = self._judged(self._rank_problem, counted)
        with np.errstate(divide="ignore"):  # a perfect pulse
            rank = np.log(ranked + self.problem.floor)
        if self.problem.wishes:
            rank += sum(
                map(np.asarray, all_wish_costs(self.problem, self.parameters[starts]).values())
            )
        leader = int(np.argmin(np.where(np.isnan(rank), np.inf, rank)))
        if rank[leader] < self.best_rank or not np.isfinite(self.best_score):
            start = int(starts[leader])
            self.best_rank, self.best_score = float(rank[leader]), float(score[leader])
            self.best_start, self.best = start, self.parameters[start].copy()
        return mean if power == 1 else ranked

    def _on_the_score_grid(self, problem: Problem, starts: np.ndarray) -> np.ndarray:
        """[start, point] infidelity of these starts as they stand."""
        padded = np.resize(starts, -(-len(starts) // MEASURED) * MEASURED)
        found = [  # batches of one size: one compiled program
            np.asarray(all_infidelities(problem, self.parameters[batch]))
            for batch in padded.reshape(-1, MEASURED)
        ]
        return np.concatenate(found)[: len(starts)]

    def _judged(self, problem: Problem, found: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """[start] what counts, the worst point or the mean; and the mean."""
        mean = found @ np.asarray(problem.weight)
        return (found.max(axis=1) if worst_counts(self.job) else mean), mean

    def report(self) -> tuple[str, int, int, float]:
        """For the progress line: stage, step, of how many, best infidelity so far."""
        number = min(self.stage_number, len(self.stages) - 1)
        stage = self.stages[number]
        steps = stage.steps or self.job.iterations
        here = self.state.worst
        best = min(self.best_score, np.nanmin(here) if np.any(np.isfinite(here)) else np.inf)
        done = self.power_number * steps + self.done
        return stage.name, done, steps * len(stage.powers), float(best)

    def found(self) -> Found:
        """The best ever seen, and what became of every start."""
        if self.interrupted and self.stage_number < len(self.stages):
            self.parameters[self.chosen] = self.state.parameters
            self._remember(self.chosen, power=1.0)
            if self.costs:
                self.legs.append(self._leg())
        goal = self.job.stop_infidelity
        if goal is not None and self.best_score <= goal:
            self.status[self.best_start] = "converged"
        elif self.interrupted:
            self.status[self.best_start] = "interrupted"
        drive = np.asarray(drive_of(self._score_problem, self.best))[: self.job.slices]
        statuses = [str(s) for s in self.status]
        legs = {stage.name: leg for stage, leg in zip(self.stages, self.legs, strict=False)}
        return Found(
            drive * self.job.rabi_max,
            self.best_score,
            statuses[self.best_start],
            self.names,
            statuses,
            self.best_start,
            legs,
        )

    def snapshot(self) -> dict[str, np.ndarray]:
        """Everything needed to go on from here, as arrays."""
        kept = {name: np.asarray(getattr(self, name)) for name in _KEPT}
        if self.stage_number < len(self.stages):
            kept |= {name: np.asarray(getattr(self, name)) for name in ("chosen", "idle", "done")}
            leaves = jax.tree_util.tree_leaves(self.state)
            kept |= {f"state_{k}": leaf for k, leaf in enumerate(leaves)}
            if self.costs:
                kept["costs"] = np.concatenate(self.costs)
            for name in self.wish_costs[0] if self.wish_costs else ():
                kept[f"wish_{name}"] = np.concatenate([c[name] for c in self.wish_costs])
        for k, leg in enumerate(self.legs):
            kept |= {f"leg_{k}_starts": leg.starts, f"leg_{k}_infidelity": leg.infidelity}
            kept |= {f"leg_{k}_wish_{name}": cost for name, cost in leg.wishes.items()}
        return kept

    def restore(self, kept: dict[str, np.ndarray] | None) -> None:
        """Go on from a snapshot; None: from the beginning."""
        if kept is None:
            return
        for name in _KEPT:
            value = kept[name]
            setattr(self, name, value.copy() if value.ndim else value.item())
        self.legs = [
            Leg(
                kept[f"leg_{k}_starts"],
                kept[f"leg_{k}_infidelity"],
                _with_prefix(kept, f"leg_{k}_wish_"),
            )
            for k in range(sum(name.endswith("_starts") for name in kept))
        ]
        if self.stage_number < len(self.stages):
            self.chosen, self.idle, self.done = kept["chosen"], kept["idle"], int(kept["done"])
            self._make_problem()
            fresh = self.method.begin(self.problem, self.parameters[self.chosen])
            leaves, tree = jax.tree_util.tree_flatten(fresh)
            leaves = [kept[f"state_{k}"] for k in range(len(leaves))]
            self.state = jax.tree_util.tree_unflatten(tree, leaves)
            self.costs = [kept["costs"]] if "costs" in kept else []
            wishes = _with_prefix(kept, "wish_")
            self.wish_costs = [wishes] if wishes else []


def _with_prefix(kept: dict[str, np.ndarray], prefix: str) -> dict[str, np.ndarray]:
    """The arrays whose names begin so, under the rest of their names."""
    return {n.removeprefix(prefix): value for n, value in kept.items() if n.startswith(prefix)}


_KEPT = (
    "stage_number",
    "power_number",
    "parameters",
    "status",
    "best_score",
    "best_rank",
    "best_start",
    "best",
    "reached",
)
