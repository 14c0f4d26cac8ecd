"""What the job says of line, mixer and intermediate frequency, as the path that samples take."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np

from shaper.bench import error_grid, line_of
from shaper.drive import dac, mixer
from shaper.drive import line as lines
from shaper.drive.line import Line
from shaper.drive.mixer import Calibration
from shaper.drive.path import Path
from shaper.drive.polish import polish
from shaper.drive.ripple import Holding, counteracted
from shaper.errors import InputError, SafetyError
from shaper.job import Job
from shaper.pulse import Pulse

_SHARE_OF_REACH = 0.25  # of the line's memory; by then a millionth has become a thirtieth
_POLISH_POINTS = 3  # per axis of the tolerance box
_LEAST_SHARE = 0.1  # of the bound; a drive weaker than that is not the one that was asked for


def path_of(job: Job) -> Path:
    """All that stands between the DAC's samples and the qubit of a job.

    Raises:
        InputError: as ``line_of``, or if the mixer's calibration is none.
    """
    facts = job.mixer
    measured = Calibration(facts.gain, facts.phase, facts.offset_i, facts.offset_q, facts.skew)
    return Path(
        calibration=None if measured == Calibration() else measured,
        intermediate_frequency=job.intermediate_frequency / (2 * math.pi),
        line=line_of(job),
    )


def play(
    job: Job,
    drive: np.ndarray,
    samples: np.ndarray,
    origin: str,
    source: str = "",
    polished: bool = False,
) -> Pulse:
    """A pulse of the job's bench from the drive that is wanted: what the DAC has to play for it.

    Predistorted where the job corrects by the inverse line, put on the intermediate frequency,
    corrected for the mixer, held within the bound after all that, rounded. The pulse keeps the
    wanted drive beside the codes; polished, that is the drive bent against what turns within the
    held samples.

    Args:
        drive: [segment, 2] rad/s, wanted at the mixer's output; with ``correction = "inverse"``
            at the qubit.
        samples: [segment] whole samples of each.
        polished: whether the drive is bent against ripple, where there is some, and the codes are
            searched once more, if the job says so.
    Raises:
        SafetyError: if the corrections lift the drive over the bound.
        InputError: if the job asks for a polish through a mixer or an intermediate frequency.
    """
    path = path_of(job)
    drive, samples = np.asarray(drive, dtype=float), np.asarray(samples, dtype=int)
    if path.line is not None and job.correction == "inverse":
        drive = np.concatenate([drive, np.zeros((1, 2))])
        samples = np.append(samples, _settling(path.line, job))
    if polished and path.ripples:
        drive = _counteracted(job, path, drive, samples)
    played = _before_rounding(job, path, drive, samples)
    if not path.straight:
        mixer.require_headroom(played, job.rabi_max, job.bound)
    codes = dac.encode(played, job.rabi_max, job.dac_bits, job.bound)
    if polished and job.polish:
        codes = _polished(job, path, codes, played)
    return Pulse(origin, source, drive, samples, codes, job.rabi_max, job.dac_bits, job.sample_rate)


def for_search(job: Job) -> Job:
    """The job with the part of its bound that a search may use: the corrections need the rest.

    Raises:
        SafetyError: if not even a tenth of the bound is left.
    """
    share = path_of(job).share(job.sample_rate, job.rabi_max, job.bound)
    if share < _LEAST_SHARE:
        raise SafetyError(
            f"mixer correction: expected to leave at least {_LEAST_SHARE:.0%} of rabi_max for the "
            f"drive, got {max(share, 0):.1%}; calibrate the mixer, or lower the intermediate "
            "frequency"
        )
    return job if share == 1 else replace(job, rabi_max=share * job.rabi_max)


def share_that_fits(job: Job, drive: np.ndarray, samples: np.ndarray) -> float:
    """The largest share of this drive, in twentieths, that the corrections leave within the bound.

    One where nothing is corrected. Arguments as of ``play``.
    Raises:
        SafetyError: if not even a tenth fits.
    """
    for twentieths in range(20, 1, -1):
        try:
            play(job, drive * twentieths / 20, samples, "trial")
        except SafetyError as error:
            refusal = error
        else:
            return twentieths / 20
    raise refusal


def _before_rounding(job: Job, path: Path, drive: np.ndarray, samples: np.ndarray) -> np.ndarray:
    """[sample, 2] rad/s: what the DAC would play if it had no grain.

    With the inverse line the last segment is the time in which the tail is cut short.
    """
    spread = np.repeat(drive, samples, axis=0)
    if path.line is not None and job.correction == "inverse":
        extra = int(samples[-1])
        spread = lines.inverse(path.line, spread[:-extra], 1 / job.sample_rate, extra)
    return path.to_play(spread, job.sample_rate)


def arriving(job: Job, pulse: Pulse, cells: int | None = None) -> tuple[np.ndarray, np.ndarray]:
    """What the codes of a pulse make at the qubit, through the whole path of the job.

    Args:
        cells: per sample, where the path is not straight; default: as many as the path asks for.
    Returns:
        Drive [cell, 2] rad/s and durations [cell] s.
    """
    path = path_of(job)
    if path.straight:
        return pulse.played
    codes = dac.decode(pulse.codes, pulse.full_scale, pulse.bits)
    drive, cell = path.at_qubit(codes, pulse.sample_rate, cells or path.cells(pulse.sample_rate))
    return drive, np.full(len(drive), cell)


def wanted(job: Job, pulse: Pulse, cells: int | None = None) -> tuple[np.ndarray, np.ndarray]:
    """What the pulse would make at the qubit if the DAC had no grain: as ``arriving``."""
    path = path_of(job)
    if path.straight:
        return pulse.drive, pulse.segment_durations
    played = _before_rounding(job, path, pulse.drive, pulse.samples)
    drive, cell = path.at_qubit(played, pulse.sample_rate, cells or path.cells(pulse.sample_rate))
    return drive, np.full(len(drive), cell)


def _settling(line: Line, job: Job) -> int:
    """Samples after the pulse in which the predistortion may cut the tail short."""
    whole = max(1, math.ceil(line.reach * _SHARE_OF_REACH * job.sample_rate))
    return -(-whole // job.granularity) * job.granularity


def _counteracted(job: Job, path: Path, drive: np.ndarray, samples: np.ndarray) -> np.ndarray:
    """The drive bent so that ripple on the way leaves the pulse what it is, within the bound."""
    rate, cells = job.sample_rate, path.cells(job.sample_rate)
    real = replace(path, line=None) if job.correction == "none" else path
    smooth = Path(line=real.line)
    starts = np.cumsum(samples) - samples

    def through(way: Path):
        return lambda drive: way.at_qubit(_before_rounding(job, way, drive, samples), rate, cells)

    def room(drive):
        played = np.abs(_before_rounding(job, path, drive, samples))
        reach = np.hypot(*played.T) if job.bound == "circle" else np.max(played, axis=1)
        return 1 - np.maximum.reduceat(reach, starts) / job.rabi_max

    holding = []
    for group in job.groups:
        grid = error_grid(job.for_group(group), _POLISH_POINTS, _POLISH_POINTS)
        target = group.target
        holding.append(Holding(grid.eps, grid.delta, target.error_rows, target.scale))
    seen = path.line if job.correction == "model" else None
    kernel = _kernel(job, seen, np.repeat(drive, samples, axis=0))
    return counteracted(
        drive, samples, rate, through(smooth), through(real), room, tuple(holding), kernel
    )


def _kernel(job: Job, line: Line | None, played: np.ndarray) -> np.ndarray | None:
    if line is None:
        return None
    step = 1 / job.sample_rate
    return lines.taps(line, step, lines.cells_needed(line, played, step)).kernel


def _polished(job: Job, path: Path, codes: np.ndarray, played: np.ndarray) -> np.ndarray:
    if path.calibration is not None or path.intermediate_frequency:
        raise InputError(
            "drive.polish: expected false with a mixer correction or an intermediate frequency, "
            "got true"
        )
    grid = error_grid(job, _POLISH_POINTS, _POLISH_POINTS)
    return polish(
        codes,
        played,
        job.target,
        full_scale=job.rabi_max,
        bits=job.dac_bits,
        bound=job.bound,
        sample_rate=job.sample_rate,
        eps=grid.eps,
        delta=grid.delta,
        kernel=_kernel(job, path.line, played),
        seed=job.seed,
    ).codes
