"""Which pulse to play on this bench, and what would have to change for another answer.

The measure is the worst infidelity over the tolerance box plus what T1 and T2 take in the pulse's
time, so that a long robust pulse pays for its length. Of several qubits the worst one counts.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq

from shaper.bench import Grid, dense_grid
from shaper.evidence.levels import level_infidelity
from shaper.evidence.row import Row
from shaper.job import Job
from shaper.physics.decay import coherence_limit
from shaper.physics.propagate import propagate
from shaper.pulse import Pulse
from shaper.readable import rate, time
from shaper.target import infidelity
from shaper.wiring import arriving

NEGLIGIBLE = 1e-9  # infidelity that no bench can tell from zero: such pulses are level
_LEVEL = 1.01  # a factor too small to speak of
_SCAN_POINTS = 15  # per side of the box, at least, while its size is varied
_LEVEL_SCAN_POINTS = 5  # the same on three levels
_SCAN_DENSITY = 2.0  # points per rad of reach
_SCALES = np.geomspace(1 / 32, 32, 41)  # sizes of the box tried, in tolerances of the job
_LARGEST_AMPLITUDE = 0.5  # relative; no bench is worse
_BISECTIONS = 20  # of the size at which the answer changes
_NO_TOLERANCE = 0.01  # relative, and of W_max: the box that is scaled where the job has none
_LONGEST_T2 = 1e9  # pulse durations; beyond it there is no decay
_T2_STEPS = 60  # of the walk to either side


@dataclass(frozen=True)
class Change:
    """Where the answer changes.

    Attributes:
        at: the quantity at which it does.
        winner: who wins beyond it.
    """

    at: float
    winner: str


@dataclass(frozen=True)
class Verdict:
    """The answer, with its margin.

    Attributes:
        winner: name of the pulse with the least total.
        rival: the best pulse of the other origin (shaped against composite); without one, the
            next best; None if there is only one pulse.
        factor: total of the rival over that of the winner.
        shorter_t2: s. Below this T2 (T1 as in the job) a shorter pulse wins; None: never.
        longer_t2: s. Above this T2 a longer pulse wins; None: never up to 2 T1.
        smaller_box: tolerance box, in units of the job's, below which another pulse wins; None.
        larger_box: the same above.
    """

    winner: Row
    rival: Row | None
    factor: float
    shorter_t2: Change | None
    longer_t2: Change | None
    smaller_box: Change | None
    larger_box: Change | None


def judge(rows: Sequence[Row], pulses: Mapping[str, Pulse], job: Job) -> Verdict:
    """Who wins, against whom, by how much, and where the answer changes.

    Args:
        rows: at least one.
        pulses: by the rows' names.
        job: tolerance, T1 and T2.
    """

    def cost(row: Row) -> tuple[float, float]:
        return _cost(row.total, row.duration)

    winner = min(rows, key=cost)
    others = [row for row in rows if row is not winner]
    unlike = [row for row in others if row.origin != winner.origin] or others
    rival = min(unlike, key=cost, default=None)
    shorter, longer = _changes_with_t2(winner, others, job)
    smaller, larger = _changes_with_box(winner, rows, pulses, job)
    return Verdict(
        winner=winner,
        rival=rival,
        factor=_ratio(rival.total, winner.total) if rival else math.nan,
        shorter_t2=shorter,
        longer_t2=longer,
        smaller_box=smaller,
        larger_box=larger,
    )


def _ratio(a: float, b: float) -> float:
    return a / b if b > 0 else (1.0 if a == 0 else math.inf)


def _changes_with_t2(
    winner: Row, others: Sequence[Row], job: Job
) -> tuple[Change | None, Change | None]:
    """The nearest T2 to either side at which a rival overtakes, T1 as it is."""
    ceiling = 2 * job.t1 if job.t1 is not None else _LONGEST_T2 * winner.duration
    now = min(job.t2, ceiling) if job.t2 is not None else ceiling
    shorter: Change | None = None
    longer: Change | None = None
    # shorter than the pulse itself, T2 leaves nothing to compare
    below = np.geomspace(now, min(now, winner.duration), _T2_STEPS)
    above = np.geomspace(now, ceiling, _T2_STEPS)
    for rival in others:
        if (at := _overtakes(rival, winner, below, job)) and (not shorter or at > shorter.at):
            shorter = Change(at, rival.name)
        if (at := _overtakes(rival, winner, above, job)) and (not longer or at < longer.at):
            longer = Change(at, rival.name)
    return shorter, longer


def _overtakes(rival: Row, winner: Row, path: np.ndarray, job: Job) -> float | None:
    """The first T2 (s) on the way along the path from which the rival is ahead."""

    def behind(t2: float) -> float:
        decay = [coherence_limit(row.duration, job.t1, t2) for row in (rival, winner)]
        return (rival.worst_known - winner.worst_known) + (decay[0] - decay[1])

    gaps = [behind(t2) for t2 in path]
    ahead = next((k for k, gap in enumerate(gaps) if gap < 0), 0)
    if ahead == 0 or gaps[ahead - 1] <= 0:
        return None
    return float(brentq(behind, *sorted(path[ahead - 1 : ahead + 1])))


def _changes_with_box(
    winner: Row, rows: Sequence[Row], pulses: Mapping[str, Pulse], job: Job
) -> tuple[Change | None, Change | None]:
    """The nearest sizes of the tolerance box to either side at which another pulse wins."""
    box = assumed_box(job)
    qubits = [box.for_group(group) for group in box.groups]
    points = _SCAN_POINTS if job.anharmonicity is None else _LEVEL_SCAN_POINTS
    longest = max(row.duration for row in rows)
    grids = [dense_grid(qubit, (points, points), _SCAN_DENSITY, longest) for qubit in qubits]
    played = {row.name: arriving(job, pulses[row.name]) for row in rows}
    corners = [_corners(grid) for grid in grids]
    everywhere = [slice(None)] * len(grids)

    def cost(row: Row, scale: float, where: list) -> tuple[float, float]:
        worst = max(
            _scaled_worst(played[row.name], qubit, grid, scale, points)
            for qubit, grid, points in zip(qubits, grids, where, strict=True)
        )
        return _cost(worst + (row.coherence or 0.0), row.duration)

    def best(scale: float) -> str:
        # the corners are a lower bound, and mostly the worst: few pulses need the whole grid
        bounds = sorted((cost(row, scale, corners), k) for k, row in enumerate(rows))
        found, name = (math.inf, math.inf), ""
        for bound, k in bounds:
            if bound >= found:
                break
            whole = cost(rows[k], scale, everywhere)
            if whole < found:
                found, name = whole, rows[k].name
        return name

    widest = max(qubit.amplitude_tolerance for qubit in qubits)
    upper = _SCALES[_SCALES * widest <= _LARGEST_AMPLITUDE]
    if not job.has_tolerance:  # from no errors at all
        return None, _first_change(best, winner.name, upper, 0.5 * upper[0])
    larger = _first_change(best, winner.name, upper[upper > 1], 1.0)
    smaller = _first_change(best, winner.name, _SCALES[_SCALES < 1][::-1], 1.0)
    return smaller, larger


def _corners(grid: Grid) -> np.ndarray:
    """[corner] indices of the grid's extreme points."""
    on_edge = [side == end for side in (grid.eps, grid.delta) for end in (side.min(), side.max())]
    return np.flatnonzero((on_edge[0] | on_edge[1]) & (on_edge[2] | on_edge[3]))


def _scaled_worst(
    played: tuple, qubit: Job, grid: Grid, scale: float, points: np.ndarray | slice
) -> float:
    """Largest infidelity of one qubit at these points of its grid, the box scaled."""
    eps = scale * grid.eps[points]
    delta = qubit.detuning + scale * (grid.delta[points] - qubit.detuning)
    if qubit.anharmonicity is None:
        found = infidelity(propagate(*played, eps, delta), qubit.target)
    else:
        found = level_infidelity(*played, qubit, eps, delta)
    return float(np.max(found))


def assumed_box(job: Job) -> Job:
    """The job with its tolerance, or, without one, with one percent of both errors to scale."""
    if job.has_tolerance:
        return job
    sides = {
        "amplitude_tolerance": _NO_TOLERANCE,
        "detuning_tolerance": _NO_TOLERANCE * job.rabi_max,
    }
    others = tuple(dataclasses.replace(group, **sides) for group in job.others)
    return dataclasses.replace(job, others=others, **sides)


def _first_change(
    best: Callable[[float], str], name: str, scales: np.ndarray, start: float
) -> Change | None:
    """Walk until somebody else wins, then bisect between the last two steps."""
    inside = start
    for scale in scales:
        outside = float(scale)
        if best(outside) == name:
            inside = outside
            continue
        for _ in range(_BISECTIONS):
            middle = math.sqrt(inside * outside)
            if best(middle) == name:
                inside = middle
            else:
                outside = middle
        return Change(outside, best(outside))
    return None


def _cost(total: float, duration: float) -> tuple[float, float]:
    """What is minimized: the infidelity; among negligible ones the duration."""
    return (0.0, duration) if total <= NEGLIGIBLE else (total, duration)


def sentence(verdict: Verdict, job: Job) -> str:
    """The verdict in one sentence."""
    winner, rival = verdict.winner, verdict.rival
    said = f"{winner.name} wins on this bench: {_figures(winner, job)}"
    if rival is not None:
        if winner.total <= NEGLIGIBLE and rival.total <= NEGLIGIBLE:
            margin = "both negligible, and it is shorter than"
        elif verdict.factor < _LEVEL:
            margin = "level with"
        else:
            margin = f"{verdict.factor:.3g} times less than"
        said += f", {margin} {rival.name} ({_figures(rival, job)})"
    turns = []
    if verdict.shorter_t2:
        turns.append(f"T2 were below {time(verdict.shorter_t2.at)} ({verdict.shorter_t2.winner})")
    if verdict.longer_t2:
        turns.append(f"T2 were above {time(verdict.longer_t2.at)} ({verdict.longer_t2.winner})")
    for change, word in ((verdict.smaller_box, "within"), (verdict.larger_box, "beyond")):
        if change:
            turns.append(f"errors stayed {word} {_box(job, change.at)} ({change.winner})")
    if turns:
        said += "; the answer would change if " + " or if ".join(turns)
    else:
        said += "; no T2 and no size of the tolerance box that was tried changes the answer"
    return said.replace("errors stayed beyond", "errors went beyond") + "."


def _figures(row: Row, job: Job) -> str:
    """Total, its parts, and the duration of one pulse in words."""
    kind = "worst over the box" if job.has_tolerance else "without errors"
    said = f"{row.worst_known:.2e} {kind}"
    if len(row.groups) > 1:
        worst = max(row.groups, key=lambda group: group.worst)
        said += f" ({worst.name} is worst)" if row.levels is None else ""
    if row.levels is not None:
        said += f" on {('three', 'four', 'five')[job.levels - 3]} levels"
    if row.coherence is not None:
        said = f"{row.total:.2e} = {said} + {row.coherence:.2e} decay"
    return f"{said} in {time(row.duration, 5)}"


def _box(job: Job, scale: float) -> str:
    """A scaled tolerance box in words."""
    box = assumed_box(job)
    if job.has_tolerance and job.others:
        return f"{scale:.2g} times their tolerances"
    sides = []
    if box.amplitude_tolerance:
        sides.append(f"+-{100 * scale * box.amplitude_tolerance:.2g} % in amplitude")
    if box.detuning_tolerance:
        sides.append(f"+-{rate(scale * box.detuning_tolerance, 2)} in detuning")
    return " and ".join(sides)
