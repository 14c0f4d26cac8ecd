"""How fast loading is, against the bare socket: the same bytes there and back, in one run.

python scripts/measure_load.py [SAMPLES]
"""

import socket
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

from shaper.awg.plan import Choice, make_plan
from shaper.awg.profile import read_profile
from shaper.drive.dac import padded_length
from shaper.pulse import make_pulse
from shaper.workflow.load import load_into_instrument

ROOT = Path(__file__).resolve().parents[1]
RUNS = 11
samples = int(sys.argv[1]) if len(sys.argv) > 1 else 1_000_000

BARE_PEER = """
import socket, sys
count, runs = map(int, sys.argv[1:])
listener = socket.create_server(("127.0.0.1", 0))
print(listener.getsockname()[1], flush=True)
data = memoryview(bytearray(count))
for _ in range(runs):
    link, _ = listener.accept()
    filled = 0
    while filled < count:
        filled += link.recv_into(data[filled:])
    link.sendall(data)
    link.close()
"""


def started(*command: str) -> tuple[subprocess.Popen, int]:
    """A peer in a process of its own, and the port at the end of its first line."""
    peer = subprocess.Popen([sys.executable, *command], stdout=subprocess.PIPE, text=True)
    return peer, int(peer.stdout.readline().rsplit(":")[-1])


def bare(port: int, message: bytes) -> float:
    """Seconds for ``sendall`` and ``recv_into`` of the same bytes."""
    back = memoryview(bytearray(len(message)))
    with socket.create_connection(("127.0.0.1", port)) as link:
        begin = time.perf_counter()
        link.sendall(message)
        filled = 0
        while filled < len(message):
            filled += link.recv_into(back[filled:])
        seconds = time.perf_counter() - begin
    assert back == message
    return seconds


def measured(layout: str, ports: tuple[int, int], folder: str) -> list[tuple[float, float, float]]:
    """Seconds of each run: bare, transfer and read back, whole load."""
    data = profile.data.model_copy(update={"layout": layout})
    choice = Choice("LONG", pulse, "circle", 0.0, "-", "0" * 64, "long", "-", 0.0)
    plan = make_plan([choice], profile.model_copy(update={"data": data}))
    message, rows = b"".join(trace.data for trace in plan.traces), []
    for run in range(RUNS):
        alone = bare(ports[0], message)
        begin = time.perf_counter()
        path = f"{folder}/{layout}-{run}.load.json"
        record = load_into_instrument(plan, f"127.0.0.1:{ports[1]}", path, replace=True)
        whole = time.perf_counter() - begin
        moved = sum(
            line["seconds"]
            for line in record["lines"]
            if line["step"] in ("transfer", "read back") and "LONG" in line["sent"]
        )
        rows.append((alone, moved, whole))
    return rows


def show(layout: str, rows: list[tuple[float, float, float]]) -> None:
    """Medians, and medians of the ratios of the same run."""
    print(f"{samples} samples of I and Q, {layout}, there and back, median of {RUNS} runs")
    names = ("bare sendall and recv", "transfer and read back", "whole load, record and all")
    for name, column in zip(names, zip(*rows, strict=True), strict=True):
        seconds = statistics.median(column)
        print(f"  {name:28} {1e3 * seconds:8.2f} ms  {8e-6 * samples / seconds:8.1f} MB/s")
    ratios = [statistics.median(alone / row[k] for alone, *row in rows) for k in (0, 1)]
    print(f"  throughput against bare: transfer {ratios[0]:.2f}, whole load {ratios[1]:.2f}")


profile, _ = read_profile(ROOT / "configs" / "instruments" / "alder_awg.toml")
turns = np.linspace(0, 200 * np.pi, samples)
drive = 1e8 * np.stack([np.cos(turns), np.sin(turns)], axis=1)
pulse = make_pulse(
    drive, np.ones(samples), full_scale=1e8, bits=14, bound="circle", sample_rate=1e9,
    origin="composite",
)  # fmt: skip

size = 4 * padded_length(samples + 41, 4, 16)  # with the marker's lead and hold
peer, port = started("-c", BARE_PEER, str(size), str(2 * RUNS))
stand_in, stand_in_port = started(str(ROOT / "scripts/stand_in_awg.py"), "--port", "0", "--quiet")
try:
    with tempfile.TemporaryDirectory() as folder:
        for layout in ("apart", "interleaved"):
            show(layout, measured(layout, (port, stand_in_port), folder))
finally:
    peer.kill()
    stand_in.kill()
