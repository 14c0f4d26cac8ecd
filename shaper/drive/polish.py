"""A last search on the integer codes: rounding errors made to cancel each other.

Near the float pulse its rotation error is linear in the codes, with one row per code step. So a
step, or two at once, is chosen among all by what the sum of rows leaves, and taken if the exact
propagator agrees. The aim is the error of the float pulse itself at every point of the grid: a
robust pulse stays robust.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from shaper.drive.dac import decode, largest_code
from shaper.physics.propagate import propagate, segment_quaternions
from shaper.rotation import conjugate, product
from shaper.target import Target

_MOST_MOVES = 3000  # looked at in pairs; beyond that a random choice of them
_TRIED = 24  # of the most promising moves, by the exact propagator
_FARTHEST = 1  # code steps from plain rounding: the file still says what the drive is
_PATIENCE = 4  # random choices in a row without gain, then done
_SERIES_BELOW = 1e-4  # squared half angle; the closed forms cancel below


@dataclass(frozen=True)
class Polished:
    """Outcome of a polish.

    Attributes:
        codes: [sample, 2] int16.
        before, after: distance of the codes' rotation error from the float pulse's, in infidelity,
            mean over the grid.
        moves: code steps taken.
    """

    codes: np.ndarray
    before: float
    after: float
    moves: int


def polish(
    codes: np.ndarray,
    wanted: np.ndarray,
    target: Target,
    *,
    full_scale: float,
    bits: int,
    bound: str,
    sample_rate: float,
    eps: np.ndarray | tuple = (0.0,),
    delta: np.ndarray | tuple = (0.0,),
    kernel: np.ndarray | None = None,
    stop: float = 1e-13,
    rounds: int = 60,
    seed: int = 0,
) -> Polished:
    """Move codes by single steps until their pulse errs like the float pulse, or no step helps.

    Args:
        codes: [sample, 2] int16, rounded.
        wanted: [sample, 2] rad/s, the float pulse on the samples.
        eps, delta: [grid] points to hold; the nominal point alone by default.
        kernel: of ``line.Taps`` on the sample clock, or None for no line.
        stop: infidelity between codes and float pulse that is good enough.
        rounds: at most so many choices of one or two steps.
        seed: of the random choice where there are too many moves.
    Returns:
        Codes inside the bound, none more than one step from where it was, never worse than those
        given.
    """
    eps, delta = np.broadcast_arrays(
        np.atleast_1d(np.asarray(eps, dtype=float)), np.atleast_1d(np.asarray(delta, dtype=float))
    )
    rng = np.random.default_rng(seed)
    top, step = largest_code(bits), full_scale / largest_code(bits)
    scale = np.sqrt(target.scale / len(eps))

    def error(drive):
        return scale * _errors(drive, kernel, sample_rate, eps, delta, target.error_rows).ravel()

    aim = error(wanted)
    rounded = np.asarray(codes, dtype=int)
    codes = rounded.copy()
    miss = error(decode(codes, full_scale, bits)) - aim
    before = best = float(miss @ miss)
    taken = idle = 0
    rows = None
    for _ in range(rounds):
        if best <= stop or idle >= _PATIENCE:
            break
        if rows is None:  # [sample * 2, component]: per code step
            drive = decode(codes, full_scale, bits)
            slope = error_slope(drive, kernel, sample_rate, eps, delta, target.error_rows)
            rows = scale * step * np.moveaxis(slope, (-2, -1), (0, 1)).reshape(codes.size, -1)
        index, sign = _allowed(codes, rounded, top, bound, rng)
        idle += 1
        for chosen in _candidates(miss, rows[index] * sign[:, None]):
            trial = codes.copy()
            np.add.at(trial.reshape(-1), index[chosen], sign[chosen])
            if not _inside(trial, rounded, top, bound):
                continue
            new = error(decode(trial, full_scale, bits)) - aim
            if new @ new < best:
                codes, miss, best = trial, new, float(new @ new)
                taken, idle, rows = taken + len(chosen), 0, None
                break
        if idle and len(index) < _MOST_MOVES:  # all moves were seen: nothing left to draw
            break
    return Polished(codes.astype(np.int16), before, best, taken)


def error_slope(
    drive: np.ndarray,
    kernel: np.ndarray | None,
    sample_rate: float,
    eps: np.ndarray,
    delta: np.ndarray,
    error_rows: np.ndarray,
) -> np.ndarray:
    """Derivative of the rotation error by the drive, in closed form.

    With ``h`` the half turn of a slice, ``a = sinc 2|h|``, ``b = (sin|h|/|h|)^2`` and
    ``e = (1-a)/h^2``: ``vec(dq q*) = a dh + e h (h.dh) + b h x dh``, turned by all that follows.

    Args:
        drive: [sample, 2] rad/s.
    Returns:
        [grid, k, sample, 2] s: of ``error_rows @ q``.
    Source:
        Derived here.
    """
    fine, duration = _at_qubit(drive, kernel, sample_rate)
    steps = segment_quaternions(fine, np.full(len(fine), duration), eps, delta)  # [s, grid, 4]
    half = duration / 2
    gain = half * (1 + eps)
    h = np.stack(
        np.broadcast_arrays(fine[:, :1] * gain, fine[:, 1:] * gain, half * delta[None]), -1
    )  # [slice, grid, 3]
    s = np.sum(h * h, axis=-1, keepdims=True)
    near = s < _SERIES_BELOW
    safe = np.where(near, 1.0, s)
    a = np.where(near, 1 - 2 * s / 3 + 2 * s**2 / 15, np.sinc(2 * np.sqrt(safe) / np.pi))
    b = np.where(near, 1 - s / 3 + 2 * s**2 / 45, np.sin(np.sqrt(safe)) ** 2 / safe)
    e = np.where(near, 2 / 3 - 2 * s / 15 + 4 * s**2 / 315, (1 - a) / safe)
    later = np.empty_like(steps)  # product of all slices after this one
    total = np.tile([1.0, 0, 0, 0], (len(eps), 1))
    for k in range(len(steps) - 1, -1, -1):
        later[k] = total
        total = product(total, steps[k])
    parts = []
    for axis in np.eye(3)[:2]:
        along = a * axis + e * h * h[..., axis == 1] + b * np.cross(h, axis)
        small = np.concatenate([np.zeros_like(along[..., :1]), along * gain[None, :, None]], -1)
        moved = product(product(later, small), conjugate(later))
        parts.append(np.einsum("ki,sgi->gks", error_rows, product(moved, total)))
    slope = np.stack(parts, axis=-1)  # [grid, k, slice, 2]
    if kernel is None:
        return slope
    from shaper.drive.line import gathered

    return np.moveaxis(gathered(kernel, np.moveaxis(slope, (2, 3), (0, 1))), (0, 1), (2, 3))


def _at_qubit(drive, kernel, sample_rate) -> tuple[np.ndarray, float]:
    """Drive at the qubit [slice, 2] and the length of its slices (s)."""
    if kernel is None:
        return np.asarray(drive, dtype=float), 1 / sample_rate
    from shaper.drive.line import filtered

    return filtered(kernel, np.asarray(drive, dtype=float)), 1 / sample_rate / kernel.shape[1]


def _errors(drive, kernel, sample_rate, eps, delta, error_rows) -> np.ndarray:
    """[grid, k]; the sign of the quaternion is that of its overlap with the target."""
    fine, duration = _at_qubit(drive, kernel, sample_rate)
    return propagate(fine, np.full(len(fine), duration), eps, delta) @ error_rows.T


def _allowed(codes, rounded, top, bound, rng) -> tuple[np.ndarray, np.ndarray]:
    """Flat index and sign of the single steps that stay inside the bound and near the rounding."""
    index = np.tile(np.arange(codes.size), 2)
    sign = np.repeat([1, -1], codes.size)
    moved = codes[index // 2].copy()
    moved[np.arange(len(index)), index % 2] += sign
    near = np.abs(codes.ravel()[index] + sign - rounded.ravel()[index]) <= _FARTHEST
    keep = np.flatnonzero((_reach(moved, bound) <= top) & near)
    if len(keep) > _MOST_MOVES:
        keep = rng.choice(keep, _MOST_MOVES, replace=False)
    return index[keep], sign[keep]


def _candidates(miss: np.ndarray, moves: np.ndarray) -> list[np.ndarray]:
    """One move or two, whose rows added to ``miss`` leave least to first order; best first."""
    single = 2 * moves @ miss + np.sum(moves**2, axis=1)
    pair = single[:, None] + single[None, :] + 2 * moves @ moves.T
    alone = np.argsort(single)[:_TRIED]
    flat = np.argpartition(pair, min(2 * _TRIED, pair.size - 1), axis=None)[: 2 * _TRIED]
    found = [(single[k], np.array([k])) for k in alone]
    found += [(pair.flat[k], np.array(divmod(int(k), len(single)))) for k in flat]
    return [chosen for _, chosen in sorted(found, key=lambda item: item[0])]


def _inside(codes, rounded, top, bound) -> bool:
    near = np.max(np.abs(codes - rounded)) <= _FARTHEST
    return bool(near and np.max(_reach(codes, bound)) <= top)


def _reach(codes, bound) -> np.ndarray:
    return np.hypot(*codes.T) if bound == "circle" else np.max(np.abs(codes), axis=1)
