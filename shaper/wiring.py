"""What the job says of line, mixer and intermediate frequency, as the path that samples take."""

from __future__ import annotations

import math

from shaper.drive import line as lines
from shaper.drive.line import Line
from shaper.drive.line_data import read_step_response, read_touchstone
from shaper.drive.mixer import Calibration
from shaper.drive.path import Path
from shaper.job import Job


def line_of(job: Job) -> Line | None:
    """The drive line of a job, or None where it has none.

    Raises:
        InputError: if its file is not what it should be, or its band lies below the pulse's.
    """
    facts = job.line
    if facts.kind == "none":
        return None
    if facts.kind == "first_order":
        line = lines.first_order(facts.bandwidth)
    elif facts.kind == "gaussian":
        line = lines.gaussian(facts.bandwidth)
    elif facts.kind == "step_response":
        line = read_step_response(facts.file, job.sample_rate)
    else:
        carrier = job.carrier / (2 * math.pi)
        line = read_touchstone(facts.file, carrier, job.sample_rate, facts.ports)
    if not job.find_shortest:
        lines.require_band(line, job.duration)
    return line


def path_of(job: Job) -> Path:
    """All that stands between the DAC's samples and the qubit of a job.

    Raises:
        InputError: as ``line_of``, or if the mixer's calibration is none.
    """
    facts = job.mixer
    mixer = Calibration(facts.gain, facts.phase, facts.offset_i, facts.offset_q, facts.skew)
    return Path(
        calibration=None if mixer == Calibration() else mixer,
        intermediate_frequency=job.intermediate_frequency / (2 * math.pi),
        line=line_of(job),
    )
