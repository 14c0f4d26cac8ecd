"""How fast the engine and the search are, and how good, against the ways without this project.

python scripts/benchmark.py [--engine] [--ladder] [--wait] [--search] [--reach] [--growth] [--cores]
                            [--memory] [--rounds N] [--json] [--figure FILE] [--record | --check]

All parts by default; with ``--engine --json`` just the engine's time for a slice and grid point.
The machine may be busy: contenders take turns within one run, and what counts are ratios of
medians, ours over theirs; of processor time too, which others disturb least. ``--check`` compares
the engine's ratios, the ratios of processor time and the qualities with those kept in
``benchmark-record.json`` (no absolute times) and fails where one is more than 1.5 times as bad.
"""

from __future__ import annotations

import argparse
import json
import os
import platform
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

HERE = Path(__file__).resolve().parent
RECORD = HERE / "benchmark-record.json"
PARTS = ("engine", "ladder", "wait", "search", "reach", "growth", "cores", "memory")
WORSE = 1.5
STARTS, ITERATIONS, SLICES = 16, 300, 80
RIVAL_STARTS = 64  # what the hand-written search may spend on reaching the project's quality
REACH = (1e-3, 3e-4, 2e-4, 1.2e-4, 9e-5)
JOB = f"""
[drive]
rabi_max_MHz = 25.0
sample_rate_MSps = 800.0
[target]
gate = "z"
angle_deg = 90.0
[tolerance]
amplitude = 0.05
detuning_MHz = 2.5
[pulse]
duration_ns = 100.0
slice_ns = 1.25
[search]
starts = {STARTS}
iterations = {ITERATIONS}
"""


def run(*command: str, cache: str = "off", codes=(0,)) -> tuple[float, float, str]:
    """A whole process: seconds on the clock, seconds of processor, what it printed."""
    # one BLAS thread for every contender: on small matrices, more only wait for each other
    environment = os.environ | {"SHAPER_CACHE": cache, "OPENBLAS_NUM_THREADS": "1"}
    used, begin = os.times(), time.perf_counter()
    done = subprocess.run(
        [sys.executable, *command], capture_output=True, text=True, env=environment, cwd=HERE.parent
    )
    wall, after = time.perf_counter() - begin, os.times()
    if done.returncode not in codes:
        raise SystemExit(f"{' '.join(command)}: exit code {done.returncode}\n{done.stderr}")
    cpu = after.children_user + after.children_system - used.children_user - used.children_system
    return wall, cpu, done.stdout


def part(*arguments: str) -> dict:
    """What one part of ``benchmark_parts.py`` measured, in a process of its own."""
    return json.loads(run(str(HERE / "benchmark_parts.py"), *arguments)[2])


def turns(rounds: int, contenders: dict) -> dict[str, dict[str, float]]:
    """Name to median wall and processor seconds, the contenders taking turns."""
    runs = [{name: call() for name, call in contenders.items()} for _ in range(rounds)]
    return {
        name: {
            "wall_s": statistics.median(r[name][0] for r in runs),
            "cpu_s": statistics.median(r[name][1] for r in runs),
        }
        for name in contenders
    }


def over(reference: str, found: dict) -> dict:
    """Every row with its ratios to the reference, of wall and of processor time."""
    base = found[reference]
    for row in found.values():
        row["ratio"] = row["wall_s"] / base["wall_s"]
        row["cpu_ratio"] = row["cpu_s"] / base["cpu_s"]
    return found


def optimize(job: str, folder: str, cache: str):
    """``shaper optimize`` as a whole process; falling short of a goal is no failure here."""
    output = str(Path(folder, "found.h5"))
    command = ("-m", "shaper", "optimize", job, "--output", output, "--json")
    return run(*command, cache=cache, codes=(0, 3))


def quality(printed: str) -> float:
    """Worst infidelity over the box of the pulse that was found."""
    return json.loads(printed)["pulses"][0]["infidelity_worst"]


def measure_wait(rounds: int) -> dict:
    """The command for a plain gate, and its help, against importing JAX."""
    with tempfile.TemporaryDirectory() as folder:
        job, warm = str(HERE.parent / "configs" / "z90.toml"), str(Path(folder, "warm"))
        optimize(job, folder, warm)

        def cold():
            with tempfile.TemporaryDirectory() as empty:
                return optimize(job, folder, empty)

        found = turns(
            rounds,
            {
                "import jax": lambda: run("-c", "import jax"),
                "optimize, cold": cold,
                "optimize, warm": lambda: optimize(job, folder, warm),
                "--help": lambda: run("-m", "shaper", "--help"),
            },
        )
    return {"wait": over("import jax", found)}


def measure_search(rounds: int) -> dict:
    """The whole search against the hand-written one, and how good each is."""
    with tempfile.TemporaryDirectory() as folder:
        job, warm = Path(folder, "job.toml"), str(Path(folder, "warm"))
        job.write_text(JOB)
        ours = quality(optimize(str(job), folder, warm)[2])
        script = (str(HERE / "benchmark_rivals.py"), str(STARTS), str(ITERATIONS), str(SLICES))
        theirs = json.loads(run(*script)[2])["infidelity"]
        sliced = json.loads(run(*script, "--by-slice")[2])["infidelity"]
        equal = Path(folder, "equal.toml")
        equal.write_text(JOB + f"stop_infidelity = {theirs!r}\n")
        stopped = quality(optimize(str(equal), folder, warm)[2])

        def cold():
            with tempfile.TemporaryDirectory() as empty:
                return optimize(str(job), folder, empty)

        found = turns(
            rounds,
            {
                "by hand": lambda: run(*script),
                "by hand, slice by slice": lambda: run(*script, "--by-slice"),
                "optimize, cold": cold,
                "optimize, warm": lambda: optimize(str(job), folder, warm),
                "optimize to equal quality, warm": lambda: optimize(str(equal), folder, warm),
            },
        )
        more = (script[0], str(RIVAL_STARTS), *script[2:], "--until", repr(ours))
        wall, cpu, printed = run(*more)
    reached = json.loads(printed)
    found["by hand, up to 64 starts"] = {"wall_s": wall, "cpu_s": cpu}
    qualities = [theirs, sliced, ours, ours, stopped, reached["infidelity"]]
    for row, worst in zip(found.values(), qualities, strict=True):
        row["infidelity"] = worst
    return {"search": over("by hand", found)}


def measure_reach(rounds: int) -> dict:
    """Seconds as a whole process until the worst case is at or below given infidelities."""
    script = (str(HERE / "benchmark_rivals.py"), str(RIVAL_STARTS), str(ITERATIONS), str(SLICES))
    wall, _, printed = run(*script)
    trail = json.loads(printed)["trail"]
    idle = wall - trail[-1][0]  # imports
    rows = {}
    with tempfile.TemporaryDirectory() as folder:
        job, warm = Path(folder, "job.toml"), str(Path(folder, "warm"))
        for goal in (min(REACH), *REACH):  # the first only fills the cache
            job.write_text(JOB + f"stop_infidelity = {goal!r}\n")
            runs = [optimize(str(job), folder, warm) for _ in range(rounds)]
            found = quality(runs[0][2])
            by_hand = [idle + at for at, best in trail if best <= goal]
            rows[f"{goal:.1e}"] = {
                "shaper_s": statistics.median(r[0] for r in runs) if found <= goal else None,
                "by_hand_s": by_hand[0] if by_hand else None,
            }
    return {"reach": rows, "trail": [[idle + at, best] for at, best in trail]}


def measure_cores(rounds: int) -> dict:
    """Two cores over one: throughput, and work for the same processor time.

    On a busy machine the second says what the first would be on an idle one: twice as much.
    """
    with tempfile.TemporaryDirectory() as folder:
        job = Path(folder, "job.toml")
        job.write_text(JOB.replace(f"starts = {STARTS}", "starts = 32"))
        work = {f"engine, 32 starts x 80 slices x {n} points": ("cores", n) for n in ("35", "231")}
        work["search, 32 starts x 80 slices"] = ("search_on_cores", str(job))
        found = {}
        for name, (kind, what) in work.items():
            pairs = [[part(kind, n, what) for n in ("1", "2")] for _ in range(rounds)]
            found[name] = {
                "throughput": statistics.median(b["per_s"] / a["per_s"] for a, b in pairs),
                "per_cpu": statistics.median(b["per_cpu_s"] / a["per_cpu_s"] for a, b in pairs),
            }
    return {"cores": found}


def measure_memory(rounds: int) -> dict:
    """Largest resident size at 100 grid points, MB, as the pulse gets longer."""
    peak = {n: part("memory", n)["peak_MB"] for n in ("1000", "10000", "100000")}
    scan = {n: part("memory", n, "plain_scan")["peak_MB"] for n in ("1000", "10000")}
    grown = peak["100000"] / peak["1000"]
    return {"memory": {"engine_MB": peak, "plain_scan_MB": scan, "1e5 over 1e3 slices": grown}}


MEASURE = {
    "engine": lambda rounds: part("engine_against"),
    "wait": measure_wait,
    "search": measure_search,
    "reach": measure_reach,
    "growth": lambda rounds: part("growth"),
    "ladder": lambda rounds: part("ladder"),
    "cores": measure_cores,
    "memory": measure_memory,
}


def comparable(result: dict) -> dict[str, float]:
    """What does not depend on how fast the machine is; smaller is better throughout."""
    kept = {}
    for size, ways in result.get("engine", {}).items():
        others = ways.keys() - {"engine", "expm"}  # expm is four decades away: nothing to watch
        kept |= {f"engine/{size}/{way}": ways[way]["ratio"] for way in sorted(others)}
    for size, v in result.get("ladder", {}).items():
        kept[f"ladder/{size}/three levels over two"] = v["ratio"]
    for name in ("wait", "search"):
        for row, values in result.get(name, {}).items():
            if row.startswith(("optimize", "--help")):
                kept[f"{name}/{row}/processor time"] = values["cpu_ratio"]
                if "infidelity" in values:
                    kept[f"{name}/{row}/infidelity"] = values["infidelity"]
    for size, v in result.get("cores", {}).items():
        kept[f"cores/{size}/processor time, two over one"] = 1 / v["per_cpu"]
    if "memory" in result:
        kept["memory/growth"] = result["memory"]["1e5 over 1e3 slices"]
    return kept


def worse(result: dict, record: dict) -> list[str]:
    """One line for each ratio or quality that is more than 1.5 times as bad as recorded."""
    now = comparable(result)
    return [
        f"{name}: {now[name]:.3g}, recorded {record[name]:.3g}"
        for name in now
        if name in record and now[name] > WORSE * record[name]
    ]


def text(result: dict) -> str:
    """Tables for people."""
    lines = [result["processor"]]
    for size, ways in result.get("engine", {}).items():
        lines.append(f"\nengine, {size} (slices x grid points), one core")
        lines += [
            f"  {way:12} {v['ns']:12.4g} ns per slice and point   engine takes {v['ratio']:8.2g}"
            f"   first call {v['first_s']:6.2f} s   gradient off {v['gradient_off']:.0e}"
            for way, v in ways.items()
        ]
    for size, v in result.get("ladder", {}).items():
        lines.append(
            f"\nthree levels, {size}: {v['three_levels_ns']:.4g} ns per slice and point, "
            f"{v['ratio']:.1f} times two levels"
        )
    for name, title in (("wait", "whole process, over importing JAX"), ("search", "whole search")):
        if name in result:
            lines.append(f"\n{title}")
        for row, v in result.get(name, {}).items():
            worst = f"   worst infidelity {v['infidelity']:.2e}" if "infidelity" in v else ""
            lines.append(
                f"  {row:32} {v['wall_s']:8.2f} s, ratio {v['ratio']:6.3f}"
                f"   processor {v['cpu_s']:6.2f} s, ratio {v['cpu_ratio']:6.3f}{worst}"
            )
    if "reach" in result:
        lines.append("\nseconds to a worst infidelity (a dash: not reached in 64 starts)")
    for goal, v in result.get("reach", {}).items():
        cells = ["-" if v[k] is None else f"{v[k]:.2f}" for k in ("shaper_s", "by_hand_s")]
        lines.append(f"  {goal:10} shaper, warm {cells[0]:>8}   by hand {cells[1]:>8}")
    for what, row in result.get("growth", {}).items():
        cells = "   ".join(f"{n}: {ns:.1f}" for n, ns in row.items())
        lines.append(f"\nengine, ns per slice, point and start, by {what}\n  {cells}")
    if "cores" in result:
        lines.append("\ntwo cores over one")
    for size, v in result.get("cores", {}).items():
        lines.append(
            f"  {size}   throughput {v['throughput']:.2f}   work per cpu second {v['per_cpu']:.2f}"
        )
    if "memory" in result:
        lines.append("\nlargest resident size, MB, 100 grid points")
        for way in ("engine_MB", "plain_scan_MB"):
            cells = "   ".join(f"{n}: {mb:.0f}" for n, mb in result["memory"][way].items())
            lines.append(f"  {way:14} slices {cells}")
        grown = result["memory"]["1e5 over 1e3 slices"]
        lines.append(f"  engine at 1e5 over 1e3 slices {grown:.3f}")
    return "\n".join(lines)


def processor() -> str:
    """The processor's name, the only thing said of the machine."""
    try:
        with open("/proc/cpuinfo") as file:
            return next(line.split(":")[1].strip() for line in file if "model name" in line)
    except (OSError, StopIteration):
        return platform.processor() or platform.machine()


def main(argv: list[str] | None = None) -> int:
    """Measure, print, and with ``--check`` compare; 1 if something has become worse."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    for name in PARTS:
        parser.add_argument(f"--{name}", action="store_true", help="measure this part only")
    parser.add_argument("--rounds", type=int, default=3, help="turns of whole processes")
    parser.add_argument("--json", action="store_true", help="print one JSON object")
    parser.add_argument("--figure", metavar="FILE", help="draw engine and reach (measures both)")
    kept = parser.add_mutually_exclusive_group()
    kept.add_argument("--record", action="store_true", help="keep the ratios and qualities")
    kept.add_argument("--check", action="store_true", help="fail if 1.5 times worse than kept")
    args = parser.parse_args(argv)
    chosen = [name for name in PARTS if getattr(args, name)]
    if chosen == ["engine"] and args.json and not (args.check or args.record or args.figure):
        print(json.dumps(part("engine_alone")))
        return 0
    chosen = chosen or list(PARTS)
    chosen += [name for name in ("engine", "reach") if args.figure and name not in chosen]
    result = {"processor": processor()}
    for name in chosen:
        print(f"measuring {name}", file=sys.stderr)
        result |= MEASURE[name](args.rounds)
    if args.figure:
        from shaper.figures import benchmark_figure, save

        save(benchmark_figure(result["engine"], result["reach"], result["trail"]), args.figure)
    print(json.dumps(result) if args.json else text(result))
    old = json.loads(RECORD.read_text()) if RECORD.exists() else {}
    if args.record:
        RECORD.write_text(json.dumps(old | comparable(result), indent=1) + "\n")
    lines = worse(result, old) if args.check else []
    print(*lines, sep="\n", end="\n" if lines else "", file=sys.stderr)
    return 1 if lines else 0


if __name__ == "__main__":
    raise SystemExit(main())
