"""Composite pulses as a waveform file, straight from a job."""

import json

import numpy as np
import pytest
import reference

from shaper.cli import main
from shaper.composite.library import LIBRARY
from shaper.store import load_waveform

JOB = """
title = "Three-eighths turn, Alder bench, alder-2"
[drive]
rabi_max_MHz = 25.0
bound = "BOUND"
sample_rate_MSps = 1000.0
dac_bits = 14
[target]
gate = "z"
angle_deg = 135.0
[tolerance]
amplitude = 0.02
detuning_MHz = 0.5
[pulse]
duration_ns = 60.0
slice_ns = 1.0
"""
CODES = 1e-6  # infidelity of fourteen-bit codes in a composite of twenty arcs, with room


@pytest.fixture(params=["circle", "box"])
def job_file(request, tmp_path):
    path = tmp_path / "z135.toml"
    path.write_text(JOB.replace("BOUND", request.param))
    return path


def test_every_composite_in_one_file(job_file, tmp_path, capsys):
    """Read back and recomputed from the codes by textbook matrices alone."""
    output = tmp_path / "z135.h5"
    assert main(["compose", str(job_file), "--output", str(output)]) == 0
    out = capsys.readouterr().out
    waveform = load_waveform(output)
    assert waveform.status == "composite"
    assert set(LIBRARY) - {"90-180-90", "Knill"} < set(waveform.pulses)
    wanted = reference.rotation((0, 0, 1), np.radians(135))
    for name, pulse in waveform.pulses.items():
        assert name in out
        decoded = pulse.codes.astype(float) / 8191 * 2 * np.pi * 25e6
        changes = np.flatnonzero(np.any(np.diff(decoded, axis=0) != 0, axis=1)) + 1
        starts = np.concatenate([[0], changes])
        lengths = np.diff(np.concatenate([starts, [len(decoded)]])) * 1e-9
        actual = reference.propagator(decoded[starts], lengths)
        found = reference.average_gate_infidelity(actual, wanted)
        assert found < CODES, name
        assert waveform.scores[name].dac == pytest.approx(found, rel=1e-6, abs=3e-14)


def test_named_composites_in_the_order_asked_for(job_file, tmp_path, capsys):
    output = tmp_path / "two.h5"
    command = ["compose", str(job_file), "--pulse", "two-pulse-Knill", "BB1", "--json"]
    assert main([*command, "--output", str(output)]) == 0
    data = json.loads(capsys.readouterr().out)
    assert [pulse["name"] for pulse in data["pulses"]] == ["two-pulse-Knill", "BB1"]
    assert "Wimperis" in data["pulses"][1]["source"]
    assert data["file"] == str(output)
    assert set(load_waveform(output).pulses) == {"two-pulse-Knill", "BB1"}


def test_what_the_library_does_not_have_writes_nothing(job_file, tmp_path, capsys):
    output = tmp_path / "none.h5"
    assert main(["compose", str(job_file), "--pulse", "Knil", "--output", str(output)]) == 2
    job_file.write_text(job_file.read_text().replace('"z"', '"z"\nequivalence = "up_to_final_z"'))
    assert main(["compose", str(job_file), "--output", str(output)]) == 2
    err = capsys.readouterr().err.splitlines()
    assert len(err) == 2 and "expected one of" in err[0] and "needs a pulse" in err[1]
    assert not output.exists()
