"""``shaper load``: waveforms into a folder, or into the memory of an AWG. Nothing goes on."""

from __future__ import annotations

import json
import sys

from shaper.errors import InputError


def add(commands):
    """Declare the command's arguments."""
    command = commands.add_parser(
        "load",
        help="write waveforms as an AWG takes them, to a folder or into its memory",
        description="Write pulses of waveform files as an AWG takes them. With --folder: raw "
        "IEEE 488.2 blocks, CSV and a manifest, padded to the granularity and minimum length of "
        "the job. With --to and --profile: into the memory of an instrument, in a careful order, "
        "with a load record. Everything is read back and compared (exit code 5 if it differs). "
        "No output is ever switched on.",
        epilog="Example: shaper load z90.h5:shaped --folder out. "
        "In a set from several files a trace is called after its file; "
        "FILE.h5:PULSE=TRACE names it. If one trace of a set fails, those loaded before it are "
        "removed again; what --replace has overwritten is not restored.",
    )
    command.add_argument(
        "file", metavar="FILE.h5[:PULSE[=TRACE]]", nargs="+", help="waveform file, or one pulse"
    )
    command.add_argument(
        "--pulse",
        metavar="NAME[=TRACE]",
        action="append",
        help="which pulse (repeat for more; default: all that the file holds)",
    )
    command.add_argument("--json", action="store_true", help="print one JSON object")
    offline = command.add_argument_group("into a folder")
    offline.add_argument("--folder", metavar="DIR", help="where to write")
    offline.add_argument(
        "--layout",
        choices=("apart", "interleaved"),
        help="apart: NAME.i.block and NAME.q.block (default); interleaved: NAME.iq.block with "
        "I0, Q0, I1, Q1, ...",
    )
    offline.add_argument(
        "--byte-order",
        choices=("big", "little"),
        help="of the words in the blocks (default: big, most significant byte first)",
    )
    online = command.add_argument_group("into an instrument")
    online.add_argument(
        "--to", metavar="ADDRESS", help="host:port, or a VISA resource (extra: visa)"
    )
    online.add_argument("--profile", metavar="P.toml", help="instrument profile, with its limits")
    online.add_argument("--prefix", metavar="TEXT", default="", help="before every trace name")
    online.add_argument(
        "--scale",
        metavar="X",
        type=float,
        default=1.0,
        help="lower the amplitude, for a first look; the resulting rotation is stated",
    )
    online.add_argument(
        "--repetition-Hz",
        metavar="RATE",
        type=float,
        help="pulses played per second, all together, for mean power and duty cycle "
        "(default: without a gap, the worst case)",
    )
    online.add_argument("--replace", action="store_true", help="overwrite traces of these names")
    online.add_argument(
        "--resume", action="store_true", help="keep what reading back proves to be there already"
    )
    online.add_argument(
        "--dry-run", action="store_true", help="show every message and its bytes; open no link"
    )
    online.add_argument(
        "--record",
        metavar="R.load.json",
        help="load record (default: beside the first file, with the time in its name)",
    )
    return command


def run(args) -> int:
    """Run it; returns the exit code."""
    online = args.to is not None or args.dry_run
    if online == (args.folder is not None):
        raise InputError("load: expected either --folder DIR, or --to ADDRESS (or --dry-run)")
    if online and args.profile is None:
        raise InputError("load: expected --profile P.toml with an instrument, got none")
    if online and (args.layout or args.byte_order):
        raise InputError("load: with an instrument, layout and byte order stand in its profile")
    if not online and (
        args.profile
        or args.replace
        or args.resume
        or args.prefix
        or args.record
        or args.scale != 1
        or args.repetition_Hz is not None
    ):
        raise InputError("load: options for an instrument were given with --folder")
    return _into_instrument(args) if online else _into_folder(args)


def _into_folder(args) -> int:
    from shaper.workflow.load import load_into_folder

    if len(args.file) > 1:
        raise InputError(f"load: expected one file with --folder, got {len(args.file)}")
    manifest = load_into_folder(
        args.file[0],
        args.folder,
        names=args.pulse,
        layout=args.layout or "apart",
        byte_order=args.byte_order or "big",
    )
    if args.json:
        print(json.dumps(manifest | {"folder": args.folder}))
        return 0
    for pulse in manifest["pulses"]:
        print(
            f"{pulse['name']}: {pulse['samples']} samples + {pulse['pad_samples']} zeros, "
            f"peak code {pulse['peak_code']} of {pulse['full_scale_code']}"
        )
        for file in pulse["files"]:
            print(f"  {file['file']}  {file['bytes']} bytes  sha256 {file['sha256'][:16]}")
    print(f"read back equal; manifest in {args.folder}")
    for note in manifest["safety"]:
        say(f"caution: {note}")
    return 0


def _into_instrument(args) -> int:
    from shaper.awg.profile import read_profile
    from shaper.workflow import load as job

    profile, fingerprint = read_profile(args.profile)
    plan = job.plan_from(
        args.file,
        profile,
        names=args.pulse,
        prefix=args.prefix,
        scale=args.scale,
        repetition=args.repetition_Hz,
    )
    if args.dry_run:
        return _show(args, plan, job.rehearse(plan))
    path = args.record or job.record_path_for(args.file)
    say(f"record: {path}")
    record = job.load_into_instrument(
        plan,
        args.to,
        path,
        profile_sha256=fingerprint,
        replace=args.replace,
        resume=args.resume,
        say=say,
    )
    if args.json:
        print(json.dumps(record | {"record": str(path)}))
        return 0
    _print_pulses(record["pulses"])
    for trace in record["traces"]:
        print(f"{trace['name']}: {trace['bytes']} bytes, {trace['state']}, read back equal")
    print(f"outputs {record['output']['statement']}")
    return 0


def _show(args, plan, messages) -> int:
    """What a load would send."""
    pulses = list(plan.pulses)
    if args.json:
        listed = [{"text": m.text, "bytes": m.size, "sha256": m.sha256} for m in messages]
        print(json.dumps({"pulses": pulses, "messages": listed, "total_bytes": plan.total_bytes}))
        return 0
    _print_pulses(pulses)
    for message in messages:
        print(f"{message.size:>9} bytes  sha256 {message.sha256[:16]}  {message.text}")
    print(f"{len(messages)} messages, {plan.total_bytes} bytes of waveform; no link was opened")
    return 0


def _print_pulses(pulses: list[dict]) -> None:
    for pulse in pulses:
        found, turn = pulse["exposure"], pulse["rotation"]
        power = found["mean_power_dBm"]
        axis = ", ".join(f"{component:+.4f}" for component in turn["axis"])
        print(
            f"{pulse['pulse']}: {pulse['samples']} samples in {pulse['total_samples']}; "
            f"turns {turn['angle_deg']:.4f} degrees about ({axis})"
        )
        print(
            f"  peak I {found['peak_i_V']:.4g} V, Q {found['peak_q_V']:.4g} V, "
            f"together {found['peak_vector_V']:.4g} V; "
            f"mean power {found['mean_power_mW']:.4g} mW"
            + (f" ({power:.2f} dBm)" if power is not None else "")
            + f"; duty cycle {found['duty_cycle']:.4g}"
            + (" (played without a gap)" if found["continuous"] else "")
        )


def say(text: str) -> None:
    """A line for people, apart from the result."""
    try:
        print(text, file=sys.stderr, flush=True)
    except OSError:  # nobody listens any more: no reason to stop what is being made safe
        pass
