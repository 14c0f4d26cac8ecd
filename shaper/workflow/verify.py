"""The fourth job: recompute by independent means what a file claims, and its error budget."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from shaper.bench import points_for
from shaper.drive import dac
from shaper.drive.line import CHANGE_WHEN_DOUBLED, cells_needed, inverse
from shaper.drive.path import Path as BenchPath
from shaper.errors import InputError
from shaper.evidence import independent
from shaper.evidence.budget import SOURCES, Budget, Effects, error_budget
from shaper.job import Job, parse_job
from shaper.job.record import Group
from shaper.physics.noise import read_spectrum
from shaper.pulse import Pulse, Score, Table, Waveform
from shaper.target import Target
from shaper.wiring import path_of

RELATIVE = 0.01  # how far a claim may be off; grids differ, physics does not
RELATIVE_WORST = 0.03  # the same for a maximum, which a coarse grid may miss by a hair
GRID = 2 * CHANGE_WHEN_DOUBLED  # infidelity; what two grids behind a line may differ by
_RESOLUTION = independent.RESOLUTION
_HERTZ_SQUARED = (2 * np.pi) ** 2  # (rad/s)^2
_CELLS_WITHOUT_LINE = 16  # per sample, where skew or an intermediate frequency turn within one
_WORST_POINTS, _WORST_DENSITY = 13, 5.0  # per axis at least, and per rad of reach; evenly spaced
_MEAN_POINTS, _MEAN_DENSITY = 9, 2.0  # the same, Gauss-Legendre


@dataclass(frozen=True)
class Claim:
    """One figure of the file beside its recomputation.

    Attributes:
        name: what it is.
        claimed: as stored.
        found: recomputed.
        holds: whether they agree: within ``RELATIVE`` and the resolution of the means; a proved
            upper bound has to lie above what was found.
    """

    name: str
    claimed: float
    found: float
    holds: bool


@dataclass(frozen=True)
class Verification:
    """One pulse under the second opinion.

    Attributes:
        claims: figures of the file, each beside its recomputation.
        budget: where the infidelity comes from on the bench of the job.
    """

    claims: tuple[Claim, ...]
    budget: Budget

    @property
    def holds(self) -> bool:
        """Whether every claim does."""
        return all(claim.holds for claim in self.claims)


def effects_of(job: Job, on_ladder: bool = False) -> Effects:
    """What the budget reckons with on the bench of a job.

    Args:
        on_ladder: whether the search had the upper levels in its model.
    Raises:
        InputError: if a file that the job names is not what it should be.
    """
    noise = job.noise
    spectrum = None
    if noise.detuning_spectrum is not None:
        spectrum = read_spectrum(noise.detuning_spectrum, unit=_HERTZ_SQUARED)
    return Effects(
        path=path_of(job),
        correction=job.correction,
        anharmonicity=job.anharmonicity,
        levels=job.levels,
        on_ladder=on_ladder and job.anharmonicity is not None,
        t1=job.t1,
        t2=job.t2,
        detuning_sigma=noise.detuning_sigma,
        amplitude_sigma=noise.amplitude_sigma,
        detuning_spectrum=spectrum,
        carrier=job.carrier,
        amplitude_tolerance=job.amplitude_tolerance,
        detuning_tolerance=job.detuning_tolerance,
        detuning=job.detuning,
    )


def verify(
    waveform: Waveform,
    names: Sequence[str] = (),
    effects: Effects | None = None,
    folder: str | Path = ".",
) -> dict[str, Verification]:
    """Recompute what a file claims about its pulses, and make their error budgets.

    Args:
        waveform: as ``shaper.load_waveform`` gives it.
        names: which pulses; default: the optimized ones, or all where there are none; "all".
        effects: default: those of the job in the file.
        folder: where the files that the job names lie.
    Raises:
        InputError: if the job in the file is not valid, or a pulse is not there.
    """
    job = parse_job(waveform.job_text, "job in the file", folder)
    effects = effects or effects_of(job, searched_on_ladder(waveform))
    found = {}
    for name in _chosen(waveform, names):
        pulse = waveform.pulses[name]
        here = replace(effects, cells=_cells(pulse, effects))
        found[name] = Verification(
            check_claims(pulse, waveform.scores[name], job.target, here, job.others),
            error_budget(pulse, job.target, here),
        )
    return found


def searched_on_ladder(waveform: Waveform) -> bool:
    """Whether the file says that its search had more levels than two in its model."""
    levels = waveform.history_attrs.get("levels", 2)
    return isinstance(levels, int | float) and levels > 2


def _cells(pulse: Pulse, effects: Effects) -> int:
    """Cells per sample at which the grid no longer matters."""
    path = effects.path
    if path.straight:
        return 1
    turning = path.cells(pulse.sample_rate)
    if path.line is None:
        return max(_CELLS_WITHOUT_LINE, turning)
    floats = np.repeat(pulse.drive, pulse.samples, axis=0)
    return max(turning, cells_needed(path.line, floats, 1 / pulse.sample_rate))


def check_claims(
    pulse: Pulse, score: Score, target: Target, effects: Effects, others: Sequence[Group] = ()
) -> tuple[Claim, ...]:
    """Every stored infidelity of one pulse beside its recomputation, without decay.

    The figures are those at the qubit, behind the whole path; on the levels that the search saw;
    of the addressed qubit and the others together.
    """
    path = effects.path
    claims = []
    for label, samples, claimed in (
        (
            "float",
            _without_grain(pulse, effects),
            (score.nominal, score.mean, score.worst),
        ),
        (
            "codes",
            dac.decode(pulse.codes, pulse.full_scale, pulse.bits),
            (score.dac, score.dac_mean, score.dac_worst),
        ),
    ):
        drive, durations = _at_qubit(path, samples, pulse.sample_rate, effects.cells)
        found = _of_all(drive, durations, target, effects, others)
        for kind, stored, value in zip(("nominal", "mean", "worst"), claimed, found, strict=True):
            if not np.isnan(stored):
                near = RELATIVE_WORST if kind == "worst" else RELATIVE
                holds = _agree(stored, value, near, _grid(path, value))
                claims.append(Claim(f"{label}, {kind}", stored, value, holds))
        if label == "codes" and score.guaranteed is not None:
            above = score.guaranteed >= found[2] - max(_grid(path, found[2]), _RESOLUTION)
            claims.append(Claim("codes, guaranteed", score.guaranteed, found[2], bool(above)))
    return tuple(claims)


def with_evidence(waveform: Waveform, found: dict[str, Verification]) -> Waveform:
    """The waveform with budgets and recomputed figures among its evidence tables."""
    pulses = ", ".join(found)
    budgets = [v.budget for v in found.values()]
    alone = np.array([[b.alone.get(s, np.nan) for s in SOURCES] for b in budgets])
    worst = [
        max((c.found for c in v.claims if c.name.startswith("codes")), default=np.nan)
        for v in found.values()
    ]
    axis = ("verified_pulse",)
    tables = {
        "budget": Table(
            alone,
            (*axis, "source"),
            "1",
            f"infidelity by each effect alone; pulses: {pulses}; sources: {', '.join(SOURCES)}",
        ),
        "budget_together": Table(
            np.array([b.together for b in budgets]),
            axis,
            "1",
            "infidelity under all effects at once, at the worst point of the tolerance box",
        ),
        "budget_leakage": Table(
            np.array([b.leakage for b in budgets]), axis, "1", "population outside the qubit"
        ),
        "budget_seepage": Table(
            np.array([np.nan if b.seepage is None else b.seepage for b in budgets]),
            axis,
            "1",
            "population that returns to the qubit from outside, decay included; nan on two levels",
        ),
        "verified_worst": Table(
            np.array(worst), axis, "1", "worst infidelity of the codes, recomputed"
        ),
        "verified": Table(
            np.array([int(v.holds) for v in found.values()]),
            axis,
            "1",
            "1 where every stored figure was found again",
        ),
    }
    return replace(waveform, evidence={**waveform.evidence, **tables})


def draw(found: dict[str, Verification], path: str | Path) -> None:
    """The budgets as a picture; the file's suffix decides the format."""
    from shaper.figures import budget_figure, save

    sources = [s for s in SOURCES if any(s in v.budget.alone for v in found.values())]
    bars = {
        name: [v.budget.alone.get(s, np.nan) for s in sources] + [v.budget.together]
        for name, v in found.items()
    }
    save(budget_figure({"source": [*sources, "all together"], "pulses": bars}), path)


def as_json(found: dict[str, Verification]) -> dict:
    """The verification as plain data."""
    return {
        name: {
            "holds": v.holds,
            "claims": [
                {
                    "name": c.name,
                    "claimed": c.claimed,
                    "recomputed": c.found,
                    "holds": bool(c.holds),
                }
                for c in v.claims
            ],
            "budget": {source: float(value) for source, value in v.budget.alone.items()},
            "sum": float(v.budget.total),
            "together": v.budget.together,
            "leakage": v.budget.leakage,
            "seepage": v.budget.seepage,
            "adds_up": bool(v.budget.adds_up),
            "note": v.budget.note,
            "dominating": v.budget.dominating,
            "advice": v.budget.advice,
        }
        for name, v in found.items()
    }


def _chosen(waveform: Waveform, names: Sequence[str]) -> list[str]:
    if "all" in names:
        return list(waveform.pulses)
    for name in names:
        if name not in waveform.pulses:
            raise InputError(
                f"--pulse: expected one of {', '.join(waveform.pulses)} or all, got {name}"
            )
    optimized = [n for n, pulse in waveform.pulses.items() if pulse.origin == "optimized"]
    return list(names) or optimized or list(waveform.pulses)


def _without_grain(pulse: Pulse, effects: Effects) -> np.ndarray:
    """[sample, 2] rad/s: what the DAC would play if it had no grain."""
    path = effects.path
    spread = np.repeat(pulse.drive, pulse.samples, axis=0)
    if path.line is not None and effects.correction == "inverse":
        extra = int(pulse.samples[-1])  # the last segment is time to cut the tail short
        spread = inverse(path.line, spread[:-extra], 1 / pulse.sample_rate, extra)
    return path.to_play(spread, pulse.sample_rate)


def _at_qubit(path, samples, sample_rate, cells):
    if not path.straight:
        drive, cell = path.at_qubit(samples, sample_rate, cells)
        return drive, np.full(len(drive), cell)
    changes = np.flatnonzero(np.any(np.diff(samples, axis=0) != 0, axis=1)) + 1
    starts = np.concatenate([[0], changes])
    return samples[starts], np.diff(np.append(starts, len(samples))) / sample_rate


def _of_all(drive, durations, target, effects, others) -> tuple[float, float, float]:
    """Nominal, mean and worst of all qubits: the largest, the mean by weight, the largest."""
    figures = [_figures(drive, durations, target, effects)]
    for group in others:
        here = replace(
            effects,
            detuning=group.detuning,
            amplitude_tolerance=group.amplitude_tolerance,
            detuning_tolerance=group.detuning_tolerance,
        )
        figures.append(_figures(drive, durations, group.target, here))
    nominal, mean, worst = zip(*figures, strict=True)
    weights = [1.0, *(group.weight for group in others)]
    return max(nominal), float(np.average(mean, weights=weights)), max(worst)


def _figures(drive, durations, target, effects) -> tuple[float, float, float]:
    """Nominal, mean and worst infidelity of one qubit by matrix exponentials."""
    sides = (effects.amplitude_tolerance, effects.detuning_tolerance)
    speeds = (float(np.sum(np.hypot(*drive.T) * durations)), float(np.sum(durations)))
    ladder = (effects.levels, effects.anharmonicity) if effects.on_ladder else (2, 0.0)
    rules, even = [], []
    for half, speed in zip(sides, speeds, strict=True):
        reach = half * speed  # rad
        x, w = np.polynomial.legendre.leggauss(points_for(reach, _MEAN_POINTS, _MEAN_DENSITY))
        rules.append((half * x, w / 2) if half else (np.zeros(1), np.ones(1)))
        points = points_for(reach, _WORST_POINTS, _WORST_DENSITY)
        even.append(np.linspace(-half, half, points) if half else np.zeros(1))

    def lost(axes):
        eps, delta = (v.ravel() for v in np.meshgrid(*axes, indexing="ij"))
        unitaries = independent.gates(drive, durations, eps, effects.detuning + delta, *ladder)
        return np.array(
            [independent.infidelity(independent.superoperator(u), target) for u in unitaries]
        )

    nominal = float(lost((np.zeros(1), np.zeros(1)))[0])
    if not any(sides):
        return nominal, nominal, nominal
    weight = np.outer(rules[0][1], rules[1][1]).ravel()
    mean = float(weight @ lost((rules[0][0], rules[1][0])))
    return nominal, mean, max(float(np.max(lost(even))), nominal)


def _grid(path: BenchPath, infidelity: float) -> float:
    """What two grids of cells behind a path may differ by: their errors add to the pulse's own."""
    return 0.0 if path.straight else float(GRID + 2 * np.sqrt(max(infidelity, 0) * GRID))


def _agree(claimed: float, found: float, relative: float, grid: float) -> bool:
    return abs(claimed - found) <= relative * max(claimed, found) + max(grid, _RESOLUTION)
