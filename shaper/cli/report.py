"""``shaper report``: one self-contained page about a waveform file."""

from __future__ import annotations

import argparse
import json
import sys

from shaper.cli.arguments import add_against, add_data

_EXAMPLE = """example:
  shaper report results/z90.h5                  writes results/z90.html
  shaper report results/z90.h5 --output -       prints the page"""


def add(commands):
    """Declare the command's arguments."""
    command = commands.add_parser(
        "report",
        help="write one HTML page about a waveform file: verdict, table, figures, live panel",
        description="Write a self-contained HTML page: verdict, table, figures, a live panel "
        "with sliders for the errors, cautions, provenance and the job. It opens from disk and "
        "asks the network for nothing.",
        epilog=_EXAMPLE,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    command.add_argument("file", metavar="FILE.h5", help="waveform file")
    command.add_argument(
        "--output", metavar="FILE.html", help="where to write (default: FILE.html)"
    )
    add_against(command)
    add_data(command)
    command.add_argument(
        "--json", action="store_true", help="print the tables behind the page instead"
    )
    return command


def run(args) -> int:
    """Write the page; returns the exit code."""
    from pathlib import Path

    from shaper.store import load_waveform
    from shaper.workflow.report import make_report, report_json, write_report

    source = Path(args.file)
    waveform = load_waveform(source)
    folder = source.parent if args.data is None else Path(args.data)
    if args.json:
        print(json.dumps(report_json(waveform, args.against, folder)))
        return 0
    if args.output == "-":
        sys.stdout.write(make_report(waveform, source.stem, args.against, folder))
        return 0
    output = Path(args.output) if args.output else source.with_suffix(".html")
    write_report(waveform, output, args.against, folder)
    print(output)
    return 0
