"""``shaper check``: is this job file right, and is it a good idea?"""

from __future__ import annotations

import sys

_EXAMPLE = """example:
  shaper check configs/z90.toml

Warnings do not change the exit code; a faulty job file is exit code 2."""


def add(commands):
    """Declare the command's arguments."""
    import argparse

    command = commands.add_parser(
        "check",
        help="check a job file and say what it asks for, before the search is run",
        description="Check a job file, print what follows from it (samples, angles, the shortest "
        "possible duration, what T1 and T2 leave), and warn of what will go wrong.",
        epilog=_EXAMPLE,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    command.add_argument("job", metavar="JOB.toml", help="the job file")
    command.add_argument(
        "--no-trial",
        action="store_true",
        help="leave out the short trial search that a job with a tolerance and a "
        "stop_infidelity gets",
    )
    command.add_argument("--json", action="store_true", help="print one JSON object, nothing else")
    return command


def run(args) -> int:
    """Check the job; returns the exit code."""
    import json

    from shaper.cli.table import small
    from shaper.job import read_job
    from shaper.readable import rate, time
    from shaper.units import NS
    from shaper.workflow.check import check_job

    job = read_job(args.job)
    facts = check_job(job, trial=not args.no_trial)
    if args.json:
        print(json.dumps(facts, indent=2, ensure_ascii=False))
        return 0
    over, turn = facts["duration_over_shortest"], facts["largest_total_angle_deg"]
    limited, line = facts["coherence_limited_infidelity"], facts["line_bandwidth_MHz"]
    pulse = "the shortest that reaches stop_infidelity: to be found"
    if facts["samples"] is not None:
        pulse = (
            f"{time(job.duration, 6)}, {facts['slices']} slices, {facts['samples']} samples "
            f"(loaded: {facts['padded_samples']})"
        )
    lines = [
        ("target", facts["target"]),
        ("drive", f"{rate(job.rabi_max)} Rabi at most, {facts['bound']}"),
        ("line", line and f"{line:.4g} MHz, correction: {job.correction}"),
        ("pulse", pulse),
        (
            "angle",
            f"up to {facts['largest_angle_per_slice_deg']:.4g} degrees a slice"
            + (f", {turn:.5g} in all" if turn is not None else ""),
        ),
        (
            "shortest",
            f"{time(facts['shortest_duration_ns'] * NS, 6)} ({facts['shortest_duration_is']})"
            + (f"; this pulse: {over:.4g} times that" if over is not None else ""),
        ),
        ("sandwich", f"{time(facts['sandwich_duration_ns'] * NS, 6)} on the sample grid"),
        ("decay", limited is not None and f"at least {small(limited)} from T1 and T2"),
    ]
    if facts["title"]:
        print(facts["title"])
    for name, text in lines:
        if text:
            print(f"  {name:<10}{text}")
    for warning in facts["warnings"]:
        print(f"shaper: warning: {warning}", file=sys.stderr)
    print("valid" + (f", {len(facts['warnings'])} warning(s)" if facts["warnings"] else ""))
    return 0
