"""The worked example in results/example: what is stored is what the code computes."""

import json
import math
from pathlib import Path

import pytest

import shaper
from shaper.workflow.compare import as_json

EXAMPLE = Path(__file__).resolve().parent.parent / "results" / "example"
AGAINST = ["CORPSE-in-BB1", "two-pulse-reversed-Knill"]
ROUND_OFF = 1e-9  # relative; figures from the same codes by the same formulas on another machine
NOTHING = 1e-14  # infidelities below this are round-off themselves
SEARCHED = 1.1  # another machine may end in another of several equally good waveforms


@pytest.fixture(scope="module")
def stored():
    return shaper.load_waveform(EXAMPLE / "z90_spin.h5")


def leaves(tree, path=""):
    """(path, number or text) of everything in a JSON tree."""
    if isinstance(tree, dict):
        for key, value in tree.items():
            yield from leaves(value, f"{path}.{key}")
    elif isinstance(tree, list):
        for k, value in enumerate(tree):
            yield from leaves(value, f"{path}.{k}")
    else:
        yield path, tree


def test_the_comparison_is_what_is_stored(stored):
    now = dict(leaves(json.loads(json.dumps(as_json(shaper.compare(stored, AGAINST))))))
    kept = dict(leaves(json.loads((EXAMPLE / "comparison.json").read_text(encoding="utf-8"))))
    assert now.keys() == kept.keys()
    for path, value in kept.items():
        if isinstance(value, float) and "above_box" not in path and "below_" not in path:
            assert math.isclose(now[path], value, rel_tol=ROUND_OFF, abs_tol=NOTHING), path
        elif not isinstance(value, float | str):
            assert now[path] == value, path


def test_a_new_search_comes_as_far(stored):
    again = shaper.optimize(shaper.parse_job(stored.job_text))
    assert again.scores["shaped"].worst <= SEARCHED * stored.scores["shaped"].worst


def test_the_report_is_there_and_asks_nobody():
    page = (EXAMPLE / "report.html").read_text(encoding="utf-8")
    assert "default-src 'none'" in page
    assert shaper.parse_job(shaper.load_waveform(EXAMPLE / "z90_spin.h5").job_text).title in page
