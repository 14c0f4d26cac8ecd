"""From the job's bench to the codes, and from the codes to the qubit."""

from pathlib import Path

import numpy as np
import pytest

from shaper.bench import error_grid
from shaper.drive import dac
from shaper.errors import InputError, SafetyError
from shaper.evidence import independent
from shaper.job import parse_job, read_job
from shaper.physics.propagate import propagate
from shaper.target import Target, infidelity
from shaper.wiring import arriving, for_search, path_of, play

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


FAULTS = "[mixer]\ngain = 1.03\nphase_deg = 2.0\noffset_i_MHz = 0.1\nskew_ns = {skew}\n"


@pytest.mark.parametrize("skew", [0.0, 0.1])
@pytest.mark.parametrize("frequency", [100.0, -180.0, 400.0])
@pytest.mark.parametrize("held", [1, 3])
def test_what_turns_within_held_samples_is_bent_away(wanted, skew, frequency, held):
    """Followed from the codes by an integrator that knows arms, delay and carrier, and no cells."""
    job = bench(FAULTS.format(skew=skew), 16, f"intermediate_MHz = {frequency}")
    drive = 0.7 * wanted[held // 2 :: held]  # the hold takes a quarter of 400 MHz
    samples = np.full(len(drive), held)
    target = Target(end(drive, samples * NS))
    plain, bent = (play(job, drive, samples, "", polished=p) for p in (False, True))
    lost = []
    for pulse in (plain, bent):
        codes = dac.decode(pulse.codes, pulse.full_scale, pulse.bits)
        unitary = independent.integrated_mixer(path_of(job), codes, pulse.sample_rate)
        lost.append(independent.infidelity(independent.superoperator(unitary), target))
    assert lost[0] > 1e-6
    assert lost[1] < 2e-8  # what 16 bits and 16 cells a sample leave
    assert infidelity(end(*arriving(job, bent)), target) == pytest.approx(lost[1], abs=2e-8)
    assert np.max(np.abs(bent.drive - drive)) < 0.02 * job.rabi_max
    assert np.array_equal(plain.drive, drive)


def test_bent_pulse_keeps_its_errors_over_the_box_and_behind_a_line(wanted):
    """As robust as it was: at every corner it errs like the pulse without ripple."""
    line = '[line]\nkind = "first_order"\nbandwidth_MHz = 150.0\n'
    box = "[tolerance]\namplitude = 0.03\ndetuning_MHz = 1.0\n"
    ones, frequency = np.ones(40, int), "intermediate_MHz = 150.0"
    for correction in ("model", "inverse", "none"):
        way = line + box
        job = bench(way, 16, f'{frequency}\ncorrection = "{correction}"')
        straight = bench(way, 16, f'correction = "{correction}"')
        if correction == "none":  # a line that is not reckoned with does not steer the bending
            scored, ideal = bench(box, 16, frequency), bench(box, 16)
        else:
            scored, ideal = job, straight
        grid = error_grid(job, 3, 3)
        aim = propagate(*arriving(ideal, play(straight, wanted, ones, "")), grid.eps, grid.delta)
        lost = []
        for polished in (False, True):
            pulse = play(job, wanted, ones, "", polished=polished)
            got = propagate(*arriving(scored, pulse), grid.eps, grid.delta)
            lost.append(np.max(1 - np.sum(got * aim, axis=-1) ** 2))
        assert lost[1] < lost[0] / 100, correction


def test_search_gets_the_part_of_the_bound_that_the_corrections_leave(wanted):
    straight = bench()
    assert for_search(straight) is straight
    job = bench(FAULTS.format(skew=0.1), drive="intermediate_MHz = 200.0")
    within = for_search(job)
    assert 0.8 * job.rabi_max < within.rabi_max < np.sinc(0.2) * job.rabi_max
    at_bound = within.rabi_max * wanted / np.hypot(*wanted.T)[:, None]
    ones = np.ones(40, int)
    # the skew lifts a few samples over the bound: refused as it is, bent it fits
    with pytest.raises(SafetyError, match="lower rabi_max by"):
        play(job, at_bound, ones, "")
    pulse = play(job, at_bound, ones, "", polished=True)
    assert np.max(np.hypot(*pulse.codes.T.astype(float))) <= dac.largest_code(14)
    target = Target(end(at_bound, np.full(40, NS)))
    assert infidelity(end(*arriving(job, pulse)), target) < 1e-6
    with pytest.raises(SafetyError, match="lower rabi_max by"):
        play(job, 1.2 * at_bound, ones, "", polished=True)
    with pytest.raises(SafetyError, match=r"at least 10% of rabi_max for the drive, got 4\.0%"):
        for_search(bench("[mixer]\noffset_i_MHz = 24.0\n"))


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
