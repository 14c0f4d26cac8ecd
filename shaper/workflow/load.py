"""The third job: from a waveform file to what an AWG takes, as a folder or over a link."""

from __future__ import annotations

from pathlib import Path

from shaper.awg.files import read_file, sha256
from shaper.awg.folder import write_folder
from shaper.errors import InputError
from shaper.job import parse_job
from shaper.pulse import Pulse, Waveform

_MAX_WAVEFORM_BYTES = 2**31


def chosen_pulses(waveform: Waveform, names: list[str] | None, where: str) -> dict[str, Pulse]:
    """The pulses of these names, in this order; all of the file for None.

    Raises:
        InputError: for a name that the file does not hold, or that comes twice.
    """
    for name in names or ():
        if name not in waveform.pulses:
            raise InputError(
                f"{where}: expected a pulse among {', '.join(waveform.pulses)}, got {name!r}"
            )
        if names.count(name) > 1:
            raise InputError(f"{where}: pulse {name!r} was asked for more than once")
    return {name: waveform.pulses[name] for name in names or waveform.pulses}


def load_into_folder(
    path: str | Path,
    folder: str | Path,
    *,
    names: list[str] | None = None,
    layout: str = "apart",
    byte_order: str = "big",
) -> dict:
    """Write pulses of a waveform file as IEEE 488.2 blocks and CSV, read back and compared.

    Granularity and minimum length come from the job that the file carries.

    Args:
        path: waveform file.
        folder: where to; made if it is not there.
        names: which pulses; all for None.
        layout, byte_order: see ``shaper.awg.folder.write_folder``.
    Returns:
        The manifest, as it stands in the folder.
    Raises:
        InputError, FileError, ReadBackError: as their names say.
    """
    from shaper.store import load_waveform

    waveform = load_waveform(path)
    fingerprint = sha256(read_file(Path(path), _MAX_WAVEFORM_BYTES))
    return waveform_into_folder(
        waveform,
        folder,
        names=names,
        layout=layout,
        byte_order=byte_order,
        source={"file": Path(path).name, "sha256": fingerprint},
    )


def waveform_into_folder(
    waveform: Waveform,
    folder: str | Path,
    *,
    names: list[str] | None = None,
    layout: str = "apart",
    byte_order: str = "big",
    source: dict | None = None,
) -> dict:
    """``load_into_folder`` for a waveform in memory; ``source`` says which file it came from."""
    source = source or {}
    pulses = chosen_pulses(waveform, names, str(source.get("file", "waveform")))
    job = parse_job(waveform.job_text, "job in the waveform file")
    provenance = source | {
        "title": waveform.title,
        "created": waveform.created,
        "status": waveform.status,
        "target": job.target_name,
        "infidelity_dac": {name: waveform.scores[name].dac for name in pulses},
    }
    return write_folder(
        folder,
        pulses,
        granularity=job.granularity,
        minimum=job.min_samples,
        layout=layout,
        byte_order=byte_order,
        provenance=provenance,
    )
