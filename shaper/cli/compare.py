"""``shaper compare``: the pulses of a waveform file side by side."""

from __future__ import annotations

import json
import sys


def add(commands):
    """Declare the command's arguments."""
    command = commands.add_parser(
        "compare",
        help="score the pulses of a waveform file side by side",
        description="Score every pulse of a waveform file on one grid over the tolerance box of "
        "its job, as the DAC codes play it: duration and its ratio to the shortest possible, "
        "peak, rms, energy, and average gate infidelity without errors, mean and worst.",
    )
    command.add_argument("file", metavar="FILE.h5", help="waveform file")
    command.add_argument("--json", action="store_true", help="print one JSON object")
    command.add_argument(
        "--figure", metavar="FILE", help="draw waveforms and cuts (.png, .svg, .pdf)"
    )
    return command


def run(args) -> int:
    """Run it; returns the exit code."""
    from shaper.store import load_waveform
    from shaper.workflow.compare import as_json, compare, draw

    comparison = compare(load_waveform(args.file))
    if args.figure:
        draw(comparison, args.figure)
        print(f"shaper: figure in {args.figure}", file=sys.stderr)
    print(json.dumps(as_json(comparison)) if args.json else text(comparison))
    return 0


def text(comparison) -> str:
    """The comparison as people read it: what was asked, then one line a pulse."""
    from shaper.cli.table import aligned, plain, rate_unit, small, time_unit

    job, rows = comparison.job, comparison.rows
    time, second = time_unit(max(row.duration for row in rows))
    rate, hertz = rate_unit(job.rabi_max)
    proved = any(row.guaranteed is not None for row in rows)
    header = ["pulse", f"duration {time}", "/ limit", f"peak {rate}", f"rms {rate}"]
    header += ["energy rad^2/" + time, "nominal", "mean", "worst"] + ["guaranteed"] * proved
    table = [
        [
            row.name,
            plain(row.duration / second, 6),
            plain(row.over_limit),
            plain(row.peak / hertz),
            plain(row.rms / hertz),
            plain(row.energy * second),
            small(row.nominal),
            small(row.mean),
            small(row.worst),
        ]
        + [small(row.guaranteed)] * proved
        for row in rows
    ]
    kind = "time-optimal" if job.bound == "circle" else "best known"
    width = job.detuning_tolerance
    box_rate, box_hertz = rate_unit(width)
    box = (
        f"amplitude +-{100 * job.amplitude_tolerance:g} %, "
        f"detuning +-{width / box_hertz:g} {box_rate}"
        if job.has_tolerance
        else "none: nominal, mean and worst are one"
    )
    return "\n".join(
        [
            *([job.title] if job.title else []),
            f"target     {job.target_name}",
            f"drive      {job.rabi_max / hertz:g} {rate} Rabi ({job.bound}), {job.dac_bits} bits",
            f"tolerance  {box}",
            f"limit      {comparison.shortest / second:.6g} {time} ({kind}, without errors)",
            "",
            aligned(header, table),
            "",
            "Average gate infidelity, from the DAC codes."
            if job.target.kind == "gate"
            else "One minus the transfer probability, from the DAC codes.",
        ]
    )
