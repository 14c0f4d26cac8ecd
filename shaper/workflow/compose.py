"""A waveform file without a search: composite pulses of the library for a job."""

from __future__ import annotations

import datetime
import platform
from collections.abc import Sequence
from importlib.metadata import version

from shaper import __version__
from shaper.composite.compose import Loadable, library_pulses
from shaper.errors import InputError
from shaper.evidence.score import score
from shaper.job import Job
from shaper.pulse import Waveform

_LIBRARIES = ("numpy", "scipy", "h5py")


def compose(job: Job, names: Sequence[str] = ("all",)) -> Waveform:
    """The waveform record of composite pulses for a job, on its sample grid and scored.

    Args:
        names: of the library, or "all" of it; the first one stands first in the file.
    Raises:
        InputError: for a name that the library does not have for this target, or if the target
            needs no pulse.
    """
    found: dict[str, Loadable] = library_pulses(job, None if "all" in names else list(names))
    if not found:
        raise InputError(
            f"{job.target_name}: expected a target that needs a pulse; "
            "shift the phase of all later pulses instead"
        )
    pulses = {name: loadable.pulse for name, loadable in found.items()}
    return Waveform(
        title=job.title,
        job_text=job.text,
        created=datetime.datetime.now(datetime.UTC).isoformat(timespec="seconds"),
        software=_software(),
        seed=job.seed,
        status="composite",
        target=job.target.quaternion,
        error_rows=job.target.error_rows,
        error_scale=job.target.scale,
        pulses=pulses,
        scores={name: score(pulse, job) for name, pulse in pulses.items()},
    )


def _software() -> str:
    """Versions of everything that the numbers came through."""
    libraries = ", ".join(f"{name} {version(name)}" for name in _LIBRARIES)
    return f"shaper {__version__}, Python {platform.python_version()}, {libraries}"
