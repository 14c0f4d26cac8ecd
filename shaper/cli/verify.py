"""``shaper verify``: a second opinion on a waveform file, and its error budget."""

from __future__ import annotations

import json
import sys

from shaper.cli.arguments import add_data

_WIDTH = 100  # columns of running text
NOT_CONFIRMED = 1
SEEPAGE = (
    "Leakage: population that the pulse leaves outside the qubit, mean over the qubit's states. "
    "Seepage: population that it brings back, mean over the levels outside; T1 brings some back "
    "by itself."
)


def add(commands):
    """Declare the command's arguments."""
    command = commands.add_parser(
        "verify",
        help="recompute what a waveform file claims, and where its error comes from",
        description="Recompute every figure of a waveform file from its integer codes by matrix "
        "exponentials and an adaptive integrator that share nothing with the search, and print "
        "the error budget: what each effect of the bench costs alone, what all cost together, "
        "what dominates and what to change first. Exit code 1 if a claim does not hold.",
        epilog="Example: shaper verify z90_robust.h5 --figure budget.svg",
    )
    command.add_argument("file", metavar="FILE.h5", help="waveform file")
    command.add_argument(
        "--pulse",
        metavar="NAME",
        nargs="+",
        default=[],
        help="pulses of the file, or all (default: the optimized ones)",
    )
    command.add_argument(
        "--carrier-GHz",
        metavar="F",
        type=float,
        help="carrier frequency, where the job names none: adds the rotating-wave error",
    )
    add_data(command)
    command.add_argument("--json", action="store_true", help="print one JSON object")
    command.add_argument("--figure", metavar="FILE", help="draw the budget (.png, .svg, .pdf)")
    command.add_argument(
        "--keep-file", action="store_true", help="do not store the evidence in the file"
    )
    return command


def run(args) -> int:
    """Run it; returns the exit code."""
    from dataclasses import replace
    from pathlib import Path

    from shaper.errors import InputError
    from shaper.job import parse_job
    from shaper.store import load_waveform, save_waveform
    from shaper.units import MHZ
    from shaper.workflow.verify import (
        as_json,
        draw,
        effects_of,
        searched_on_ladder,
        verify,
        with_evidence,
    )

    waveform = load_waveform(args.file)
    folder = Path(args.file).parent if args.data is None else Path(args.data)
    job = parse_job(waveform.job_text, "job in the file", folder)
    effects = effects_of(job, searched_on_ladder(waveform))
    if args.carrier_GHz is not None:
        if not 0 < args.carrier_GHz < 1e6:
            raise InputError(f"--carrier-GHz: expected a frequency, got {args.carrier_GHz:g}")
        effects = replace(effects, carrier=args.carrier_GHz * 1e3 * MHZ)
    found = verify(waveform, args.pulse, effects, folder)
    if not args.keep_file:
        save_waveform(args.file, with_evidence(waveform, found))
        print(f"shaper: evidence stored in {args.file}", file=sys.stderr)
    if args.figure:
        draw(found, args.figure)
        print(f"shaper: figure in {args.figure}", file=sys.stderr)
    print(json.dumps(as_json(found)) if args.json else text(found))
    return 0 if all(v.holds for v in found.values()) else NOT_CONFIRMED


def text(found) -> str:
    """The verification as people read it."""
    from textwrap import TextWrapper

    from shaper.cli.table import aligned, small

    fill = TextWrapper(_WIDTH, break_on_hyphens=False).fill
    blocks = []
    for name, result in found.items():
        budget = result.budget
        claims = aligned(
            ["claim", "in the file", "recomputed", ""],
            [
                [c.name, small(c.claimed), small(c.found), "holds" if c.holds else "DOES NOT HOLD"]
                for c in result.claims
            ],
            (0, 3),
        )
        rows = [[source, small(value)] for source, value in budget.alone.items()]
        rows += [["sum", small(budget.total)], ["all together", small(budget.together)]]
        rows += [["(of it leakage)", small(budget.leakage)]]
        exchanged = budget.seepage is not None
        rows += [["(seepage, not in it)", small(budget.seepage)]] * exchanged
        blocks += [
            f"pulse      {name}: {'every claim holds' if result.holds else 'NOT CONFIRMED'}",
            "",
            claims,
            "",
            aligned(["error budget", "infidelity"], rows),
            "",
            fill(budget.note[0].upper() + budget.note[1:]),
            fill(budget.advice[0].upper() + budget.advice[1:]),
            *[fill(SEEPAGE)] * exchanged,
            "",
        ]
    return "\n".join(blocks).rstrip()
