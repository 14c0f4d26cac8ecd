"""A stand-in for an AWG on the loopback address, to try loading without an instrument.

python scripts/stand_in_awg.py                    # waits on 127.0.0.1:5025
python scripts/stand_in_awg.py --fault stall@20   # trouble at the 20th message; see --help
"""

import argparse
import asyncio
import contextlib
import socket
import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "tests"))

from stand_in import FAULTS, Fault, Generator, serve

parser = argparse.ArgumentParser(
    description="A stand-in for an AWG, on the loopback address only: IEEE 488.2 messages and the "
    "FORMat, TRACe, OUTPut and SYSTem:ERRor? commands of SCPI-1999.",
    epilog="faults: " + "; ".join(f"{kind}: {text}" for kind, text in FAULTS.items()),
)
parser.add_argument("--port", type=int, default=5025, help="default 5025; 0 for any free one")
parser.add_argument("--identity", default=Generator.identity, help="the answer to *IDN?")
parser.add_argument("--on", action="store_true", help="begin with output 1 on")
parser.add_argument(
    "--fault",
    action="append",
    default=[],
    metavar="KIND[@N][+]",
    help="strike at message N (default 0); with + from then on; repeat for more",
)
parser.add_argument("--seconds", type=float, default=10.0, help="how late a late answer is")
parser.add_argument("--quiet", action="store_true", help="do not show the messages")


def fault(text: str, seconds: float) -> Fault:
    """``KIND@N+`` as a fault."""
    kind, _, at = text.removesuffix("+").partition("@")
    if kind not in FAULTS or not (at or "0").isdigit():
        parser.error(f"--fault: expected KIND[@N][+] with KIND one of {', '.join(FAULTS)}")
    return Fault(kind, int(at or 0), text.endswith("+"), seconds)


class Shown(list):
    """A log that is also printed."""

    def append(self, line: str) -> None:
        super().append(line)
        print(line, flush=True)


args = parser.parse_args()
generator = Generator(
    identity=args.identity,
    on={1: args.on},
    faults=[fault(text, args.seconds) for text in args.fault],
    log=[] if args.quiet else Shown(),
)
listener = socket.create_server(("127.0.0.1", args.port))
print(f"listening on 127.0.0.1:{listener.getsockname()[1]}", flush=True)
with contextlib.suppress(KeyboardInterrupt):
    asyncio.run(serve(generator, listener))
