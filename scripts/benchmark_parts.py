"""The parts of the benchmark that need JAX, each a process of its own.

python scripts/benchmark_parts.py PART [ARGUMENT ...] prints one JSON object.
"""

from __future__ import annotations

import json
import os
import resource
import statistics
import sys
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor

import benchmark_rivals as rivals
import numpy as np

SIZES = ((64, 1), (64, 25), (256, 121), (1000, 441))  # slices, grid points
TARGET = np.array([np.cos(0.3), 0.0, 0.0, np.sin(0.3)])
ROUNDS = 9  # turns that the contenders take
EXPM_AT_MOST = 16  # slices times grid points; above, finite differences take minutes


def problem(slices: int, grid: int):
    """Fixed inputs: drive [slice, 2] rad/s, delta, eps, weight [grid]; slices of one second."""
    drive = np.random.default_rng(0).normal(size=(slices, 2)) * 0.1
    weight = np.full(grid, 1 / grid)
    return drive, np.linspace(-0.1, 0.1, grid), np.linspace(-0.05, 0.05, grid), weight


def engine(drive, delta, eps, weight) -> Callable:
    """drive -> (cost, gradient) by the project's engine, to be compiled as the search does."""
    import jax
    import jax.numpy as jnp

    from shaper.physics import two_level
    from shaper.search.compiler import prepare

    prepare()
    rate = (1 + np.max(np.abs(eps))) * np.max(np.hypot(*drive.T))
    turn = float(np.hypot(rate, np.max(np.abs(delta))))
    durations, eps, delta = jnp.ones(len(drive)), jnp.asarray(eps), jnp.asarray(delta)

    def cost(drive):
        q = two_level.propagate(drive, durations, eps, delta, turn)
        overlap = sum(c * t for c, t in zip(q, TARGET.tolist(), strict=True))
        return 1 - jnp.sum(jnp.asarray(weight) * overlap**2)

    return jax.value_and_grad(cost)


def contenders(slices: int, grid: int) -> dict[str, Callable]:
    """Name to a call without arguments that returns (cost, gradient)."""
    import jax
    import jax.numpy as jnp

    drive, delta, eps, weight = problem(slices, grid)
    ours = jax.jit(engine(drive, delta, eps, weight))
    scan = rivals.plain_scan(eps, delta, weight, TARGET, 1.0)
    hand = rivals.numpy_cost_and_gradient(eps, delta, weight, TARGET, 1.0)
    there = jnp.asarray(drive)
    calls = {
        "engine": lambda: jax.block_until_ready(ours(there)),
        "plain_scan": lambda: jax.block_until_ready(scan(there)),
        "numpy": lambda: hand(drive),
    }
    if slices * grid <= EXPM_AT_MOST:
        slow = rivals.central_differences(rivals.expm_cost(eps, delta, weight, TARGET, 1.0))
        calls["expm"] = lambda: slow(drive)
    return calls


def seconds(call: Callable, budget: float) -> list[float]:
    """Times of single calls until the budget is spent; at least one."""
    times = []
    while not times or sum(times) < budget:
        begin = time.perf_counter()
        call()
        times.append(time.perf_counter() - begin)
    return times


def engine_alone(sizes=SIZES, budget: float = 2.0) -> dict:
    """Median ns per slice and grid point of one cost-plus-gradient call."""
    found = {}
    for slices, grid in sizes:
        call = contenders(slices, grid)["engine"]
        call()
        found[f"{slices}x{grid}"] = 1e9 * statistics.median(seconds(call, budget)) / slices / grid
    return {"engine_ns": found}


def engine_against(sizes=((16, 1), *SIZES), budget: float = 0.3, rounds: int = ROUNDS) -> dict:
    """Every contender in turn, round by round.

    Returns:
        for each size and name: ``ns`` (median, per slice and grid point), ``ratio`` (the engine's
        time over the contender's, median over the rounds), ``first_s`` (first call, compiling
        included), and how far cost and gradient are from the engine's.
    """
    found = {}
    for slices, grid in sizes:
        calls, first, values = contenders(slices, grid), {}, {}
        for name, call in calls.items():
            begin = time.perf_counter()
            values[name] = call()
            first[name] = time.perf_counter() - begin
        turns = [
            {name: statistics.median(seconds(call, budget)) for name, call in calls.items()}
            for _ in range(rounds)
        ]
        found[f"{slices}x{grid}"] = {
            name: {
                "ns": 1e9 * statistics.median(t[name] for t in turns) / slices / grid,
                "ratio": statistics.median(t["engine"] / t[name] for t in turns),
                "first_s": first[name],
                "cost_off": float(abs(values[name][0] - values["engine"][0])),
                "gradient_off": float(np.max(np.abs(values[name][1] - values["engine"][1]))),
            }
            for name in calls
        }
    return {"engine": found}


def ladder(rounds: int = 7, budget: float = 0.05) -> dict:
    """Cost plus gradient on three levels against two: ns per slice and point, and their ratio."""
    import jax
    import jax.numpy as jnp

    from shaper.physics.ladder import Ladder, make_chain, plan, propagate_qubit

    found = {}
    for slices, grid in SIZES:
        drive, delta, eps, weight = problem(slices, grid)
        two = jax.jit(engine(drive, delta, eps, weight))
        levels = Ladder(-0.33)  # rad a slice, as -210 MHz in 0.25 ns
        most = float(np.max(np.abs(delta)))
        steps = plan(levels, 1.0, 1.1 * float(np.max(np.hypot(*drive.T))), most)
        chain = jax.tree.map(jnp.asarray, make_chain(levels, steps, 1.0, delta))

        def cost(drive, chain=chain, eps=eps, weight=weight):
            re, im = propagate_qubit(chain, drive, eps)
            return 1 - jnp.sum(weight[:, None, None] * (re**2 + im**2)[:, :2])

        three = jax.jit(jax.value_and_grad(cost))
        calls = [lambda f=f, d=drive: jax.block_until_ready(f(d)) for f in (two, three)]
        for call in calls:
            call()
        turns = [
            [statistics.median(seconds(call, budget)) for call in calls] for _ in range(rounds)
        ]
        found[f"{slices}x{grid}"] = {
            "two_levels_ns": 1e9 * statistics.median(t[0] for t in turns) / slices / grid,
            "three_levels_ns": 1e9 * statistics.median(t[1] for t in turns) / slices / grid,
            "ratio": statistics.median(t[1] / t[0] for t in turns),
        }
    return {"ladder": found}


def growth(budget: float = 0.5) -> dict:
    """ns per slice, grid point and start, one of the three growing at a time."""
    import jax
    import jax.numpy as jnp

    def measured(slices, grid, starts):
        drive, delta, eps, weight = problem(slices, grid)
        call = jax.jit(jax.vmap(engine(drive, delta, eps, weight)))
        many = jnp.asarray(np.broadcast_to(drive, (starts, *drive.shape)))
        jax.block_until_ready(call(many))
        times = seconds(lambda: jax.block_until_ready(call(many)), budget)
        return 1e9 * statistics.median(times) / (slices * grid * starts)

    slices = {n: measured(n, 25, 1) for n in (16, 128, 1024, 8192)}
    grid = {m: measured(128, m, 1) for m in (1, 9, 81, 729, 6561)}
    starts = {s: measured(128, 15, s) for s in (1, 4, 16, 64)}
    return {
        "growth": {
            "slices (25 grid points, 1 start)": slices,
            "grid points (128 slices, 1 start)": grid,
            "starts (128 slices, 15 grid points)": starts,
        }
    }


def cores(count: int, grid: int, starts: int = 32, slices: int = 80) -> dict:
    """Cost-plus-gradient calls a second, of the clock and of processor time.

    The starts are dealt out as the search deals them, small batches to a thread for each core; a
    hundred steps down the gradient are one program.
    """
    import jax
    import jax.numpy as jnp

    from shaper.search.batches import batches

    drive, delta, eps, weight = problem(slices, grid)
    both = engine(drive, delta, eps, weight)

    def descend(many):
        step = jax.vmap(lambda d: d - 1e-3 * both(d)[1])
        return jax.lax.scan(lambda m, _: (step(m), None), many, None, length=100)[0]

    many = np.random.default_rng(1).normal(size=(starts, slices, 2)) * 0.1
    parts = [jnp.asarray(many[chosen]) for chosen in batches(starts, grid)]
    program = jax.jit(descend)
    program.lower(parts[0]).compile()
    with ThreadPoolExecutor(count) as threads:

        def call():
            list(threads.map(lambda part: jax.block_until_ready(program(part)), parts))

        used, begin = time.process_time(), time.perf_counter()
        calls = len(seconds(call, 2.0))
        used, wall = time.process_time() - used, time.perf_counter() - begin
    return {"per_s": 100 * starts * calls / wall, "per_cpu_s": 100 * starts * calls / used}


def search_on_cores(_, job: str) -> dict:
    """The search of a job again and again, compiled before: searches a second, as ``cores``."""
    from shaper.job import read_job
    from shaper.search.descent import search

    job = read_job(job)
    search(job)
    used, begin = time.process_time(), time.perf_counter()
    calls = len(seconds(lambda: search(job), 2.0))
    used, wall = time.process_time() - used, time.perf_counter() - begin
    return {"per_s": calls / wall, "per_cpu_s": calls / used}


def memory(slices: int, grid: int = 100, way: str = "engine") -> dict:
    """Largest resident size of this process after one cost-plus-gradient call, MB."""
    import jax

    drive, delta, eps, weight = problem(slices, grid)
    call = jax.jit(engine(drive, delta, eps, weight))
    if way == "plain_scan":
        call = rivals.plain_scan(eps, delta, weight, TARGET, 1.0)
    jax.block_until_ready(call(drive))
    return {"peak_MB": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024}


def one_core() -> None:
    """Keep this process, and all threads it will start, on one core; before JAX is imported."""
    if hasattr(os, "sched_setaffinity"):
        os.sched_setaffinity(0, {max(os.sched_getaffinity(0))})


PARTS = {
    "engine_alone": engine_alone,
    "engine_against": engine_against,
    "growth": growth,
    "ladder": ladder,
    "cores": lambda count, grid: cores(int(count), int(grid)),
    "search_on_cores": search_on_cores,
    "memory": lambda slices, way="engine": memory(int(slices), way=way),
}

if __name__ == "__main__":
    part, *arguments = sys.argv[1:]
    if not (part.endswith("cores") and arguments[0] == "2"):
        one_core()
    print(json.dumps(PARTS[part](*arguments)))
