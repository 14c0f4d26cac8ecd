"""``shaper output``: outputs on, by the word of the person at the bench, or off at once."""

from __future__ import annotations

import json
import sys

from shaper.cli.load import say
from shaper.errors import InputError, SafetyError

WORD = "ON"


def add(commands):
    """Declare the command's arguments."""
    command = commands.add_parser(
        "output",
        help="switch an AWG's outputs on (asks first) or off",
        description="--on: check that the instrument is the one that was loaded, that its memory "
        "holds what the load record says, and that volts, watts and duty cycle are within the "
        "profile's limits; print the cautions; ask for the word of the person at the bench; only "
        "then switch on. --off: switch off and say whether that was confirmed. Which trace an "
        "output plays is set at the instrument.",
        epilog="Example: shaper output 127.0.0.1:5025 --on --record z90.load.json "
        "--profile configs/instruments/alder_awg.toml",
    )
    command.add_argument("address", metavar="ADDRESS", help="host:port, or a VISA resource")
    way = command.add_mutually_exclusive_group(required=True)
    way.add_argument("--on", action="store_true", help="needs --record and --profile")
    way.add_argument(
        "--off",
        action="store_true",
        help="the outputs of --profile; without one, outputs 1 and 2 by SCPI-1999",
    )
    command.add_argument("--record", metavar="R.load.json", help="load record of what is loaded")
    command.add_argument("--profile", metavar="P.toml", help="instrument profile, with its limits")
    command.add_argument(
        "--yes", action="store_true", help="for scripts: the word of the person is given already"
    )
    command.add_argument("--json", action="store_true", help="print one JSON object")
    return command


def run(args) -> int:
    """Run it; returns the exit code."""
    from shaper.workflow.load import switch_output_off, switch_output_on

    if args.off:
        statement = switch_output_off(args.address, args.profile)
        print(
            json.dumps({"address": args.address, "output": statement}) if args.json else statement
        )
        return 0
    for option in ("record", "profile"):
        if getattr(args, option) is None:
            raise InputError(f"output: expected --{option} with --on, got none")

    def confirm(exposures) -> bool:
        return _ask(exposures, args.yes)

    record = switch_output_on(args.address, args.record, args.profile, confirm, say)
    statement = record["output"]["statement"]
    print(json.dumps(record) if args.json else statement)
    return 0


def _ask(exposures, yes: bool) -> bool:
    """Print the cautions; True if the person at the bench types the word."""
    from shaper.awg.safety import CAUTIONS

    for line in CAUTIONS:
        say(f"caution: {line}")
    for found in exposures:
        say(
            f"at the load: peak {found.peak_vector:.4g} V, mean power "
            f"{1e3 * found.mean_power:.4g} mW, duty cycle {found.duty_cycle:.4g}"
        )
    if yes:
        return True
    if not sys.stdin.isatty():
        raise SafetyError(
            "output: expected a person at the terminal to give the word, or --yes in a script"
        )
    say(f"Type {WORD} to switch on; anything else leaves the outputs off: ")
    return sys.stdin.readline().strip() == WORD
