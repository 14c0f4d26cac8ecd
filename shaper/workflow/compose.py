"""A waveform file without a search: composite pulses of the library for a job."""

from __future__ import annotations

from collections.abc import Sequence

from shaper.composite.compose import Loadable, library_pulses
from shaper.errors import InputError
from shaper.job import Job
from shaper.pulse import Waveform
from shaper.workflow.assemble import assemble

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
    return assemble(job, pulses, "composite", _LIBRARIES)
