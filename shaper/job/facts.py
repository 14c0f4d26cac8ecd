"""What a job says beyond the drive, in SI: line, mixer, noise, wishes for the shape."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path


@dataclass(frozen=True)
class LineFacts:
    """What the job knows of the drive line; ``shaper.drive.line`` makes a model of it."""

    kind: str
    bandwidth: float | None  # Hz
    file: Path | None
    ports: tuple[int, int]  # to, from


@dataclass(frozen=True)
class MixerFacts:
    """Calibrated mixer faults: Q gain, quadrature error (rad), offsets (rad/s), skew (s)."""

    gain: float
    phase: float
    offset_i: float
    offset_q: float
    skew: float


@dataclass(frozen=True)
class NoiseFacts:
    """Slow noise: rms detuning (rad/s), rms relative amplitude; file of a spectrum, or None."""

    detuning_sigma: float
    amplitude_sigma: float
    detuning_spectrum: Path | None


@dataclass(frozen=True)
class Shape:
    """Wishes for the look of the waveform: weights, a band (Hz) or None, a rise time (s)."""

    smoothness: float
    max_bandwidth: float | None
    band_weight: float
    rise: float
