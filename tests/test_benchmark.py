"""The benchmark's contenders compute the same, its output has its shape, its check can fail."""

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

SCRIPTS = Path(__file__).resolve().parents[1] / "scripts"
ROUND_OFF = 1e-14  # cost and gradient of some tens of slices
DIFFERENCES = 1e-8  # central differences of a step of 1e-6: round-off over step, and step squared


@pytest.fixture
def scripts(monkeypatch):
    monkeypatch.syspath_prepend(str(SCRIPTS))
    import benchmark
    import benchmark_parts
    import benchmark_rivals

    return benchmark, benchmark_parts, benchmark_rivals


def test_rivals_agree_in_cost_and_gradient(scripts):
    _, parts, _ = scripts
    found = parts.engine_against(sizes=((5, 3), (40, 7)), budget=0.0, rounds=1)["engine"]
    assert set(found["5x3"]) == {"engine", "plain_scan", "numpy", "expm"}
    assert set(found["40x7"]) == {"engine", "plain_scan", "numpy"}
    for ways in found.values():
        assert ways["engine"]["ratio"] == 1
        for name, row in ways.items():
            assert row["ns"] > 0 and row["first_s"] > 0
            assert row["cost_off"] < ROUND_OFF
            assert row["gradient_off"] < (DIFFERENCES if name == "expm" else ROUND_OFF)


def test_engine_alone_names_the_sizes(scripts):
    _, parts, _ = scripts
    found = parts.engine_alone(sizes=((4, 2), (3, 1)), budget=0.0)
    assert list(found) == ["engine_ns"] and list(found["engine_ns"]) == ["4x2", "3x1"]
    assert all(ns > 0 for ns in found["engine_ns"].values())


def test_hand_written_search_improves_and_says_when(scripts):
    _, _, rivals = scripts
    short = rivals.hand_written_search(2, 5, 16, 5 * np.pi)
    longer = rivals.hand_written_search(2, 60, 16, 5 * np.pi)
    assert longer["infidelity"] < short["infidelity"] < 1
    times = [at for at, _ in longer["trail"]]
    assert len(times) == 2 and times == sorted(times)
    assert longer["infidelity"] == longer["trail"][-1][1]
    first = longer["trail"][0][1]
    assert len(rivals.hand_written_search(9, 60, 16, 5 * np.pi, until=first)["trail"]) == 1


def test_rivals_run_without_the_project_or_jax():
    code = (
        "import sys; sys.path.insert(0, sys.argv[1]); import benchmark_rivals;"
        "print([m for m in ('jax', 'shaper') if m in sys.modules])"
    )
    done = subprocess.run(
        [sys.executable, "-c", code, str(SCRIPTS)], capture_output=True, text=True, check=True
    )
    assert done.stdout.strip() == "[]"


def test_check_fails_only_beyond_the_margin(scripts):
    benchmark, _, _ = scripts
    row = {"ns": 1.0, "first_s": 1.0, "cost_off": 0.0, "gradient_off": 0.0}
    result = {
        "processor": "any",
        "engine": {"4x2": {"engine": row | {"ratio": 1.0}, "numpy": row | {"ratio": 0.1}}},
        "search": {
            "by hand": {
                "wall_s": 2.0,
                "cpu_s": 2.0,
                "ratio": 1.0,
                "cpu_ratio": 1.0,
                "infidelity": 1e-4,
            },
            "optimize, warm": {
                "wall_s": 1.0,
                "cpu_s": 1.0,
                "ratio": 0.5,
                "cpu_ratio": 0.5,
                "infidelity": 9e-5,
            },
        },
    }
    record = benchmark.comparable(result)
    assert record["engine/4x2/numpy"] == 0.1
    assert record["search/optimize, warm/infidelity"] == 9e-5
    assert record["search/optimize, warm/processor time"] == 0.5 and len(record) == 3
    assert benchmark.worse(result, record) == []
    assert benchmark.worse(result, {name: v / 1.4 for name, v in record.items()}) == []
    assert len(benchmark.worse(result, {name: v / 1.6 for name, v in record.items()})) == len(
        record
    )
    assert "9.00e-05" in benchmark.text(result)


def test_figure_holds_every_contender(scripts, tmp_path):
    from shaper.figures import benchmark_figure, save

    ways = {"engine": {"ns": 20.0}, "numpy": {"ns": 400.0}}
    reach = {"1e-3": {"shaper_s": 2.0}, "1e-6": {"shaper_s": None}}
    figure = benchmark_figure({"4x2": ways}, reach, [(1.0, 1e-2), (3.0, 1e-4)])
    left, right = figure.axes
    assert [float(line.get_xdata()[0]) for line in left.lines] == [20.0, 400.0]
    assert list(right.lines[1].get_ydata()) == [1e-3]
    save(figure, tmp_path / "benchmark.svg")
    assert (tmp_path / "benchmark.svg").stat().st_size > 1000


def test_record_is_made_of_ratios_and_qualities(scripts):
    benchmark, _, _ = scripts
    record = json.loads(benchmark.RECORD.read_text())
    kinds = {name.split("/")[0] for name in record}
    assert "engine" in kinds
    assert kinds <= {"engine", "ladder", "wait", "search", "cores", "memory"}
    assert all(value > 0 for value in record.values())
