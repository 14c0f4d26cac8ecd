"""Job files: what they mean in SI, and that a bad one costs one line per fault and nothing else."""

import math
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from shaper import rotation
from shaper.cli import main
from shaper.errors import InputError
from shaper.job import parse_job, read_job

CONFIGS = Path(__file__).parents[1] / "configs"
ROUND_OFF = 1e-12  # relative, of a few unit conversions
WRONG_INPUT = 2

GOOD = """
title = "Quarter turn, Alder bench, alder-1"
[qubit]
detuning_MHz = 0.25
t1_us = 60.0
t2_us = 45.0
anharmonicity_MHz = -210.0
[drive]
rabi_max_MHz = 25.0
bound = "circle"
sample_rate_MSps = 2000.0
dac_bits = 14
granularity_samples = 4
min_samples = 16
[target]
gate = "z"
angle_deg = 90.0
[tolerance]
amplitude = 0.02
detuning_MHz = 0.5
[pulse]
duration_ns = 60.0
slice_ns = 1.0
[search]
starts = 16
iterations = 500
seed = 7
minimize = "worst"
stop_infidelity = 1e-9
"""
TARGET = '[target]\ngate = "z"\nangle_deg = 90.0'


def with_changes(*changes):
    text = GOOD
    for old, new in changes:
        assert old in text, old
        text = text.replace(old, new)
    return text


def with_target(lines):
    return parse_job(with_changes((TARGET, "[target]\n" + lines)))


# ---- what a job means


def test_a_job_in_si():
    job = parse_job(GOOD)
    mega = 2e6 * math.pi
    assert job.title == "Quarter turn, Alder bench, alder-1"
    assert job.text == GOOD
    assert job.rabi_max == pytest.approx(25 * mega, rel=ROUND_OFF)
    assert job.detuning == pytest.approx(0.25 * mega, rel=ROUND_OFF)
    assert job.anharmonicity == pytest.approx(-210 * mega, rel=ROUND_OFF)
    assert (job.t1, job.t2) == pytest.approx((60e-6, 45e-6), rel=ROUND_OFF)
    assert job.sample_rate == pytest.approx(2e9, rel=ROUND_OFF)
    assert (job.dac_bits, job.granularity, job.min_samples) == (14, 4, 16)
    assert job.amplitude_tolerance == 0.02
    assert job.detuning_tolerance == pytest.approx(0.5 * mega, rel=ROUND_OFF)
    assert (job.slices, job.samples_per_slice) == (60, 2)
    assert job.slice_duration == pytest.approx(1e-9, rel=ROUND_OFF)
    assert job.duration == pytest.approx(60e-9, rel=ROUND_OFF)
    assert (job.starts, job.iterations, job.seed) == (16, 500, 7)
    assert (job.minimize, job.stop_infidelity) == ("worst", 1e-9)
    assert job.has_tolerance
    assert np.allclose(job.target.quaternion, rotation.about_z(math.pi / 2), atol=ROUND_OFF)


def test_the_goal_without_a_tolerance_is_1e_9_and_with_one_there_is_none():
    bare = with_changes(("stop_infidelity = 1e-9\n", ""))
    assert parse_job(bare).stop_infidelity is None
    nominal = bare.replace("amplitude = 0.02\ndetuning_MHz = 0.5\n", "")
    assert parse_job(nominal).stop_infidelity == 1e-9
    assert not parse_job(nominal).has_tolerance


@pytest.mark.parametrize(
    ("lines", "quaternion"),
    [
        ('gate = "z"\nangle_deg = -90.0', rotation.about_z(-math.pi / 2)),
        ('gate = "z"\nangle_deg = 450', rotation.about_z(2.5 * math.pi)),
        ('gate = "x"\nangle_deg = 30.0', rotation.about_x(math.pi / 6)),
        ('gate = "y"\nangle_deg = -30.0', rotation.about_y(-math.pi / 6)),
        ('gate = "hadamard"', rotation.from_axis_angle((1, 0, 1), math.pi)),
        ('gate = "s"', rotation.about_z(math.pi / 2)),
        ('gate = "t_inverse"', rotation.about_z(-math.pi / 4)),
        ('gate = "sqrt_x"', rotation.about_x(math.pi / 2)),
        (
            "axis = [1, 2, 3]\nangle_deg = 100.0",
            rotation.from_axis_angle((1, 2, 3), 100 * math.pi / 180),
        ),
        (
            "euler_deg = [90, 90, -90]",  # z, then y, then z, in time order: about x by +90
            rotation.in_time_order(
                rotation.about_z(math.pi / 2),
                rotation.about_y(math.pi / 2),
                rotation.about_z(-math.pi / 2),
            ),
        ),
        ("unitary = [[[0, 0], [0, -1]], [[0, -1], [0, 0]]]", rotation.about_x(math.pi)),
        ("unitary = [[[1, 0], [0, 0]], [[0, 0], [0, 1]]]", rotation.about_z(math.pi / 2)),
    ],
)
def test_every_form_of_target(lines, quaternion):
    found = rotation.canonical(with_target(lines).target.quaternion)
    assert np.max(np.abs(found - rotation.canonical(quaternion))) < ROUND_OFF


def test_states_and_equivalence():
    job = with_target("from_state = [0, 0, 2]\nto_state = [0, 3, 0]")
    assert job.target.kind == "state"
    turned = rotation.bloch_matrix(job.target.quaternion) @ [0, 0, 1]
    assert np.max(np.abs(turned - [0, 1, 0])) < ROUND_OFF
    assert np.array_equal(job.target.free_axis, [0, 1, 0])
    framed = with_target('gate = "hadamard"\nequivalence = "up_to_final_z"')
    assert np.array_equal(framed.target.free_axis, [0, 0, 1])
    assert with_target('gate = "s"\nequivalence = "up_to_final_z"').target.needs_no_pulse


def test_every_job_of_the_bench_is_sound():
    paths = sorted(CONFIGS.glob("*.toml"))
    assert len(paths) >= 5
    for path in paths:
        assert "Alder bench" in read_job(path).title


@given(st.integers(1, 500), st.integers(1, 50), st.floats(0.01, 20_000))
def test_whole_slices_of_whole_samples(slices, samples, rate_MSps):
    """However the three decimal numbers round, whole stays whole."""
    slice_ns = samples / rate_MSps * 1e3
    text = with_changes(
        ("sample_rate_MSps = 2000.0", f"sample_rate_MSps = {rate_MSps!r}"),
        ("slice_ns = 1.0", f"slice_ns = {slice_ns!r}"),
        ("duration_ns = 60.0", f"duration_ns = {slices * slice_ns!r}"),
        ("rabi_max_MHz = 25.0", f"rabi_max_MHz = {1e-3 * rate_MSps!r}"),
        ("detuning_MHz = 0.25\n", ""),
        ("detuning_MHz = 0.5\n", ""),
    )
    job = parse_job(text)
    assert (job.slices, job.samples_per_slice) == (slices, samples)


# ---- what is refused

# each: the change to a good job, and what its one line must say: place, expected, what came
FAULTS = {
    "not TOML": ((GOOD, "title = [[["), ["not valid TOML"]),
    "huge integer": (("seed = 7", "seed = " + 5000 * "1"), ["not valid TOML"]),
    "endless nesting": (("title = ", "deep = " + 5000 * "[" + "\ntitle = "), ["not valid TOML"]),
    "unknown key": (("bound = ", "bond = "), ["drive.bond: unknown key", "known key: bound"]),
    "unknown section": (("[search]", "[serach]"), ["serach: unknown key", "known key: search"]),
    "key with control characters": (
        ("title = ", '"\\u001b[2Jx\\ny" = 1\ntitle = '),
        [r"\u001b[2Jx\u000ay: unknown key, got 1"],
    ),
    "text for a number": (
        ("rabi_max_MHz = 25.0", 'rabi_max_MHz = "25"'),
        ["drive.rabi_max_MHz: expected a valid number, got '25'"],
    ),
    "truth for a number": (
        ("amplitude = 0.02", "amplitude = true"),
        ["tolerance.amplitude", "True"],
    ),
    "fraction for a count": (("dac_bits = 14", "dac_bits = 14.5"), ["drive.dac_bits", "14.5"]),
    "missing key": (
        ("rabi_max_MHz = 25.0\n", ""),
        ["drive.rabi_max_MHz: expected this key, got none"],
    ),
    "missing section": (("[pulse]\nduration_ns = 60.0\nslice_ns = 1.0\n", ""), ["pulse: expected"]),
    "nan": (("rabi_max_MHz = 25.0", "rabi_max_MHz = nan"), ["expected a finite number, got nan"]),
    "infinity": (("t1_us = 60.0", "t1_us = inf"), ["qubit.t1_us: expected a finite number"]),
    "nan in a duration": (
        ("duration_ns = 60.0", "duration_ns = nan"),
        ["pulse.duration_ns: expected a finite number or 'shortest' or 'best', got nan"],
    ),
    "no drive": (("rabi_max_MHz = 25.0", "rabi_max_MHz = 0.0"), ["drive.rabi_max_MHz", "got 0"]),
    "negative tolerance": (
        ("amplitude = 0.02", "amplitude = -0.02"),
        ["greater than or equal to 0"],
    ),
    "beyond all size": (("rabi_max_MHz = 25.0", "rabi_max_MHz = 1e308"), ["drive.rabi_max_MHz"]),
    "beyond all patience": (
        ("rabi_max_MHz = 25.0", "rabi_max_MHz = 1e9"),
        ["pulse.duration_ns", "at most 100000 rad in all"],
    ),
    "beyond all memory": (
        ("sample_rate_MSps = 2000.0", "sample_rate_MSps = 1e12"),
        ["pulse.duration_ns: expected at most 10000000 samples"],
    ),
    "too many slices": (
        ("duration_ns = 60.0", "duration_ns = 1e6"),
        ["pulse.duration_ns: expected at most 100000 slices, got 1000000"],
    ),
    "slice of broken samples": (
        ("slice_ns = 1.0", "slice_ns = 0.75"),
        ["pulse.slice_ns", "multiple of 0.5 ns", "0.75 ns = 1.5 samples"],
    ),
    "duration of broken slices": (
        ("duration_ns = 60.0", "duration_ns = 60.5"),
        ["pulse.duration_ns", "multiple of 1 ns", "60.5 slices"],
    ),
    "unphysical coherence": (
        ("t2_us = 45.0", "t2_us = 150.0"),
        ["qubit.t2_us: expected at most 2"],
    ),
    "unknown gate": (('gate = "z"', 'gate = "q"'), ["target.gate: expected 'x', 'y', 'z'"]),
    "unknown bound": (('bound = "circle"', 'bound = "disc"'), ["drive.bound", "'circle' or 'box'"]),
    "no target": ((TARGET, "[target]"), ["target: expected exactly one of gate, axis", "got none"]),
    "two targets": (
        (TARGET, TARGET + "\naxis = [1, 0, 0]"),
        ["target: expected exactly one of", "got gate and axis"],
    ),
    "no angle": (("angle_deg = 90.0\n", ""), ["target.angle_deg: expected an angle"]),
    "angle too many": (
        ('gate = "z"', 'gate = "s"'),
        ["target.angle_deg: expected only with x, y, z"],
    ),
    "zero axis": (
        (TARGET, "[target]\naxis = [0, 0, 0]\nangle_deg = 90"),
        ["target.axis: expected a vector other than zero"],
    ),
    "short axis": (
        (TARGET, "[target]\naxis = [0, 1]\nangle_deg = 90"),
        ["target.axis: expected at least 3 entries"],
    ),
    "not unitary": (
        (TARGET, "[target]\nunitary = [[[1, 0], [0, 0]], [[0, 0], [0.9, 0]]]"),
        ["target.unitary: expected U^dag U = 1 within 1e-6, it is off by 0.19"],
    ),
    "one state": (
        (TARGET, "[target]\nfrom_state = [0, 0, 1]"),
        ["target: expected from_state and to_state together"],
    ),
    "title on two lines": (("title = ", 'title = "a\\nb" #'), ["title: expected printable text"]),
    "goal beyond one": (("stop_infidelity = 1e-9", "stop_infidelity = 1.0"), ["less than 1"]),
    "line without its file": (
        ("[search]", '[line]\nkind = "step_response"\n[search]'),
        ["line.file: expected a value with kind = 'step_response', got None"],
    ),
    "measured line without a carrier": (
        ("[search]", '[line]\nkind = "touchstone"\nfile = "a.s2p"\n[search]'),
        ["drive.carrier_GHz: expected a value with a touchstone line"],
    ),
    "second qubit without a target": (
        ("[search]", '[[group]]\nname = "alder-2"\noffset_MHz = 3.0\n[search]'),
        ["group.0.target: expected this key, got none"],
    ),
    "second qubit with a wrong target": (
        (
            "[search]",
            '[[group]]\nname = "alder-2"\noffset_MHz = 3.0\n'
            "target = {unitary = [[[1, 0], [1, 0]], [[0, 0], [1, 0]]]}\n[search]",
        ),
        ["group.0.target.unitary: expected U^dag U = 1"],
    ),
    "rise longer than the pulse": (
        ("[search]", "[shape]\nrise_ns = 30.0\n[search]"),
        ["shape.rise_ns: expected less than half of pulse.duration_ns = 60, got 30"],
    ),
    "beyond half the sample rate": (
        ("dac_bits = 14", "dac_bits = 14\nintermediate_MHz = 1000.0"),
        ["drive.intermediate_MHz: expected less than half of sample_rate_MSps, got 1000"],
    ),
    "slopes of nothing": (
        ('minimize = "worst"', 'minimize = "first_order"'),
        ['search.minimize: expected a tolerance with "first_order"'],
    ),
    "shortest without a goal": (
        ("duration_ns = 60.0", 'duration_ns = "shortest"'),
        ["pulse.duration_ns: expected search.stop_infidelity"],
    ),
    "weight of what cannot leak": (
        ("seed = 7", "seed = 7\nleakage_weight = 10.0"),
        ["search.leakage_weight: expected qubit.anharmonicity_MHz with it", "got 10 and no"],
    ),
    "leakage that weighs nothing": (
        ("seed = 7", "seed = 7\nleakage_weight = 0.0"),
        ["search.leakage_weight", "got 0.0"],
    ),
    "best without decay": (
        ("duration_ns = 60.0", 'duration_ns = "best"'),
        ["pulse.duration_ns: expected qubit.t1_us or qubit.t2_us"],
    ),
}
# what else has to change for a fault to stand alone
ALSO = {
    "weight of what cannot leak": [("anharmonicity_MHz = -210.0\n", "")],
    "best without decay": [("t1_us = 60.0", ""), ("t2_us = 45.0", "")],
    "shortest without a goal": [("stop_infidelity = 1e-9\n", "")],
    "slopes of nothing": [
        ("amplitude = 0.02\ndetuning_MHz = 0.5\n", ""),
        ("anharmonicity_MHz = -210.0\n", ""),
    ],
    "second qubit with a wrong target": [("anharmonicity_MHz = -210.0\n", "")],
}


@pytest.mark.parametrize("fault", FAULTS)
def test_a_bad_job_is_refused_in_one_line(fault, tmp_path, capsys, monkeypatch):
    """Exit code 2, one line that names place, expectation and what came; nothing is written."""
    change, words = FAULTS[fault]
    job = tmp_path / "job.toml"
    job.write_text(with_changes(change, *ALSO.get(fault, [])), encoding="utf-8")
    monkeypatch.chdir(tmp_path)
    assert main(["optimize", "job.toml", "--output", "out.h5"]) == WRONG_INPUT
    shown = capsys.readouterr()
    assert shown.out == ""
    lines = shown.err.splitlines()
    assert len(lines) == 1, lines
    assert lines[0].startswith("shaper: job.toml: ")
    assert lines[0].isprintable()
    for word in words:
        assert word in lines[0]
    assert [path.name for path in tmp_path.iterdir()] == ["job.toml"]


def test_there_are_at_least_twelve_kinds_of_fault():
    assert len(FAULTS) >= 12


def test_every_fault_has_a_line_of_its_own():
    text = with_changes(
        ("bound = ", "bond = "), ("dac_bits = 14", "dac_bits = 99"), ("amplitude = 0.02", "amp = 1")
    )
    with pytest.raises(InputError) as caught:
        parse_job(text, "job.toml")
    places = sorted(line.split(": ")[1] for line in caught.value.lines)
    assert places == ["drive.bond", "drive.dac_bits", "tolerance.amp"]


@pytest.mark.parametrize(
    ("content", "word"),
    [
        (None, "cannot read the job file"),
        ("folder", "cannot read the job file"),
        (b"\xff\xfe\x00t", "expected UTF-8 text"),
        (b"#" * 1_000_001, "below 1000000 bytes"),
    ],
)
def test_what_is_no_job_file_at_all(tmp_path, capsys, monkeypatch, content, word):
    job = tmp_path / "job.toml"
    if content == "folder":
        job.mkdir()
    elif content is not None:
        job.write_bytes(content)
    monkeypatch.chdir(tmp_path)
    assert main(["optimize", "job.toml"]) == WRONG_INPUT
    shown = capsys.readouterr()
    assert word in shown.err
    assert shown.err.count("\n") == 1
    assert list(tmp_path.glob("*.h5")) == []


def test_a_bad_job_in_a_process_of_its_own(tmp_path):
    """The whole way once: ``python -m shaper``, no traceback, no file."""
    (tmp_path / "job.toml").write_text(with_changes(("bound = ", "bond = ")), encoding="utf-8")
    done = subprocess.run(
        [sys.executable, "-m", "shaper", "optimize", "job.toml"],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == WRONG_INPUT
    assert done.stdout == ""
    assert done.stderr == (
        "shaper: job.toml: drive.bond: unknown key, got 'circle'; nearest known key: bound\n"
    )
    assert [path.name for path in tmp_path.iterdir()] == ["job.toml"]


@settings(deadline=None, max_examples=200)
@given(st.data())
def test_no_mangled_job_ends_in_anything_but_a_job_or_a_line(data):
    """Characters of a good job replaced at random: a job, or InputError with printable lines."""
    text = list(GOOD)
    for _ in range(data.draw(st.integers(1, 4))):
        at = data.draw(st.integers(0, len(text) - 1))
        text[at] = data.draw(st.characters() | st.sampled_from("0123456789-.[]{}\"'=\n"))
    try:
        job = parse_job("".join(text))
    except InputError as error:
        assert error.lines
        assert all(line.isprintable() for line in error.lines if "not valid TOML" not in line)
    else:
        assert math.isfinite(job.rabi_max * job.duration)
        assert job.slices >= 1 and job.samples_per_slice >= 1
