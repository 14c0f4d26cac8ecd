"""The record that every later room speaks of: one waveform on the sample grid, and its origin."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from shaper.drive import dac


@dataclass(frozen=True)
class Pulse:
    """A waveform as it would be loaded.

    Attributes:
        origin: "optimized" or "composite".
        source: citation, or "".
        drive: [segment, 2] rad/s. Wx and Wy, constant over each segment.
        samples: [segment] whole DAC samples of each segment.
        codes: [sample, 2] int16. What the DAC plays (I, Q), unpadded.
        full_scale: rad/s of the largest code.
        bits: DAC resolution, sign included.
        sample_rate: samples per second.
    """

    origin: str
    source: str
    drive: np.ndarray
    samples: np.ndarray
    codes: np.ndarray
    full_scale: float
    bits: int
    sample_rate: float

    @property
    def segment_durations(self) -> np.ndarray:
        """[segment] s."""
        return self.samples / self.sample_rate

    @property
    def duration(self) -> float:
        """Length of the waveform, s."""
        return float(np.sum(self.samples)) / self.sample_rate

    @property
    def played(self) -> tuple[np.ndarray, np.ndarray]:
        """What the codes make of it: drive [run, 2] rad/s and duration [run] s of equal codes."""
        changes = np.any(np.diff(self.codes, axis=0) != 0, axis=1)
        starts = np.concatenate([[0], 1 + np.flatnonzero(changes)])
        lengths = np.diff(np.concatenate([starts, [len(self.codes)]]))
        drive = dac.decode(self.codes[starts], self.full_scale, self.bits)
        return drive, lengths / self.sample_rate

    @property
    def peak(self) -> float:
        """Largest amplitude sqrt(Wx^2 + Wy^2) of the codes, rad/s."""
        return float(np.max(np.hypot(*dac.decode(self.codes, self.full_scale, self.bits).T)))

    @property
    def rms(self) -> float:
        """Root mean square amplitude of the codes over the duration, rad/s."""
        return float(np.sqrt(self.energy / self.duration))

    @property
    def energy(self) -> float:
        """Integral of (Wx^2 + Wy^2) dt of the codes, rad^2/s: what heats line and coil."""
        drive, durations = self.played
        return float(np.sum(np.sum(drive**2, axis=1) * durations))


def make_pulse(
    drive: np.ndarray,
    samples: np.ndarray,
    *,
    full_scale: float,
    bits: int,
    bound: str,
    sample_rate: float,
    origin: str,
    source: str = "",
) -> Pulse:
    """A pulse from its segments; the codes follow from the drive.

    Args:
        drive: [segment, 2] rad/s.
        samples: [segment] whole samples, each at least 1.
    Raises:
        SafetyError: if the drive exceeds the bound.
        ValueError: if shapes disagree or a segment has no sample.
    """
    drive, samples = np.asarray(drive, dtype=float), np.asarray(samples, dtype=int)
    if drive.shape != (len(samples), 2) or len(samples) == 0 or np.any(samples < 1):
        raise ValueError(
            "segments: expected [n, 2] rates and n whole sample counts of at least 1, "
            f"got shapes {drive.shape} and {samples.shape}"
        )
    codes = np.repeat(dac.encode(drive, full_scale, bits, bound), samples, axis=0)
    return Pulse(origin, source, drive, samples, codes, full_scale, bits, sample_rate)


@dataclass(frozen=True)
class Score:
    """Infidelity of one pulse against the job's target, unitless.

    Attributes:
        nominal: without errors, the float waveform.
        mean: over the tolerance box, the float waveform.
        worst: over the tolerance box, the float waveform.
        dac: without errors, recomputed from the integer codes.
        dac_mean: over the tolerance box, from the codes.
        dac_worst: over the tolerance box, from the codes.
        guaranteed: proved upper bound of dac_worst over every point of the box; None: not proved.
    """

    nominal: float
    mean: float
    worst: float
    dac: float
    dac_mean: float
    dac_worst: float
    guaranteed: float | None = None


@dataclass(frozen=True)
class Waveform:
    """All that a waveform file holds.

    Attributes:
        title: free text, from the job.
        job_text: the job file, TOML.
        created: ISO 8601, UTC.
        software: package and library versions.
        seed: of the random starts.
        status: of the search: "converged", "step_limit", "stalled", "interrupted", "nonfinite"
            or "composite" (no search).
        target: [4] quaternion.
        error_rows: [k, 4] unitless; infidelity is ``error_scale |error_rows q|^2``.
        error_scale: unitless.
        pulses: by name.
        scores: by name, for the same names.
        history: tables about the search, by name.
        history_attrs: name to text or number, about the search.
        evidence: tables about the pulses, by name.
        notes: free text.
    """

    title: str
    job_text: str
    created: str
    software: str
    seed: int
    status: str
    target: np.ndarray
    error_rows: np.ndarray
    error_scale: float
    pulses: dict[str, Pulse]
    scores: dict[str, Score]
    history: dict[str, Table] = field(default_factory=dict)
    history_attrs: dict[str, str | int | float] = field(default_factory=dict)
    evidence: dict[str, Table] = field(default_factory=dict)
    notes: str = ""


@dataclass(frozen=True)
class Table:
    """A named-axis array with a unit, for history and evidence.

    Attributes:
        values: [*axes] float64 or int64; nan where there is no value.
        axes: name of each axis, e.g. ("start", "iteration").
        units: "1", "s", "rad/s".
        long_name: what it is, in words.
    """

    values: np.ndarray
    axes: tuple[str, ...]
    units: str
    long_name: str
