"""``shaper optimize``: from a job file to a waveform file."""

from __future__ import annotations

import json
import os
import sys
from pathlib import Path

INTERRUPTED, FELL_SHORT = 130, 3


def add(commands):
    """Declare the command's arguments."""
    command = commands.add_parser(
        "optimize",
        help="search for the waveform that a job asks for",
        description="Search for the waveform that a job file asks for, and write it with the "
        "analytic sandwich beside it. Ctrl-C ends the search and keeps the best so far.",
        epilog="Example: shaper optimize configs/z90.toml --output results/z90.h5",
    )
    command.add_argument("job", metavar="JOB.toml", help="job file")
    command.add_argument(
        "--output",
        metavar="FILE.h5",
        help="waveform file to write (default: the job's name with .h5, in this folder)",
    )
    command.add_argument(
        "--shortest",
        action="store_true",
        help="find the shortest duration that reaches stop_infidelity",
    )
    command.add_argument(
        "--resume",
        action="store_true",
        help="go on from the checkpoint that an interrupted search left beside the output",
    )
    command.add_argument("--json", action="store_true", help="print one JSON object")
    command.add_argument(
        "--figure", metavar="FILE", help="draw how the search went (.png, .svg, .pdf)"
    )
    return command


def run(args) -> int:
    """Run it; returns the exit code."""
    from dataclasses import replace

    from shaper.cli.progress import ProgressLine, patient_interrupt
    from shaper.errors import InputError
    from shaper.job import read_job

    job = read_job(args.job)
    if args.shortest and job.stop_infidelity is None:
        raise InputError(f"{args.job}: --shortest needs search.stop_infidelity, got none")
    if args.shortest:
        job = replace(job, find_shortest=True, find_best=False)
    if args.resume and job.open_duration:
        raise InputError(
            "--resume: expected a search with checkpoints; one for the duration begins anew "
            "each time"
        )
    output = Path(args.output or Path(args.job).with_suffix(".h5").name)
    _require_writable("--output", output)
    if args.figure:
        _require_figure(Path(args.figure))
    for option, path in (("--output", output), ("--figure", args.figure)):
        if path and os.path.exists(path) and os.path.samefile(path, args.job):
            raise InputError(f"{option} {path}: expected another file than the job itself")
    from shaper.search.checkpoint import Checkpoint
    from shaper.store import save_waveform
    from shaper.store.atomic import replace_file
    from shaper.workflow.optimize import optimize, reached

    kept = output.with_name(output.name + ".checkpoint")
    checkpoint = Checkpoint(kept, job, replace_file, args.resume)
    line = ProgressLine()
    with patient_interrupt() as asked_to_stop:
        try:
            waveform = optimize(job, line, asked_to_stop, checkpoint)
        finally:
            line.close()
        save_waveform(output, waveform)
    if waveform.status != "interrupted":
        checkpoint.discard()
    if args.figure:
        from shaper.workflow.optimize import draw

        draw(waveform, args.figure)
    good = reached(job, waveform.scores["shaped"])
    print(json.dumps(_as_json(job, waveform, output, good)) if args.json else _text(job, waveform))
    if not args.json:
        print(f"\n{output}" + (f"\n{args.figure}" if args.figure else ""))
    if waveform.status == "interrupted":
        note = "" if job.open_duration else "; go on with --resume"
        print(f"shaper: interrupted: the best so far is in {output}{note}", file=sys.stderr)
        return INTERRUPTED
    if not good:
        print(f"shaper: short of stop_infidelity = {job.stop_infidelity:g}", file=sys.stderr)
        return FELL_SHORT
    return 0


def _require_writable(option: str, path: Path) -> None:
    """Refuse before minutes are spent, not after."""
    from shaper.errors import InputError

    folder = path.parent
    if not folder.is_dir():
        raise InputError(f"{option} {path}: expected an existing folder, {folder} is none")
    if path.is_dir() or not os.access(folder, os.W_OK):
        raise InputError(f"{option} {path}: expected a file that can be written there")


def _require_figure(path: Path) -> None:
    from shaper.errors import InputError
    from shaper.figures.style import SUFFIXES

    _require_writable("--figure", path)
    if path.suffix.lower() not in SUFFIXES:
        raise InputError(f"--figure {path}: expected a name that ends in {', '.join(SUFFIXES)}")


def _text(job, waveform) -> str:
    """What people read: the pulses, how the search ended, and whether a pulse is needed."""
    from shaper.cli.table import aligned, plain, small
    from shaper.readable import time_unit
    from shaper.search.descent import STATUSES

    unit, second = time_unit(max(pulse.duration for pulse in waveform.pulses.values()))
    header = ["pulse", f"duration {unit}", "infidelity", "as DAC codes"]
    if job.has_tolerance:
        header[2:] = ["nominal", "mean", "worst", "guaranteed", "worst as DAC codes"]
    rows = []
    for name, pulse in waveform.pulses.items():
        score = waveform.scores[name]
        figures = [score.nominal, score.dac]
        if job.has_tolerance:
            figures = [score.nominal, score.mean, score.worst, score.guaranteed, score.dac_worst]
        rows.append([name, plain(pulse.duration / second, 6), *map(small, figures)])
    lines = [f"{job.title or job.target_name}", "", aligned(header, rows), ""]
    if waveform.history_attrs.get("levels", 2) > 2:
        lines.append(
            f"Infidelities are those of {waveform.history_attrs['levels']} levels, leakage counted."
        )
    lines.append(f"search {waveform.status}: {STATUSES[waveform.status]}")
    if job.target.needs_no_pulse:
        lines.append(
            "This target needs no pulse at all: shift the phase of all later pulses instead."
        )
    return "\n".join(lines)


def _as_json(job, waveform, output: Path, good: bool) -> dict:
    from shaper.units import NS

    return {
        "file": str(output),
        "title": job.title,
        "target": job.target_name,
        "status": waveform.status,
        "reached": good,
        "stop_infidelity": job.stop_infidelity,
        "needs_no_pulse": job.target.needs_no_pulse,
        "pulses": [
            {
                "name": name,
                "duration_ns": pulse.duration / NS,
                "infidelity": waveform.scores[name].nominal,
                "infidelity_mean": waveform.scores[name].mean,
                "infidelity_worst": waveform.scores[name].worst,
                "infidelity_guaranteed": waveform.scores[name].guaranteed,
                "infidelity_dac": waveform.scores[name].dac,
                "infidelity_dac_worst": waveform.scores[name].dac_worst,
            }
            for name, pulse in waveform.pulses.items()
        ],
    }
