"""From a waveform file to the comparison: rows, JSON, text, picture, exit codes."""

import dataclasses
import json
import math

import numpy as np
import pytest
import reference

from shaper.cli import main
from shaper.cli.compare import text as shown_text
from shaper.composite import place, sandwich
from shaper.composite.geodesic import stepped_on_grid
from shaper.evidence.score import score
from shaper.job import parse_job
from shaper.pulse import Waveform
from shaper.store import save_waveform
from shaper.workflow.compare import as_json, compare, cuts

JOB = """
title = "Quarter-turn phase gate, Alder bench, alder-1"
[qubit]
t1_us = 60.0
t2_us = 45.0
[drive]
rabi_max_MHz = 25.0
bound = "circle"
sample_rate_MSps = 1000.0
dac_bits = 14
[target]
gate = "z"
angle_deg = 90.0
[tolerance]
amplitude = 0.02
detuning_MHz = 0.5
[pulse]
duration_ns = 60.0
slice_ns = 1.0
"""


@pytest.fixture(scope="module")
def waveform() -> Waveform:
    """The geodesic and the sandwich of one job; no search needed."""
    job = parse_job(JOB)
    pulses = {
        "shaped": dataclasses.replace(
            place(stepped_on_grid(job.target, job), job), origin="optimized", source=""
        ),
        "sandwich": place(sandwich(job.target, job.bound), job),
    }
    return Waveform(
        title=job.title,
        job_text=JOB,
        created="2026-01-01T00:00:00+00:00",
        software="test",
        seed=0,
        status="composite",
        target=job.target.quaternion,
        error_rows=job.target.error_rows,
        error_scale=job.target.scale,
        pulses=pulses,
        scores={name: score(pulse, job) for name, pulse in pulses.items()},
    )


@pytest.fixture(scope="module")
def file(waveform, tmp_path_factory):
    path = tmp_path_factory.mktemp("compare") / "z90.h5"
    save_waveform(path, waveform)
    return path


def test_rows_of_the_sandwich(waveform):
    """30 ns at 25 MHz, 3 pi/2 over sqrt(7) pi/2 of the limit, its worst at a corner of the box."""
    comparison = compare(waveform)
    row = {r.name: r for r in comparison.rows}["sandwich"]
    assert row.duration == pytest.approx(30e-9)
    # Garon, Glaser and Sugny, Phys. Rev. A 88, 043422 (2013): sandwich over limit 3/sqrt(7)
    assert row.over_limit == pytest.approx(3 / math.sqrt(7), rel=1e-9)
    assert row.peak == pytest.approx(2 * math.pi * 25e6, rel=1e-4)  # 14 bits
    assert row.rms == pytest.approx(row.peak, rel=1e-12)
    assert row.energy == pytest.approx(row.peak**2 * 30e-9, rel=1e-12)
    decoded = waveform.pulses["sandwich"].codes.astype(float) / 8191 * 2 * math.pi * 25e6
    wanted = reference.rotation((0, 0, 1), math.pi / 2)
    corners = [
        reference.average_gate_infidelity(
            reference.propagator(decoded, np.full(30, 1e-9), e, 2 * math.pi * d), wanted
        )
        for e in (-0.02, 0.02)
        for d in (-0.5e6, 0.5e6)
    ]
    assert row.worst == pytest.approx(max(corners), rel=1e-10)
    assert row.nominal < row.mean < row.worst
    assert row.worst <= row.guaranteed <= 1.01 * row.worst


def test_figures_are_computed_anew_and_not_taken_from_the_file(waveform):
    wrong = dataclasses.replace(
        waveform,
        scores={
            name: dataclasses.replace(s, dac=0.5, dac_mean=0.5, dac_worst=0.5, guaranteed=0.25)
            for name, s in waveform.scores.items()
        },
    )
    for row, right in zip(compare(wrong).rows, compare(waveform).rows, strict=True):
        assert row == right


def test_cuts_reach_twice_the_tolerance_and_agree_with_the_rows(waveform):
    comparison = compare(waveform)
    table = cuts(comparison)
    assert table["detuning_MHz"][[0, -1]] == pytest.approx([-1.0, 1.0])
    assert table["amplitude_error"][[0, -1]] == pytest.approx([-0.04, 0.04])
    for row in comparison.rows:
        cut = table["pulses"][row.name]
        middle = len(table["detuning_MHz"]) // 2
        assert cut["against_detuning"][middle] == pytest.approx(row.nominal, rel=1e-9)
        assert cut["against_amplitude"][middle] == pytest.approx(row.nominal, rel=1e-9)


def test_json_is_one_object_with_units_in_its_keys(file, capsys):
    assert main(["compare", str(file), "--json"]) == 0
    out, err = capsys.readouterr()
    data = json.loads(out)
    assert err == ""
    assert data["shortest_ns"] == pytest.approx(
        math.pi / 2 * math.sqrt(7) / (2 * math.pi * 25e-3), rel=1e-9
    )
    assert [p["name"] for p in data["pulses"]] == ["shaped", "sandwich"]
    assert data["pulses"][1]["duration_ns"] == pytest.approx(30.0)
    pulse = data["pulses"][1]
    assert pulse["infidelity_worst"] <= pulse["infidelity_guaranteed"]
    assert pulse["infidelity_worst_with_decay"] == pytest.approx(
        pulse["infidelity_worst"] + pulse["infidelity_of_idling"], rel=1e-12
    )
    assert data["frame_update"] == "instead"
    assert data["verdict"]["winner"] == "shaped"
    assert len(data["cuts"]["pulses"]["shaped"]["against_amplitude"]) == len(
        data["cuts"]["amplitude_error"]
    )


def test_table_for_people(file, capsys):
    assert main(["compare", str(file)]) == 0
    out = capsys.readouterr().out
    assert "Quarter-turn phase gate" in out
    assert "z(90)" in out and "25 MHz Rabi (circle)" in out
    line = next(line for line in out.splitlines() if line.startswith("sandwich"))
    assert line.split()[1:3] == ["30", "1.134"]


def test_a_target_that_needs_no_pulse_has_no_ratio(waveform):
    text = JOB.replace("angle_deg = 90.0", 'angle_deg = 90.0\nequivalence = "up_to_final_z"')
    free = dataclasses.replace(waveform, job_text=text)
    comparison = compare(free)
    assert comparison.shortest == 0.0
    assert all(math.isnan(row.over_limit) for row in comparison.rows)
    assert as_json(comparison)["pulses"][0]["duration_over_shortest"] is None


def test_picture(file, tmp_path, capsys):
    picture = tmp_path / "z90.png"
    assert main(["compare", str(file), "--figure", str(picture)]) == 0
    assert picture.read_bytes()[:8] == b"\x89PNG\r\n\x1a\n"
    assert str(picture) in capsys.readouterr().err


def test_a_file_that_is_none_is_exit_code_1(tmp_path, capsys):
    path = tmp_path / "nothing.h5"
    assert main(["compare", str(path)]) == 1
    path.write_text("not a waveform")
    assert main(["compare", str(path)]) == 1
    lines = capsys.readouterr().err.splitlines()
    assert len(lines) == 2 and all(str(path) in line for line in lines)


# --- against the library ----------------------------------------------------------------------

ROBUST = JOB.replace("amplitude = 0.02", "amplitude = 0.05").replace(
    "detuning_MHz = 0.5", "detuning_MHz = 2.5"
)


@pytest.fixture(scope="module")
def robust(waveform):
    """Amplitude +-5 %, detuning +-10 % of the Rabi rate, the whole library."""
    return compare(dataclasses.replace(waveform, job_text=ROBUST), ["all"])


def test_the_whole_library_beside_the_file(robust):
    """The sandwich of doubly compensated pulses has a worst case of 6.2e-4 on this box."""
    rows = {row.name: row for row in robust.rows}
    assert list(rows)[:2] == ["shaped", "sandwich"]
    # the library's plain sandwich and geodesic are those of the file, code by code
    assert "plain" not in rows and "geodesic" not in rows
    assert rows["sandwich"].ideal_worst == pytest.approx(rows["sandwich"].worst, rel=1e-3)
    assert rows["CORPSE-in-BB1"].ideal_worst == pytest.approx(6.2e-4, rel=2e-3)
    assert rows["CORPSE-in-BB1"].duration == pytest.approx(486e-9)
    assert rows["CORPSE-in-BB1"].amplitude_order.order == 6
    assert rows["CORPSE-in-BB1"].detuning_order.order == 4
    for row in robust.rows:
        assert row.worst <= row.guaranteed <= 1.011 * row.worst, row.name
        assert row.over_limit >= 1.0, row.name


def test_worst_case_with_decay_is_the_sum_to_first_order(robust):
    """Against the exact map with T1 and T2, at the corner where the sandwich is worst."""
    from shaper.bench import score_grid
    from shaper.physics.decay import average_infidelity, transfer_matrix
    from shaper.physics.propagate import propagate
    from shaper.target import infidelity

    job, row = robust.job, {r.name: r for r in robust.rows}["sandwich"]
    played, grid = robust.pulses["sandwich"].played, score_grid(robust.job)
    at = np.argmax(infidelity(propagate(*played, grid.eps, grid.delta), job.target))
    exact = average_infidelity(
        transfer_matrix(*played, grid.eps[at], grid.delta[at], job.t1, job.t2), job.target
    )
    # what is left out is the product of both errors
    assert row.total == pytest.approx(exact, abs=3 * row.worst * row.coherence)


def test_verdict_and_where_it_changes(robust):
    from shaper.physics.decay import coherence_limit

    verdict, job = robust.verdict, robust.job
    rows = {row.name: row for row in robust.rows}
    assert verdict.winner.total == min(row.total for row in robust.rows)
    assert verdict.winner.origin == "composite" and verdict.rival.name == "shaped"
    assert verdict.factor == pytest.approx(verdict.rival.total / verdict.winner.total)

    def totals(t2):
        return {r.name: r.worst + coherence_limit(r.duration, job.t1, t2) for r in robust.rows}

    change = verdict.shorter_t2
    for t2, name in ((1.001 * change.at, verdict.winner.name), (0.999 * change.at, change.winner)):
        found = totals(t2)
        assert min(found, key=found.get) == name
    assert rows[change.winner].duration < verdict.winner.duration
    assert verdict.longer_t2 is None  # nothing is more robust at any T2 up to 2 T1

    for change in (verdict.smaller_box, verdict.larger_box):
        # the size is found on a coarser grid than that of the score: good to two percent
        inside = change.at * (1.02 if change.at < 1 else 0.98)
        outside = change.at * (0.98 if change.at < 1 else 1.02)
        for scale, name in ((inside, verdict.winner.name), (outside, change.winner)):
            box = dataclasses.replace(
                job,
                amplitude_tolerance=scale * job.amplitude_tolerance,
                detuning_tolerance=scale * job.detuning_tolerance,
            )
            found = {
                r.name: score(robust.pulses[r.name], box).dac_worst + r.coherence
                for r in (verdict.winner, rows[change.winner])
            }
            assert min(found, key=found.get) == name


def test_verdict_of_pulses_without_errors_is_the_shorter_one(waveform):
    text = JOB.replace("amplitude = 0.02", "").replace("detuning_MHz = 0.5", "")
    text = text.replace("t1_us = 60.0", "").replace("t2_us = 45.0", "")
    comparison = compare(dataclasses.replace(waveform, job_text=text))
    assert comparison.verdict.winner.name == "shaped"
    assert (
        "both negligible, and it is shorter than sandwich"
        in (as_json(comparison)["verdict"]["sentence"])
    )
    assert all(row.guaranteed is None and row.coherence is None for row in comparison.rows)


def test_names_of_the_library(file, capsys):
    assert main(["compare", str(file), "--against", "BB1", "two-pulse-Knill"]) == 0
    out = capsys.readouterr().out
    names = [line.split()[0] for line in out.splitlines() if line]
    assert "BB1" in names and "two-pulse-Knill" in names and "SK1" not in names
    assert "Verdict: " in out and "Frame update: " in out
    assert main(["compare", str(file), "--against", "BB2"]) == 2
    err = capsys.readouterr().err
    assert len(err.splitlines()) == 1 and "nearest: BB1" in err


def test_maps_and_picture_of_many(file, tmp_path, capsys):
    picture, plane = tmp_path / "z90.svg", tmp_path / "plane.png"
    command = ["compare", str(file), "--against", "all", "--json"]
    assert main([*command, "--figure", str(picture), "--maps", str(plane)]) == 0
    out, err = capsys.readouterr()
    assert len(json.loads(out)["pulses"]) > 25
    assert plane.read_bytes()[:8] == b"\x89PNG\r\n\x1a\n"
    assert b"<svg" in picture.read_bytes()
    assert len(err.splitlines()) == 2


def test_compare_does_not_import_jax():
    """It starts in the time of NumPy and SciPy."""
    import subprocess
    import sys

    code = "import sys, shaper.workflow.compare; sys.exit('jax' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


def test_a_qubit_with_more_levels_is_judged_on_them(waveform):
    """At 25 MHz against -210 MHz rectangles leak; half a derivative does not."""
    text = ROBUST.replace("[qubit]", "[qubit]\nanharmonicity_MHz = -210.0")
    names = ["cosine", "cosine-half-derivative", "two-pulse-reversed-Knill"]
    comparison = compare(dataclasses.replace(waveform, job_text=text), names)
    rows = {row.name: row for row in comparison.rows}
    smooth, hard = rows["cosine-half-derivative"], rows["two-pulse-reversed-Knill"]
    assert smooth.levels.leakage < 1e-4 < 1e-2 < hard.levels.leakage
    assert hard.levels.seepage == pytest.approx(2 * hard.levels.leakage)
    assert smooth.levels.nominal < 1e-4 < smooth.nominal  # two levels alone would misjudge it
    for row in comparison.rows:
        assert row.levels.worst >= row.levels.nominal >= 2 / 3 * row.levels.leakage
        assert row.total == row.levels.worst + row.coherence
    assert comparison.verdict.winner.total == min(row.total for row in comparison.rows)
    assert "on three levels" in as_json(comparison)["verdict"]["sentence"]
    for row, plain in zip(comparison.rows, as_json(comparison)["pulses"], strict=True):
        assert plain["seepage"] == row.levels.seepage
    assert "seepage, what returns from outside, then is twice as much." in words_of(comparison)


def words_of(comparison) -> str:
    """The text for people on one line."""
    return " ".join(shown_text(comparison).split())


@pytest.mark.parametrize(("levels", "ratio"), [(4, "as much"), (5, "2/3 as much")])
def test_as_many_levels_as_the_job_says(waveform, levels, ratio):
    text = JOB.replace("[qubit]", f"[qubit]\nanharmonicity_MHz = -210.0\nlevels = {levels}")
    comparison = compare(dataclasses.replace(waveform, job_text=text))
    for row in comparison.rows:
        assert row.levels.seepage == pytest.approx(2 / (levels - 2) * row.levels.leakage)
    assert f"on {['four', 'five'][levels - 4]} levels" in words_of(comparison)
    assert f" {levels} levels worst leakage" in words_of(comparison)
    assert f"seepage, what returns from outside, then is {ratio}." in words_of(comparison)
