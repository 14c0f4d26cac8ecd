"""``shaper load``: a waveform into a folder, ready for an AWG."""

from __future__ import annotations

import json
import sys


def add(commands):
    """Declare the command's arguments."""
    command = commands.add_parser(
        "load",
        help="write waveforms as an AWG takes them",
        description="Write the pulses of a waveform file as int16 codes, padded with zeros to the "
        "granularity and minimum length of its job: raw IEEE 488.2 blocks, a CSV table and a "
        "manifest with fingerprints. Everything is read back and compared (exit code 5 if it "
        "differs).",
    )
    command.add_argument("file", metavar="FILE.h5", help="waveform file")
    command.add_argument("--folder", metavar="DIR", required=True, help="where to write")
    command.add_argument(
        "--pulse",
        metavar="NAME",
        action="append",
        help="which pulse (repeat for more; default: all that the file holds)",
    )
    command.add_argument(
        "--layout",
        choices=("apart", "interleaved"),
        default="apart",
        help="apart: NAME.i.block and NAME.q.block (default); interleaved: NAME.iq.block with "
        "I0, Q0, I1, Q1, ...",
    )
    command.add_argument(
        "--byte-order",
        choices=("big", "little"),
        default="big",
        help="of the words in the blocks (default: big, most significant byte first)",
    )
    command.add_argument("--json", action="store_true", help="print one JSON object")
    return command


def run(args) -> int:
    """Run it; returns the exit code."""
    from shaper.workflow.load import load_into_folder

    manifest = load_into_folder(
        args.file,
        args.folder,
        names=args.pulse,
        layout=args.layout,
        byte_order=args.byte_order,
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
        print(f"caution: {note}", file=sys.stderr)
    return 0
