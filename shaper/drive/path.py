"""All that stands between the DAC's samples and the qubit, in the order in which they meet it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from shaper.drive import mixer
from shaper.drive.line import Line, taps, whole

_FEWEST_CELLS = 8  # per sample
_FEWEST_BEHIND_A_LINE = 32  # worst cases of 5e-5 are then right to 0.2 %, with 8 cells to 3 %
_LARGEST_TURN = 0.04  # rad a cell at the intermediate frequency: its own sliver is then 1/250


@dataclass(frozen=True)
class Path:
    """From the samples to the qubit.

    Attributes:
        calibration: of the mixer, or None for a perfect one.
        intermediate_frequency: Hz; zero if the samples stand on the carrier.
        phase: rad, of the intermediate frequency at its reference.
        first: samples from the phase reference to the first one.
        line: behind the mixer, or None.
    """

    calibration: mixer.Calibration | None = None
    intermediate_frequency: float = 0.0
    phase: float = 0.0
    first: int = 0
    line: Line | None = None

    @property
    def straight(self) -> bool:
        """Whether the samples arrive as they are."""
        return self.line is None and not self.intermediate_frequency and self.calibration is None

    @property
    def ripples(self) -> bool:
        """Whether something turns or moves within a sample while it is held."""
        skewed = self.calibration is not None and self.calibration.skew != 0
        return bool(self.intermediate_frequency) or skewed

    def cells(self, sample_rate: float) -> int:
        """Cells per sample, a power of two, in which the drive moves and turns by little."""
        turn = 2 * np.pi * abs(self.intermediate_frequency) / sample_rate
        fewest = _FEWEST_CELLS if self.line is None else _FEWEST_BEHIND_A_LINE
        return max(fewest, 1 << int(np.ceil(np.log2(max(turn / _LARGEST_TURN, 1)))))

    def share(self, sample_rate: float, full_scale: float, bound: str) -> float:
        """Of a bound on the drive: what may be asked for so that what is played keeps the bound.

        Whatever the drive's direction when its sample comes. The overshoot where a skew moves one
        arm by part of a sample is not in it: that depends on the drive.

        Args:
            full_scale: rad/s, radius of the circle or half side of the box.
        Returns:
            At most 1; not positive if the offset alone reaches the bound.
        """
        calibration = self.calibration or mixer.Calibration()
        gain = np.linalg.inv(calibration.matrix) / np.sinc(
            self.intermediate_frequency / sample_rate
        )
        offset = np.abs(calibration.offset) / full_scale
        if bound == "circle":
            left = (1 - np.hypot(*offset)) / np.linalg.norm(gain, 2)
        elif self.intermediate_frequency:  # the corner of the box turns onto each axis
            left = np.min((1 - offset) / (np.sqrt(2) * np.linalg.norm(gain, axis=1)))
        else:
            left = np.min((1 - offset) / np.sum(np.abs(gain), axis=1))
        return min(1.0, float(left))

    def at_qubit(
        self, samples: np.ndarray, sample_rate: float, cells: int
    ) -> tuple[np.ndarray, float]:
        """The drive at the qubit, as means over cells.

        Args:
            samples: [sample, 2] rad/s, what the DAC plays.
            cells: per sample.
        Returns:
            [cell, 2] rad/s, lead and tail of the line included, and the length of a cell (s).
        """
        rate = sample_rate * cells
        calibration = self.calibration or mixer.Calibration()
        if self.intermediate_frequency:
            drive = mixer.arrived_at_carrier(
                samples,
                calibration,
                sample_rate,
                cells,
                self.intermediate_frequency,
                first=self.first,
                phase=self.phase,
            )
        else:
            drive = mixer.arrived(samples, calibration, sample_rate, cells)
        if self.line is not None:
            kernel = taps(self.line, 1 / rate, 1)
            drive = _convolved(drive, kernel.kernel[:, 0])
            # begin and end on whole samples: how long the qubit is left to its detuning must not
            # depend on the cells
            before, after = self.margins(sample_rate)
            tail = kernel.added - kernel.lead
            idle = (before * cells - kernel.lead, after * cells - tail)
            drive = np.pad(drive, (idle, (0, 0)))
        return drive, 1 / rate

    def margins(self, sample_rate: float) -> tuple[int, int]:
        """Whole samples by which the answer begins before and ends after those played."""
        if self.line is None:
            return 0, 0
        return whole(self.line.lead * sample_rate), whole(self.line.reach * sample_rate)

    def to_play(self, drive: np.ndarray, sample_rate: float) -> np.ndarray:
        """What to play for ``drive`` to leave the mixer on the carrier; no bound is applied.

        The line is not touched: it is in the model of the search, or in ``line.inverse``.
        """
        if self.intermediate_frequency:
            drive = mixer.upconverted(
                drive,
                sample_rate,
                self.intermediate_frequency,
                first=self.first,
                phase=self.phase,
            )
        if self.calibration is not None:
            drive = mixer.corrected(drive, self.calibration, sample_rate)
        return np.asarray(drive, dtype=float)


def _convolved(drive: np.ndarray, kernel: np.ndarray) -> np.ndarray:
    """[cell + tap - 1, 2]: ``filtered`` with one cell a tap, for tails of thousands of cells."""
    length = len(drive) + len(kernel) - 1
    size = 1 << (length - 1).bit_length()
    z = np.fft.fft(drive[:, 0] + 1j * drive[:, 1], size) * np.fft.fft(kernel, size)
    z = np.fft.ifft(z)[:length]
    return np.stack([z.real, z.imag], axis=-1)
