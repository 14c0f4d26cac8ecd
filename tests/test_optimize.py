"""From a job file to a waveform file, by the command line; read back without the project."""

import json
import math
import os
import signal
import subprocess
import sys

import h5py
import numpy as np
import pytest
import reference
from job_case import Z90, Z90_LIMIT, job_text

import shaper
from shaper.cli import main
from shaper.search.checkpoint import Checkpoint

DONE, WRONG_INPUT, FELL_SHORT, INTERRUPTED = 0, 2, 3, 130
GOAL = 1e-9
TRACE = 1e-14  # the trace formula loses digits below it
ENOUGH = 4.3  # rad; W_max T of the short jobs: z(90) takes 4.156


@pytest.fixture
def run(tmp_path, monkeypatch, capsys):
    """Write a job, run ``shaper optimize`` on it in an empty folder; (code, stdout, stderr)."""
    monkeypatch.chdir(tmp_path)

    def run(text, *options):
        (tmp_path / "job.toml").write_text(text, encoding="utf-8")
        code = main(["optimize", "job.toml", *options])
        return code, *capsys.readouterr()

    return run


def plain(path, pulse="shaped"):
    """Drive [n, 2], durations [n] and target unitary by bare h5py."""
    with h5py.File(path) as file:
        group = file["pulses"][pulse]
        drive = np.stack([group["drive_x"][()], group["drive_y"][()]], axis=-1)
        w, x, y, z = file["target/quaternion"][()]
        wanted = w * np.eye(2) - 1j * (x * reference.SX + y * reference.SY + z * reference.SZ)
        return drive, group["segment_s"][()], wanted


def recomputed(path, pulse="shaped"):
    """Nominal infidelity of an exact target, from the file alone."""
    drive, durations, wanted = plain(path, pulse)
    return reference.average_gate_infidelity(reference.propagator(drive, durations), wanted)


# ---- the straight road


def test_a_pulse_at_the_bound_fits_through_the_mixer(run, tmp_path):
    """The search leaves what hold and correction need, the file says what the mixer makes of it."""
    mixer = "[mixer]\ngain = 1.03\nphase_deg = 2.0\nskew_ns = 0.1\n"
    text = job_text(1.1 * Z90_LIMIT) + mixer
    text = text.replace("[target]", "intermediate_MHz = 125.0\n[target]", 1)
    code, out, err = run(text)
    assert code == DONE, err
    waveform = shaper.load_waveform(tmp_path / "job.h5")
    pulse = waveform.pulses["shaped"]
    reach = np.hypot(*pulse.codes.T.astype(float)) / (2 ** (pulse.bits - 1) - 1)
    assert 0.9 < np.max(reach) <= 1
    assert waveform.scores["shaped"].nominal < GOAL


def test_a_nominal_job(run, tmp_path):
    code, out, err = run(job_text(1.001 * Z90_LIMIT))
    assert code == DONE
    assert "shaped" in out and "sandwich" in out and "job.h5" in out
    assert "search converged: reached stop_infidelity" in out
    assert "Traceback" not in err
    assert recomputed("job.h5") <= GOAL
    assert recomputed("job.h5", "sandwich") < TRACE
    assert sorted(path.name for path in tmp_path.iterdir()) == ["job.h5", "job.toml"]


def test_the_file_says_where_it_comes_from(run):
    text = job_text(ENOUGH, search="seed = 11")
    assert run(text)[0] == DONE
    found = shaper.load_waveform("job.h5")
    assert (found.status, found.seed, found.job_text) == ("converged", 11, text)
    assert found.title == "Test job, Alder bench, alder-1"
    for library in ("shaper", "jax", "optax", "numpy", "scipy", "h5py"):
        assert library in found.software
    assert found.pulses["shaped"].origin == "optimized"
    assert found.pulses["sandwich"].origin == "composite"
    assert found.pulses["sandwich"].source
    names = found.history_attrs["start_names"].split()
    assert len(names) == len(found.history_attrs["start_statuses"].split()) == 128
    history = found.history["infidelity"].values
    assert history.shape == (128, len(found.history["iteration"].values))
    assert np.nanmin(history[found.history_attrs["best_start"]]) <= GOAL


def test_scores_in_the_file_are_those_of_the_plain_implementation(run):
    """Nominal, from the floats and from the integer codes."""
    assert run(job_text(ENOUGH))[0] == DONE
    drive, durations, wanted = plain("job.h5")
    with h5py.File("job.h5") as file:
        shaped = file["pulses/shaped"]
        attrs = dict(shaped.attrs)
        codes = np.stack([shaped["dac_i"][()], shaped["dac_q"][()]], axis=-1).astype(float)
        clock = np.diff(shaped["sample_s"][()]).mean()
    assert attrs["infidelity"] == pytest.approx(recomputed("job.h5"), abs=TRACE)
    played = codes / (2**15 - 1) * attrs["full_scale_rad_per_s"]
    end = reference.propagator(played, np.full(len(played), clock))
    expected = reference.average_gate_infidelity(end, wanted)
    assert attrs["infidelity_dac"] == pytest.approx(expected, rel=1e-4, abs=TRACE)
    assert np.max(np.hypot(*drive.T)) <= attrs["full_scale_rad_per_s"]
    assert np.max(np.hypot(*codes.T)) <= 2**15 - 1
    assert attrs["duration_s"] == pytest.approx(np.sum(durations), rel=1e-12)


def test_short_of_the_goal_is_exit_code_3(run):
    code, out, err = run(job_text(0.99 * Z90_LIMIT))
    assert code == FELL_SHORT
    assert err.splitlines()[-1] == "shaper: short of stop_infidelity = 1e-09"
    assert "search stalled: no step improves it any more" in out
    assert recomputed("job.h5") > GOAL  # and the best that there is, is there


def test_json_is_one_object_and_nothing_else(run):
    code, out, _ = run(job_text(ENOUGH), "--json", "--output", "there.h5")
    assert code == DONE
    found = json.loads(out)  # fails on anything beside the one object
    assert out.count("\n") == 1
    assert (found["file"], found["status"], found["reached"]) == ("there.h5", "converged", True)
    assert found["needs_no_pulse"] is False
    pulses = {pulse["name"]: pulse for pulse in found["pulses"]}
    assert set(pulses) == {"shaped", "sandwich"}
    assert pulses["shaped"]["duration_ns"] == pytest.approx(64.0)
    assert pulses["shaped"]["infidelity"] == pytest.approx(recomputed("there.h5"), abs=TRACE)


def test_picture_of_the_search(run, tmp_path):
    code, out, _ = run(job_text(ENOUGH), "--figure", "search.png")
    assert code == DONE
    assert "search.png" in out
    assert (tmp_path / "search.png").read_bytes()[:8] == b"\x89PNG\r\n\x1a\n"


def test_a_file_that_is_there_is_replaced_whole(run):
    assert run(job_text(0.99 * Z90_LIMIT))[0] == FELL_SHORT
    assert run(job_text(ENOUGH))[0] == DONE
    assert recomputed("job.h5") <= GOAL


# ---- every kind of target


def test_a_gate_up_to_a_final_z(run):
    """Hadamard, with a z left over that a frame update takes: the best over all such z."""
    target = 'gate = "hadamard"\nequivalence = "up_to_final_z"'
    code, out, _ = run(job_text(ENOUGH, target), "--json")
    assert code == DONE
    assert json.loads(out)["needs_no_pulse"] is False
    drive, durations, wanted = plain("job.h5")
    u = reference.propagator(drive, durations)
    # tr(V^dag z(t) U)/2 = A cos(t/2) + B sin(t/2): A at no turn, B at half a turn
    a, b = (
        np.trace(wanted.conj().T @ reference.rotation((0, 0, 1), t) @ u) / 2 for t in (0, math.pi)
    )
    assert 2 / 3 * (1 - abs(a) ** 2 - abs(b) ** 2) <= GOAL
    assert reference.average_gate_infidelity(u, wanted) > 1e-3  # so the freedom was used


def test_a_z_gate_up_to_a_final_z_needs_no_pulse_and_says_so(run):
    code, out, _ = run(job_text(ENOUGH, Z90 + '\nequivalence = "up_to_final_z"'))
    assert code == DONE
    assert "This target needs no pulse at all" in out


def test_from_state_to_state(run):
    """Up to the equator and round: |<to|U|from>|^2, by hand."""
    target = "from_state = [0, 0, 1]\nto_state = [0.6, 0.8, 0]"
    assert run(job_text(ENOUGH, target))[0] == DONE
    drive, durations, _ = plain("job.h5")
    u = reference.propagator(drive, durations)
    end = np.array([1, 0.6 + 0.8j]) / math.sqrt(2)
    assert 1 - abs(end.conj() @ u @ [1, 0]) ** 2 <= GOAL
    with h5py.File("job.h5") as file:
        stored = file["pulses/shaped"].attrs["infidelity"]
    assert stored == pytest.approx(1 - abs(end.conj() @ u @ [1, 0]) ** 2, abs=TRACE)


def test_the_offset_of_the_qubit_is_part_of_the_job(run):
    """A qubit off the carrier: the pulse is right with the offset and wrong without it."""
    offset_MHz = 1.0
    text = job_text(1.1 * Z90_LIMIT).replace(
        "[drive]", f"[qubit]\ndetuning_MHz = {offset_MHz}\n[drive]"
    )
    assert run(text)[0] == DONE
    drive, durations, wanted = plain("job.h5")
    there = reference.propagator(drive, durations, delta=2e6 * math.pi * offset_MHz)
    assert reference.average_gate_infidelity(there, wanted) <= GOAL
    assert recomputed("job.h5") > 1e-4


def test_a_tolerance_without_a_goal_runs_its_course_and_is_done(run):
    search = "starts = 8\niterations = 60"  # as in test_search: one compiled program
    code, out, _ = run(job_text(3 * math.pi, slices=30, tolerance=(0.05, 0.1), search=search))
    assert code == DONE
    assert "guaranteed" in out
    with h5py.File("job.h5") as file:
        attrs = dict(file["pulses/shaped"].attrs)
    assert 0 < attrs["infidelity"] <= attrs["infidelity_mean"] <= attrs["infidelity_worst"] < 0.05


def test_the_shortest_duration_and_its_curve(run):
    """z(90) takes 4.156 / W_max: in slices of 0.139 rad at least 30 of them."""
    unit = 0.139
    text = job_text(40 * unit, slices=40, search="starts = 8")
    code, out, _ = run(text, "--shortest", "--json")
    assert code == DONE
    shaped = next(pulse for pulse in json.loads(out)["pulses"] if pulse["name"] == "shaped")
    assert math.ceil(Z90_LIMIT / unit) == 30
    assert shaped["duration_ns"] == pytest.approx(30)
    assert recomputed("job.h5") <= GOAL
    found = shaper.load_waveform("job.h5")
    durations = found.history["duration_s"].values
    infidelity = found.history["best_infidelity"].values
    assert np.all(np.diff(durations) > 0)
    assert durations[np.argmax(infidelity <= GOAL)] == pytest.approx(30e-9, rel=1e-9)


# ---- refused before anything is spent


@pytest.mark.parametrize(
    ("option", "words"),
    [
        (("--output", "nowhere/job.h5"), "expected an existing folder, nowhere is none"),
        (("--output", "."), "expected a file that can be written there"),
        (("--figure", "nowhere/a.png"), "expected an existing folder, nowhere is none"),
        (("--figure", "a.bmp"), "a.bmp"),
        (("--resume",), "expected a checkpoint"),
        (("--output", "job.toml"), "expected another file than the job itself"),
        (("--output", "./job.toml"), "expected another file than the job itself"),
    ],
)
def test_wrong_use_is_refused_before_the_search(run, tmp_path, monkeypatch, option, words):
    def never(*_, **__):
        raise AssertionError("the search began")

    monkeypatch.setattr("shaper.search.descent._Run.advance", never)
    code, out, err = run(job_text(ENOUGH), *option)
    assert code == WRONG_INPUT
    assert out == ""
    assert words in err
    assert err.count("\n") == 1
    assert [path.name for path in tmp_path.iterdir()] == ["job.toml"]
    assert (tmp_path / "job.toml").read_text(encoding="utf-8") == job_text(ENOUGH)


def test_shortest_needs_a_goal(run, tmp_path):
    code, out, err = run(job_text(ENOUGH, tolerance=(0.05, 0.1)), "--shortest")
    assert (code, out) == (WRONG_INPUT, "")
    assert "--shortest needs search.stop_infidelity" in err
    assert [path.name for path in tmp_path.iterdir()] == ["job.toml"]


# ---- Ctrl-C, and going on

SLOW = job_text(
    4 * math.pi, tolerance=(0.05, 0.1), search="starts = 64\niterations = 3000\nseed = 3"
)
# a line of progress after every chunk, so that the test knows when the search is under way
TALKATIVE = (
    "import shaper.cli.progress as p; p._IN_A_LOG = 0.0\n"
    "from shaper.cli import main; raise SystemExit(main())"
)


def test_ctrl_c_leaves_a_readable_file(tmp_path):
    (tmp_path / "job.toml").write_text(SLOW, encoding="utf-8")
    process = subprocess.Popen(
        [sys.executable, "-c", TALKATIVE, "optimize", "job.toml", "--json"],
        cwd=tmp_path,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    for line in process.stderr:
        if line.startswith("exploring"):
            os.kill(process.pid, signal.SIGINT)
            break
    out, err = process.communicate()
    assert process.returncode == INTERRUPTED, err
    assert "stopping: the best so far is kept" in err
    assert "Traceback" not in err
    assert json.loads(out)["status"] == "interrupted"
    found = shaper.load_waveform(tmp_path / "job.h5")
    assert found.status == "interrupted"
    assert found.scores["shaped"].worst < 0.5  # better than chance: the best start's first steps
    with h5py.File(tmp_path / "job.h5") as file:
        assert file.attrs["status"] == "interrupted"


@pytest.mark.parametrize("levels", [2, 3])
def test_a_resumed_search_ends_like_an_unbroken_one(tmp_path, levels):
    """Stopped twice, taken up twice: the same waveform, bit for bit."""
    text = job_text(0.99 * Z90_LIMIT, search="seed = 5\nstarts = 16")
    if levels > 2:
        text = text.replace("[drive]", "[qubit]\nanharmonicity_MHz = -210.0\n[drive]", 1)
    job = shaper.parse_job(text)
    unbroken = shaper.optimize(job)

    def stopped_after(looks, resume):
        def write(path, data):
            path.write_bytes(data)

        left = iter(range(looks - 1))
        kept = Checkpoint(tmp_path / "kept", job, write, resume)
        return shaper.optimize(job, None, lambda: next(left, None) is None, kept)

    assert stopped_after(2, resume=False).status == "interrupted"
    assert stopped_after(3, resume=True).status == "interrupted"
    resumed = stopped_after(1000, resume=True)
    assert resumed.status == unbroken.status != "interrupted"
    mine, yours = resumed.pulses["shaped"], unbroken.pulses["shaped"]
    assert mine.drive.tobytes() == yours.drive.tobytes()
    assert mine.codes.tobytes() == yours.codes.tobytes()
    history, other = resumed.history["infidelity"].values, unbroken.history["infidelity"].values
    assert history.tobytes() == other.tobytes()


def test_resume_by_the_command_line(run, tmp_path, monkeypatch):
    """The checkpoint lies beside the output and is gone when the search is done."""
    monkeypatch.setattr("shaper.search.checkpoint.INTERVAL", 0.0)
    text = job_text(0.99 * Z90_LIMIT, search="seed = 5")
    job = shaper.parse_job(text)
    left = iter(range(2))
    kept = Checkpoint(
        tmp_path / "job.h5.checkpoint", job, lambda path, data: path.write_bytes(data)
    )
    shaper.optimize(job, None, lambda: next(left, None) is None, kept)
    assert run(text.replace("seed = 5", "seed = 6"), "--resume")[0] == WRONG_INPUT
    assert run(text, "--resume")[0] == FELL_SHORT
    assert sorted(p.name for p in tmp_path.iterdir()) == ["job.h5", "job.toml"]


@pytest.mark.parametrize("damage", ["cut", "flip", "empty", "text"])
def test_a_damaged_checkpoint_is_refused_in_one_line(run, tmp_path, rng, damage):
    text = job_text(0.99 * Z90_LIMIT)
    path = tmp_path / "job.h5.checkpoint"
    kept = Checkpoint(path, shaper.parse_job(text), lambda path, data: path.write_bytes(data))
    kept.save({"parameters": rng.normal(size=(4, 64, 2))})
    data = bytearray(path.read_bytes())
    data[len(data) // 2] ^= 0xFF
    path.write_bytes(
        {"cut": data[: len(data) // 2], "flip": data, "empty": b"", "text": b"job"}[damage]
    )
    code, out, err = run(text, "--resume")
    assert (code, out) == (WRONG_INPUT, "")
    assert err.count("\n") == 1
    assert "not a whole checkpoint" in err
