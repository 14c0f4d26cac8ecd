"""A drive changed by little, so that what turns within its held samples no longer matters.

On an intermediate frequency the mean over each sample is the wanted drive, but the drive goes there
on an arc instead of its chord. The sliver between the two is a turn about z, ``(W T)^2 w T / 12``
per sample to lowest order, and no drive along x and y takes it away sample by sample. The pulse as
a whole can: it is bent by the least change, relative to its own envelope, after which the whole
path ends where the wanted drive would have ended, at every error that counts.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from shaper.drive.polish import error_slope
from shaper.physics.propagate import propagate

_ROUNDS = 8  # each gains one or two digits: the slope is that of the drive without ripple
_ENOUGH = 1e-14  # infidelity between where the pulse ends and where it should
_MOST_OVER = 0.2  # of the bound; a pulse that needs more room is another pulse, and refused later
_NEAR = 0.05  # share of the bound; with less room than that a segment grows by less
_HAIR = 1e-9  # relative, below the bound
_SMALLEST = 1e-4  # relative singular value; weaker directions would ask for large changes

Cells = tuple[np.ndarray, float]  # drive [cell, 2] rad/s and the length of a cell in s


@dataclass(frozen=True)
class Holding:
    """Points of the error box at which a rotation error is to be held.

    Attributes:
        eps, delta: [grid] unitless and rad/s.
        error_rows: [k, 4] of the target there.
        scale: of the target: infidelity per squared error.
    """

    eps: np.ndarray
    delta: np.ndarray
    error_rows: np.ndarray
    scale: float


def counteracted(
    drive: np.ndarray,
    samples: np.ndarray,
    sample_rate: float,
    smooth: Callable[[np.ndarray], Cells],
    real: Callable[[np.ndarray], Cells],
    room: Callable[[np.ndarray], np.ndarray],
    holding: tuple[Holding, ...],
    kernel: np.ndarray | None = None,
) -> np.ndarray:
    """The drive whose pulse ends, through the real path, where ``drive`` ends through the smooth.

    Where it leaves no room it is made weaker first, by a fifth at most. Then Gauss-Newton with the
    least change; a step is taken only if it lowers the distance and stays within the bound.

    Args:
        drive: [segment, 2] rad/s.
        samples: [segment] whole samples of each.
        smooth, real: what a drive makes at the qubit without and with what turns within samples.
        room: [segment] unitless: the share of the bound that is left at each segment, negative
            beyond it; without room a segment may turn, but not grow.
        holding: where the errors are held, one for each qubit.
        kernel: of ``line.Taps`` on the sample clock, or None for no line in the model.
    Returns:
        [segment, 2] rad/s, ``drive`` itself where no step helps.
    Source:
        The second-order term: W. Magnus, Commun. Pure Appl. Math. 7, 649 (1954). The rest is
        derived here.
    """
    drive = np.asarray(drive, dtype=float)
    starts = np.cumsum(samples) - samples
    aim = _errors(smooth(drive), holding)
    drive = _fitted(drive, room)
    miss = _errors(real(drive), holding) - aim
    for _ in range(_ROUNDS):
        if miss @ miss <= _ENOUGH:
            break
        spread = np.repeat(drive, samples, axis=0)
        slope = np.concatenate(
            [
                _scale(h)
                * error_slope(spread, kernel, sample_rate, h.eps, h.delta, h.error_rows).reshape(
                    -1, len(spread), 2
                )
                for h in holding
            ]
        )
        slope = np.add.reduceat(slope, starts, axis=1)  # [row, segment, 2]
        # what is zero stays zero; what is at the bound turns, or grows no longer
        size = np.hypot(*drive.T)
        outward = drive / np.where(size > 0, size, 1)[:, None]
        across = np.stack([-outward[:, 1], outward[:, 0]], axis=-1)
        left = size * np.clip(room(drive) / _NEAR, 0, 1)
        ways = np.stack([left[:, None] * outward, size[:, None] * across])  # [way, segment, 2]
        columns = np.einsum("rsc,wsc->rws", slope, ways)
        step = np.linalg.lstsq(columns.reshape(len(miss), -1), -miss, rcond=_SMALLEST)[0]
        change = np.einsum("ws,wsc->sc", step.reshape(2, -1), ways)
        trial = _fitted(drive + change, room)
        new = _errors(real(trial), holding) - aim
        if np.min(room(trial)) < min(0.0, np.min(room(drive))) or not new @ new < miss @ miss:
            break
        drive, miss = trial, new
    return drive


def _fitted(drive: np.ndarray, room: Callable[[np.ndarray], np.ndarray]) -> np.ndarray:
    """The drive, weaker where it left no room; neighbors share some, hence again and again."""
    for _ in range(_ROUNDS):
        over = 1 - np.minimum(room(drive), 0)  # [segment], 1 where there is room
        if np.max(over) == 1 or np.max(over) > 1 + _MOST_OVER:
            break
        drive = drive / np.where(over > 1, over + _HAIR, 1)[:, None]
    return drive


def _errors(cells: Cells, holding: tuple[Holding, ...]) -> np.ndarray:
    """[row]: all errors, so that their squares sum to the infidelity, mean over each grid."""
    drive, cell = cells
    durations = np.full(len(drive), cell)
    return np.concatenate(
        [
            _scale(h) * (propagate(drive, durations, h.eps, h.delta) @ h.error_rows.T).ravel()
            for h in holding
        ]
    )


def _scale(holding: Holding) -> float:
    return float(np.sqrt(holding.scale / len(holding.eps)))
