"""``shaper compose``: composite pulses as a waveform file, without a search."""

from __future__ import annotations

import json


def add(commands):
    """Declare the command's arguments."""
    command = commands.add_parser(
        "compose",
        help="write composite pulses of the library for a job, without a search",
        description="Write composite pulses for a job as a waveform file: each on the sample grid "
        "as it would really be loaded, with its source. Without --output, list what the library "
        "has for the job's target.",
        epilog="Example: shaper compose configs/z90_robust.toml --pulse BB1 CORPSE --output bb1.h5",
    )
    command.add_argument("job", metavar="JOB.toml", help="job file")
    command.add_argument(
        "--pulse",
        metavar="NAME",
        nargs="+",
        default=["all"],
        help="names of the library (default: all)",
    )
    command.add_argument("--output", metavar="FILE.h5", help="waveform file to write")
    command.add_argument("--json", action="store_true", help="print one JSON object")
    return command


def run(args) -> int:
    """Run it; returns the exit code."""
    from shaper.job import read_job
    from shaper.store import save_waveform
    from shaper.workflow.compose import compose

    waveform = compose(read_job(args.job), args.pulse)
    if args.output:
        save_waveform(args.output, waveform)
    if args.json:
        print(json.dumps(_as_json(waveform) | {"file": args.output}))
    else:
        print(text(waveform))
        if args.output:
            print(f"\n{len(waveform.pulses)} pulses in {args.output}")
    return 0


def text(waveform) -> str:
    """One line a pulse: duration, infidelity, source."""
    from shaper.cli.table import aligned, plain, small
    from shaper.readable import time_unit

    unit, second = time_unit(max(pulse.duration for pulse in waveform.pulses.values()))
    rows = [
        [
            name,
            plain(pulse.duration / second, 6),
            small(waveform.scores[name].dac),
            small(waveform.scores[name].dac_worst),
            pulse.source or "-",
        ]
        for name, pulse in waveform.pulses.items()
    ]
    header = ["pulse", f"duration {unit}", "nominal", "worst", "source"]
    return aligned(header, rows, text_columns=(0, 4))


def _as_json(waveform) -> dict:
    from shaper.units import NS

    return {
        "pulses": [
            {
                "name": name,
                "source": pulse.source,
                "duration_ns": pulse.duration / NS,
                "infidelity": waveform.scores[name].dac,
                "infidelity_worst": waveform.scores[name].dac_worst,
            }
            for name, pulse in waveform.pulses.items()
        ]
    }
