"""From pulses to the record that a waveform file holds: scores, provenance, target."""

from __future__ import annotations

import datetime
import platform
from importlib.metadata import version

from shaper import __version__
from shaper.evidence.score import score
from shaper.job import Job
from shaper.pulse import Pulse, Waveform


def assemble(
    job: Job,
    pulses: dict[str, Pulse],
    status: str,
    libraries: tuple[str, ...],
    on_levels: bool = False,
    **more,
) -> Waveform:
    """The waveform record of some pulses of one job, each scored on the one grid.

    Args:
        status: of the search, see ``Waveform``.
        libraries: names of the packages that the numbers came through.
        on_levels: whether the scores are those of the job's anharmonic ladder.
        more: further fields of ``Waveform``.
    """
    return Waveform(
        title=job.title,
        job_text=job.text,
        created=datetime.datetime.now(datetime.UTC).isoformat(timespec="seconds"),
        software=_software(libraries),
        seed=job.seed,
        status=status,
        target=job.target.quaternion,
        error_rows=job.target.error_rows,
        error_scale=job.target.scale,
        pulses=pulses,
        scores={name: score(pulse, job, on_levels) for name, pulse in pulses.items()},
        **more,
    )


def _software(libraries: tuple[str, ...]) -> str:
    """Versions of everything that the numbers came through."""
    named = ", ".join(f"{name} {version(name)}" for name in libraries)
    return f"shaper {__version__}, Python {platform.python_version()}, {named}"
