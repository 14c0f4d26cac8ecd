"""From a waveform file to the comparison: rows, JSON, text, picture, exit codes."""

import dataclasses
import json
import math

import numpy as np
import pytest
import reference

from shaper.cli import main
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
    assert row.guaranteed is None


def test_figures_are_computed_anew_and_not_taken_from_the_file(waveform):
    wrong = dataclasses.replace(
        waveform,
        scores={
            name: dataclasses.replace(s, dac=0.5, dac_mean=0.5, dac_worst=0.5, guaranteed=0.25)
            for name, s in waveform.scores.items()
        },
    )
    for row, right in zip(compare(wrong).rows, compare(waveform).rows, strict=True):
        assert (row.nominal, row.mean, row.worst) == (right.nominal, right.mean, right.worst)
        assert row.guaranteed == 0.25  # the proof alone is taken over


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
    assert data["pulses"][1]["infidelity_guaranteed"] is None
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
