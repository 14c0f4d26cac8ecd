"""The I/Q mixer: imbalance, skew and offset corrected before the codes; a digital carrier.

``out = (I + d_I) cos wt - g (Q + d_Q) sin(wt + phi)``: the Q arm has gain ``g``, its quadrature is
off by ``phi``, both arms leak an offset. In the rotating frame that is ``M ([I; Q] + d)`` with
``M = [[1, -g sin phi], [0, g cos phi]]``. The correction undoes it exactly, and needs headroom:
what is then played is to be checked against the DAC's limits again.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from shaper.errors import InputError, SafetyError

_LARGEST_PHASE = np.pi / 4  # rad; further off than this the two arms are not a mixer


@dataclass(frozen=True)
class Calibration:
    """Measured faults of a mixer, all zero for a perfect one.

    Attributes:
        gain: Q arm over I arm.
        phase: rad. How far the Q arm is ahead of a right angle.
        offset_i, offset_q: rad/s. What leaks with zero at the inputs.
        skew: s. By how much the Q arm is later than the I arm.
    """

    gain: float = 1.0
    phase: float = 0.0
    offset_i: float = 0.0
    offset_q: float = 0.0
    skew: float = 0.0

    def __post_init__(self):
        if not (np.isfinite(self.gain) and self.gain > 0):
            raise InputError(f"gain: expected a positive ratio, got {self.gain:g}")
        if not abs(self.phase) < _LARGEST_PHASE:
            raise InputError(
                f"phase: expected below {np.degrees(_LARGEST_PHASE):g} degrees, "
                f"got {np.degrees(self.phase):g} degrees"
            )
        for name in ("offset_i", "offset_q", "skew"):
            if not np.isfinite(getattr(self, name)):
                raise InputError(f"{name}: expected a finite number, got {getattr(self, name)}")

    @property
    def matrix(self) -> np.ndarray:
        """[2, 2]: ``M``, from the inputs to the quadratures at the qubit."""
        return np.array(
            [
                [1.0, -self.gain * np.sin(self.phase)],
                [0.0, self.gain * np.cos(self.phase)],
            ]
        )

    @property
    def offset(self) -> np.ndarray:
        """[2] rad/s."""
        return np.array([self.offset_i, self.offset_q])


def mixed(drive: np.ndarray, calibration: Calibration) -> np.ndarray:
    """What the mixer makes of its inputs, skew aside: ``M (drive + offset)``, [sample, 2]."""
    return (np.asarray(drive, dtype=float) + calibration.offset) @ calibration.matrix.T


def corrected(
    drive: np.ndarray, calibration: Calibration, sample_rate: float | None = None
) -> np.ndarray:
    """What to play so that ``drive`` comes out of the mixer.

    ``I' = I + Q tan(phi) - d_I``, ``Q' = Q/(g cos phi) - d_Q``; then the Q arm is played earlier by
    the skew, a shift by a fraction of a sample without change of its spectrum.

    Args:
        drive: [sample, 2] rad/s. Leave zeros at both ends if there is a skew.
        sample_rate: samples/s, needed with a skew.
    Returns:
        [sample, 2] rad/s; no bound is applied.
    Source:
        Derived here.
    """
    played = np.linalg.solve(calibration.matrix, np.asarray(drive, dtype=float).T).T
    if calibration.skew:
        if sample_rate is None:
            raise ValueError("sample_rate: expected with a skew")
        played[:, 1] = shifted(played[:, 1], -calibration.skew * sample_rate)
    return played - calibration.offset


def shifted(values: np.ndarray, samples: float) -> np.ndarray:
    """Values delayed by a number of samples, whole or not, within their band; [sample].

    Zero padding on both sides keeps one end from running into the other.
    """
    pad = len(values) + int(np.ceil(abs(samples)))
    padded = np.concatenate([np.zeros(pad), values, np.zeros(pad)])
    turn = np.exp(-2j * np.pi * np.fft.rfftfreq(len(padded)) * samples)
    return np.fft.irfft(np.fft.rfft(padded) * turn, len(padded))[pad : pad + len(values)]


def arrived(
    drive: np.ndarray, calibration: Calibration, sample_rate: float, cells: int
) -> np.ndarray:
    """The mixer's output under the held samples, skew and all, as cell means.

    Args:
        drive: [sample, 2] rad/s, played.
        cells: per sample.
    Returns:
        [sample * cells, 2] rad/s; the Q arm moved by the skew, cut at the end of the waveform.
    """
    held = np.repeat(np.asarray(drive, dtype=float), cells, axis=0)
    edges = np.arange(len(held) + 1) / cells
    area = np.concatenate([[0], np.cumsum(held[:, 1])]) / cells
    late = np.interp(edges - calibration.skew * sample_rate, edges, area)
    return mixed(np.stack([held[:, 0], np.diff(late) * cells], -1), calibration)


def image_rejection(calibration: Calibration) -> float:
    """Power of the wanted sideband over the image, in dB, infinite for a perfect mixer.

    ``z_eff = a z + b z*`` with ``a, b = (1 +- g e^(+-j phi))/2``.
    """
    turn = calibration.gain * np.exp(1j * calibration.phase)
    image = abs(1 - turn)
    return float(20 * np.log10(abs(1 + turn) / image)) if image else float("inf")


def require_headroom(played: np.ndarray, full_scale: float, bound: str) -> None:
    """Refuse what the correction has pushed over the limit.

    Raises:
        SafetyError: says by how much the drive has to come down.
    """
    reach = np.hypot(*played.T) if bound == "circle" else np.max(np.abs(played), axis=1)
    peak = float(np.max(reach))
    if not peak <= full_scale * (1 + 1e-12):
        raise SafetyError(
            f"mixer correction: expected at most {full_scale:.6g} rad/s after it, got {peak:.6g}; "
            f"lower rabi_max by {1 - full_scale / peak:.2%} to make room"
        )


def upconverted(
    drive: np.ndarray, sample_rate: float, frequency: float, *, first: int = 0, phase: float = 0.0
) -> np.ndarray:
    """The drive on a digital intermediate frequency: ``z e^(i (w t + phase))``, hold undone.

    Time is that of the sample's middle, counted from the phase reference, not from the pulse: a
    pulse that begins at sample ``first`` after it keeps step with all others. The gain makes good
    what the zero-order hold loses at this frequency.

    Args:
        drive: [sample, 2] rad/s.
        frequency: Hz, either sign, below half the sample rate; the local oscillator then stands at
            carrier minus ``frequency``.
    Returns:
        [sample, 2] rad/s.
    Raises:
        InputError: if the frequency does not fit the sample rate.
    """
    if not abs(frequency) < sample_rate / 2:
        raise InputError(
            f"intermediate frequency: expected below half the sample rate = "
            f"{sample_rate / 2e6:g} MHz, got {frequency / 1e6:g} MHz"
        )
    time = (first + np.arange(len(drive)) + 0.5) / sample_rate
    turn = np.exp(1j * (2 * np.pi * frequency * time + phase))
    z = np.asarray(drive) @ np.array([1, 1j]) * turn / np.sinc(frequency / sample_rate)
    return np.stack([z.real, z.imag], axis=-1)


def arrived_at_carrier(
    drive: np.ndarray,
    calibration: Calibration,
    sample_rate: float,
    cells: int,
    frequency: float,
    *,
    first: int = 0,
    phase: float = 0.0,
) -> np.ndarray:
    """``arrived`` on an intermediate frequency, seen from the carrier, as exact cell means.

    Each arm is turned back while it is held: the late one changes within a cell, where a product
    of means would not be the mean of the product.

    Args:
        drive: [sample, 2] rad/s, played.
        cells: per sample.
        frequency, phase, first: as of ``upconverted``.
    Returns:
        [sample * cells, 2] rad/s.
    """
    played = np.asarray(drive, dtype=float) + calibration.offset
    shift = calibration.skew * sample_rate
    turn = 2 * np.pi * frequency / sample_rate
    start = np.exp(-1j * (turn * first + phase))
    arms = [
        _turned_means(values, late, leak, turn, cells)
        for values, late, leak in zip(played.T, (0.0, shift), calibration.offset, strict=True)
    ]
    z = start * (np.array([1, 1j]) @ calibration.matrix @ np.stack(arms))
    return np.stack([z.real, z.imag], axis=-1)


def _turned_means(values, late, outside, turn, cells) -> np.ndarray:
    """[sample * cells] complex: cell means of ``held(t - late) e^(-i turn t)``, t in samples."""
    count = len(values)
    pad = 1 + abs(late)
    edges = np.concatenate([[-pad], np.arange(count + 1) + late, [count + pad + abs(late)]])
    values = np.concatenate([[outside], values, [outside]])

    def area(begin, end):  # of the turning one
        return (
            (end - begin)
            * np.sinc(turn * (end - begin) / (2 * np.pi))
            * np.exp(-0.5j * turn * (begin + end))
        )

    before = np.concatenate([[0], np.cumsum(values * area(edges[:-1], edges[1:]))])
    at = np.arange(count * cells + 1) / cells
    piece = np.searchsorted(edges, at, side="right") - 1
    total = before[piece] + values[piece] * area(edges[piece], at)
    return np.diff(total) * cells
