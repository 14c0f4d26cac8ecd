"""``shaper new``: a commented job file from a few questions or flags."""

from __future__ import annotations

import argparse
import sys

GATES = ("x", "y", "z", "hadamard", "s", "t", "s_inverse", "t_inverse", "sqrt_x", "identity")
_TURNED = ("x", "y", "z")
_EXAMPLE = """examples:
  shaper new first.toml
  shaper new first.toml --gate z --angle-deg 90 --rabi-max-MHz 25 --amplitude 0.02

Without flags it asks, if there is a terminal to ask at; flags are never asked for again."""


def add(commands):
    """Declare the command's arguments."""
    command = commands.add_parser(
        "new",
        help="write a commented job file from a few questions",
        description="Write a job file with every key, its comment and a duration that makes "
        "sense. The file runs as it is; edit it to taste.",
        epilog=_EXAMPLE,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    command.add_argument("job", metavar="JOB.toml", help="the file to write")
    command.add_argument("--gate", choices=GATES, help="what the pulse must do")
    command.add_argument(
        "--angle-deg", metavar="DEGREES", type=float, help="rotation angle, for x, y, z"
    )
    command.add_argument(
        "--rabi-max-MHz", metavar="MHZ", type=float, help="largest Rabi frequency, W_max/2pi"
    )
    command.add_argument(
        "--bound",
        choices=("circle", "box"),
        help="circle: one I/Q line (default); box: two independent lines",
    )
    command.add_argument(
        "--sample-rate-MSps", metavar="RATE", type=float, help="of the DAC (default 1000)"
    )
    command.add_argument(
        "--amplitude",
        metavar="FRACTION",
        type=float,
        help="relative amplitude error to withstand, +- (default 0)",
    )
    command.add_argument(
        "--detuning-MHz",
        metavar="MHZ",
        type=float,
        help="drift of the resonance to withstand, +- (default 0)",
    )
    command.add_argument("--duration-ns", metavar="NS", type=float, help="(default: proposed)")
    command.add_argument("--title", metavar="TEXT", help="free text")
    command.add_argument("--replace", action="store_true", help="write over an existing file")
    return command


def run(args) -> int:
    """Ask, write, say what comes next; returns the exit code."""
    from pathlib import Path

    from shaper.errors import InputError
    from shaper.job.json_schema import SCHEMA_FILE
    from shaper.store.atomic import replace_file
    from shaper.workflow.new import Wish, new_job

    path = Path(args.job)
    if path.exists() and not args.replace:
        raise InputError(f"{path}: exists already; --replace writes over it")
    asks = sys.stdin.isatty()
    gate = _answer(args.gate, "--gate", "gate", None, asks, str, GATES)
    angle = args.angle_deg
    if gate in _TURNED:
        angle = _answer(angle, "--angle-deg", "angle in degrees", 90.0, asks, float)
    rabi = _answer(
        args.rabi_max_MHz, "--rabi-max-MHz", "largest Rabi frequency in MHz", None, asks, float
    )
    wish = Wish(
        gate=gate,
        angle_deg=angle,
        rabi_max_MHz=rabi,
        bound=_answer(args.bound, "--bound", "bound", "circle", asks, str, ("circle", "box")),
        sample_rate_MSps=_answer(
            args.sample_rate_MSps,
            "--sample-rate-MSps",
            "DAC sample rate in MSps",
            1000.0,
            asks,
            float,
        ),
        amplitude=_answer(
            args.amplitude,
            "--amplitude",
            "amplitude error to withstand, +- (0.02 is 2 %)",
            0.0,
            asks,
            float,
        ),
        detuning_MHz=_answer(
            args.detuning_MHz,
            "--detuning-MHz",
            "drift of the resonance to withstand in MHz, +-",
            0.0,
            asks,
            float,
        ),
        duration_ns=args.duration_ns,
        title=args.title or "",
    )
    text, job = new_job(wish, _seen_from(path, SCHEMA_FILE))
    replace_file(path, text.encode("utf-8"))
    print(f"{path}: {job.target_name}, {job.slices} slices, {job.duration * 1e9:g} ns")
    print(f"next: shaper check {path}")
    return 0


def _seen_from(job, schema) -> str:
    """The schema's path for the editor: relative inside one project, else absolute."""
    import os
    from pathlib import Path

    if schema.is_relative_to(Path.cwd()):
        return Path(os.path.relpath(schema, job.resolve().parent)).as_posix()
    return str(schema)


def _answer(given, flag, question, default, asks, kind, choices=None):
    """The flag's value, or the answer at the terminal, or the default."""
    from shaper.errors import InputError

    if given is not None:
        return given
    if not asks:
        if default is None:
            raise InputError(f"{flag}: expected this flag where there is no terminal to ask at")
        return default
    while True:
        shown = f" ({', '.join(choices)})" if choices else ""
        shown += f" [{default}]" if default is not None else ""
        print(f"{question}{shown}: ", end="", file=sys.stderr, flush=True)
        line = sys.stdin.readline()
        if not line:
            raise InputError(f"{flag}: expected an answer, got the end of the input")
        line = line.strip()
        if not line and default is not None:
            return default
        try:
            value = kind(line)
        except ValueError:
            print(f"expected a number, got {line!r}", file=sys.stderr)
            continue
        if choices and value not in choices:
            print(f"expected one of {', '.join(choices)}, got {line!r}", file=sys.stderr)
            continue
        return value
