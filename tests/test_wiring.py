"""From the job's bench to the codes, and from the codes to the qubit."""

from pathlib import Path

import numpy as np
import pytest

from shaper.drive import dac
from shaper.errors import InputError, SafetyError
from shaper.job import parse_job, read_job
from shaper.physics.propagate import propagate
from shaper.target import Target, infidelity
from shaper.wiring import arriving, path_of, play

MHZ, NS = 2e6 * np.pi, 1e-9
DATA = Path(__file__).resolve().parent.parent / "configs" / "alder_data"
JOB = """
[drive]
rabi_max_MHz = 25.0
sample_rate_MSps = 1000.0
dac_bits = {bits}
{drive}
[target]
gate = "z"
angle_deg = 90.0
[pulse]
duration_ns = 40.0
slice_ns = 1.0
"""


def bench(extra="", bits=14, drive=""):
    return parse_job(JOB.format(bits=bits, drive=drive) + extra, folder=DATA)


@pytest.fixture
def wanted():
    t = (np.arange(40) + 0.5) / 40
    drive = np.stack([np.sin(np.pi * t), 0.7 * np.sin(3 * np.pi * t)], axis=-1)
    return 20 * MHZ * drive / np.max(np.hypot(*drive.T))


def end(drive, durations):
    return propagate(drive, durations, 0.0, 0.0)


def test_straight_bench_plays_the_rounded_drive(wanted):
    job = bench()
    pulse = play(job, wanted, np.ones(40, int), "optimized")
    assert path_of(job).straight
    assert np.array_equal(pulse.codes, dac.encode(wanted, job.rabi_max, 14, "circle"))
    drive, durations = arriving(job, pulse)
    assert np.sum(durations) == pytest.approx(40 * NS)


@pytest.mark.parametrize(
    ("extra", "drive", "within"),
    [
        ("[mixer]\ngain = 1.04\nphase_deg = 3.0\noffset_i_MHz = 0.3\n", "", 1e-7),
        ("", "intermediate_MHz = 100.0", 1e-4),  # a held sample turns by 36 degrees
        ("[mixer]\ngain = 0.97\nskew_ns = 0.2\n", "", 1e-5),
        ('[line]\nkind = "first_order"\nbandwidth_MHz = 100.0\n', 'correction = "inverse"', 1e-4),
    ],
)
def test_what_is_wanted_arrives(wanted, extra, drive, within):
    """Corrected, the pulse arrives; the same codes made without the correction do not."""
    job = bench(extra, drive=drive)
    target = Target(end(wanted, np.full(40, NS)))
    pulse = play(job, wanted, np.ones(40, int), "optimized")
    lost = infidelity(end(*arriving(job, pulse, 16)), target)
    ignored = play(bench(), wanted, np.ones(40, int), "optimized")
    assert lost < within
    assert infidelity(end(*arriving(job, ignored, 16)), target) > 10 * lost
    assert pulse.drive[:40] == pytest.approx(wanted)
    assert len(pulse.codes) == np.sum(pulse.samples)


def test_polish_is_asked_for_by_the_job(wanted):
    target_job = bench(bits=8)
    plain = play(target_job, wanted, np.ones(40, int), "optimized")
    asked = bench(bits=8, drive="polish = true")
    polished = play(asked, wanted, np.ones(40, int), "optimized", polished=True)
    target = Target(end(wanted, np.full(40, NS)))
    lost = [infidelity(end(*arriving(target_job, p)), target) for p in (plain, polished)]
    # the polish holds the error against the job's own gate: here that error is large, so the
    # codes only have to keep it; against the float pulse they are a hundred times closer
    assert lost[1] < lost[0] / 100
    with pytest.raises(InputError, match="drive.polish: expected false with a mixer"):
        faulty = bench("[mixer]\ngain = 1.1\n", drive="polish = true")
        play(faulty, wanted, np.ones(40, int), "optimized", polished=True)


def test_corrections_that_need_too_much_room_are_refused(wanted):
    with pytest.raises(SafetyError, match="lower rabi_max by"):
        play(bench("[mixer]\ngain = 0.7\n"), wanted / 20 * 25, np.ones(40, int), "optimized")


@pytest.mark.parametrize("name", sorted(p.name for p in DATA.parent.glob("*.toml")))
def test_every_job_of_the_bench_has_its_path(name):
    """The jobs that ship are valid, and the files they name are there and fit."""
    job = read_job(DATA.parent / name)
    if job.line.kind == "touchstone":
        pytest.importorskip("skrf")
    assert path_of(job).straight == (
        job.line.kind == "none" and job.intermediate_frequency == 0 and job.mixer.gain == 1.0
    )
