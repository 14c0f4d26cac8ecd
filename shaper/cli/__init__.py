"""The command line: arguments, printing, exit codes. No numbers are made here.

Each command is a room of its own in this folder with ``add(commands)`` and ``run(args)``; heavy
libraries are imported inside ``run``, so that ``--help`` answers at once.
"""

from __future__ import annotations

import argparse
import importlib
import os
import sys

from shaper import __version__
from shaper.errors import ShaperError

COMMANDS = ("new", "check", "optimize", "compose", "compare", "verify", "report", "load", "output")
INTERRUPTED = 130


def parser() -> argparse.ArgumentParser:
    """The whole grammar of the command line."""
    top = argparse.ArgumentParser(
        prog="shaper",
        description="Waveforms for a bench that can only drive x and y: search, compare, load.",
        epilog="Exit codes: 0 done; 1 the run or a file failed; 2 wrong use or input; "
        "3 finished but short of stop_infidelity; 4 refused for safety; 5 read-back differs; "
        "130 interrupted.",
    )
    top.add_argument("--version", action="version", version=f"shaper {__version__}")
    commands = top.add_subparsers(dest="command", required=True, metavar="COMMAND")
    for name in COMMANDS:
        room = importlib.import_module(f"shaper.cli.{name}")
        command = room.add(commands)
        command.add_argument("--debug", action="store_true", help="show tracebacks")
        command.set_defaults(run=room.run)
    return top


def main(argv: list[str] | None = None) -> int:
    """Run one command; returns the exit code (see ``--help``)."""
    # read when SciPy is loaded: its threads wait for each other longer than the search's many
    # small factorizations take, four times longer on two busy cores
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    args = parser().parse_args(argv)
    try:
        return args.run(args)
    except ShaperError as error:
        if args.debug:
            raise
        for line in str(error).splitlines():
            print(f"shaper: {line}", file=sys.stderr)
        return error.exit_code
    except KeyboardInterrupt:
        if args.debug:
            raise
        print("shaper: interrupted", file=sys.stderr)
        return INTERRUPTED
    except BrokenPipeError:  # the reader of our output has gone: nobody to tell
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except MemoryError:
        if args.debug:
            raise
        print("shaper: out of memory: try fewer starts or slices", file=sys.stderr)
        return 1
