"""The third job: from a waveform file to what an AWG takes, as a folder or over a link."""

from __future__ import annotations

import re
from collections.abc import Callable
from datetime import datetime
from pathlib import Path

from shaper.awg import output
from shaper.awg.files import read_file, sha256
from shaper.awg.folder import write_folder
from shaper.awg.link import open_link, require_address
from shaper.awg.load import begin_record, load
from shaper.awg.plan import Choice, Plan, make_plan
from shaper.awg.profile import Profile, read_profile
from shaper.awg.record import LoadRecord, new_path, read_record, records_in
from shaper.awg.rehearsal import Message, RehearsalLink
from shaper.awg.safety import CHECKLIST, Exposure
from shaper.errors import InputError, SafetyError
from shaper.job import parse_job
from shaper.pulse import Pulse, Waveform
from shaper.store.layout import MAX_FILE_BYTES
from shaper.store.read import decode_waveform

Say = Callable[[str], None]


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
        if names and names.count(name) > 1:
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
    data = read_file(Path(path), MAX_FILE_BYTES)
    waveform, fingerprint = decode_waveform(data, str(path)), sha256(data)
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


def silent(text: str) -> None:
    """Says nothing."""


def choices_from(selections: list[str], names: list[str] | None = None) -> list[Choice]:
    """The pulses of a set, from one or several waveform files.

    Args:
        selections: each ``FILE.h5``, ``FILE.h5:PULSE`` or ``FILE.h5:PULSE=TRACE``.
        names: for the files without a pulse: ``PULSE`` or ``PULSE=TRACE``; all pulses for None.
    Returns:
        One choice per pulse. A trace that was not named is called after its pulse or, in a set
        from several files, after its file (with the pulse, if several of one file are chosen).
    Raises:
        InputError, FileError: as their names say.
    """
    files: dict[Path, list[str]] = {}
    for selection in selections:
        path, pulse = _split_selection(selection)
        files.setdefault(path, []).extend([pulse] if pulse else [])
    found = []
    for path, wanted in files.items():
        data = read_file(path, MAX_FILE_BYTES)
        waveform, fingerprint = decode_waveform(data, str(path)), sha256(data)
        own = dict(_split_name(text) for text in wanted or names or waveform.pulses)
        found += _choices(waveform, path, fingerprint, own, len(files) > 1)
    return found


def _choices(
    waveform: Waveform, path: Path, fingerprint: str, traces: dict[str, str], several: bool
) -> list[Choice]:
    """Choices of one file; ``traces`` maps each pulse to its trace name or to nothing."""
    job = parse_job(waveform.job_text, f"{path}: job")
    found = []
    for name, pulse in chosen_pulses(waveform, list(traces), str(path)).items():
        default = name
        if several:
            default = path.stem if len(traces) == 1 else f"{path.stem}_{name}"
        found.append(
            Choice(
                trace=traces[name] or re.sub(r"[^A-Za-z0-9_]", "_", default),
                pulse=pulse,
                bound=job.bound,
                detuning=job.detuning,
                file=str(path.resolve()),
                file_sha256=fingerprint,
                pulse_name=name,
                target=job.target_name,
                infidelity=waveform.scores[name].dac,
            )
        )
    return found


def _split_selection(text: str) -> tuple[Path, str | None]:
    """``FILE:PULSE=TRACE`` into the file and the rest; a file of that whole name comes first."""
    head, colon, tail = text.rpartition(":")
    if colon and head and re.fullmatch(r"[\w+-]+(=\w+)?", tail) and not Path(text).exists():
        return Path(head), tail
    return Path(text), None


def _split_name(text: str) -> tuple[str, str]:
    pulse, _, trace = text.partition("=")
    return pulse, trace


def load_into_instrument(
    plan: Plan,
    address: str,
    record_path: str | Path,
    *,
    profile_sha256: str = "",
    replace: bool = False,
    resume: bool = False,
    say: Say = silent,
) -> dict:
    """Load a set into an instrument, whole or not at all; see ``shaper.awg.load``.

    Args:
        plan: from ``plan_from`` or ``shaper.awg.plan.make_plan``.
        address: ``host:port``, or a VISA resource.
        record_path: where the load record goes; its folder is looked through for earlier ones.
        replace, resume: see ``shaper.awg.load.load``.
        say: takes lines for people, among them the checklist before the first load of a day.
    Returns:
        The load record.
    Raises:
        ShaperError: its kind says what failed; the record is written in every case.
    """
    require_address(address)
    record_path = Path(record_path)
    earlier = [r for r in records_in(record_path.parent) if r["address"] == address]
    if not any(_is_today(r) for r in earlier):
        say("before the first load of the day:")
        for line in CHECKLIST:
            say(f"  [ ] {line}")
    record = begin_record(plan, record_path, address, profile=_about(plan.profile, profile_sha256))
    load(
        plan,
        lambda: open_link(address, plan.profile.link.timeout_s),
        record,
        replace=replace,
        resume=resume,
        ours=_unfinished(earlier),
        say=say,
    )
    return record.document


def plan_from(
    selections: list[str],
    profile: Profile,
    *,
    names: list[str] | None = None,
    prefix: str = "",
    scale: float = 1.0,
    repetition: float | None = None,
) -> Plan:
    """The plan of a set from waveform files; see ``choices_from`` and ``make_plan``."""
    choices = choices_from(selections, names)
    return make_plan(choices, profile, prefix=prefix, scale=scale, repetition=repetition)


def rehearse(plan: Plan) -> list[Message]:
    """Every message that a load into an empty, healthy instrument would send, without a link."""
    link = RehearsalLink(plan.profile)
    load(plan, lambda: link, begin_record(plan, None, link.address))
    return link.messages


def record_path_for(selections: list[str]) -> Path:
    """Where a load record goes if nobody says: beside the first waveform file."""
    path, _ = _split_selection(selections[0])
    return new_path(path.parent, path.stem)


def _about(profile: Profile, fingerprint: str) -> dict:
    return {"title": profile.title, "sha256": fingerprint}


def _is_today(record: dict) -> bool:
    """Whether a finished load began on this day, local time."""
    try:
        began = datetime.fromisoformat(record["started"]).astimezone()
    except ValueError:
        return False
    return record["status"] == "done" and began.date() == datetime.now().astimezone().date()


def _unfinished(earlier: list[dict]) -> frozenset[str]:
    """Names that loads since the last finished one may have left in the instrument."""
    names = set()
    for record in reversed(earlier):
        if record["status"] == "done":
            break
        names |= {
            t["name"] for t in record["traces"] if t["state"] in ("sending", "loaded", "left")
        }
    return frozenset(names)


def switch_output_on(
    address: str,
    record_path: str | Path,
    profile_path: str | Path,
    confirm: Callable[[list[Exposure]], bool],
    say: Say = silent,
) -> dict:
    """Switch the outputs on, after every check and the word of the person at the bench.

    Args:
        address: of the instrument, the same as in the load record.
        record_path: the load record; the record of this step goes beside it.
        profile_path: the instrument profile.
        confirm: see ``shaper.awg.output.switch_on``.
    Returns:
        The record of this step.
    Raises:
        SafetyError: not this instrument, not this waveform, a limit, or no word.
        ShaperError: everything else.
    """
    require_address(address)
    loaded = read_record(record_path)
    output.require_loaded(loaded, address)
    profile, fingerprint = read_profile(profile_path)
    for pulse in loaded["pulses"]:
        _require_unchanged(pulse, say)
    stem = Path(record_path).name.removesuffix(".load.json")
    path = new_path(Path(record_path).parent, f"{stem}-on", ".output.json")
    record = LoadRecord(
        path,
        address=address,
        profile=_about(profile, fingerprint),
        load_record_started=loaded["started"],
        pulses=loaded["pulses"],
        traces=[],
    )
    say(f"record: {path}")
    output.switch_on(
        loaded,
        profile,
        lambda: open_link(address, profile.link.timeout_s),
        record,
        confirm,
        say,
    )
    return record.document


def _require_unchanged(pulse: dict, say: Say) -> None:
    """SafetyError if the waveform file is another one by now."""
    path = Path(pulse["file"])
    if not path.exists():
        say(f"note: {path} is not there any more; the fingerprint in the load record stands")
    elif sha256(read_file(path, MAX_FILE_BYTES)) != pulse["file_sha256"]:
        raise SafetyError(f"{path}: has changed since it was loaded; load it again")


def switch_output_off(address: str, profile_path: str | Path | None = None) -> str:
    """Switch the outputs off: those of the profile, or 1 and 2 by SCPI-1999 without one.

    Returns:
        The statement, when the instrument has confirmed.
    Raises:
        ShaperError: if it has not; the text says so.
    """
    require_address(address)
    profile = read_profile(profile_path)[0] if profile_path else output.standard_profile()
    record = LoadRecord(None, address=address, pulses=[], traces=[])
    return output.switch_off(profile, lambda: open_link(address, profile.link.timeout_s), record)
