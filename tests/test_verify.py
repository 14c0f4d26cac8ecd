"""The second opinion, the error budget, and the command that prints them."""

import json
from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.linalg import expm
from scipy.optimize import least_squares

from shaper import rotation
from shaper.cli import main
from shaper.cli.verify import text
from shaper.drive.line import filtered, first_order, taps
from shaper.drive.mixer import Calibration
from shaper.drive.path import Path as BenchPath
from shaper.errors import InputError
from shaper.evidence import independent
from shaper.evidence.budget import SOURCES, Effects, error_budget
from shaper.evidence.score import score
from shaper.job import parse_job
from shaper.physics import decay, noise
from shaper.physics.propagate import propagate
from shaper.pulse import Score, Waveform, make_pulse
from shaper.store import load_waveform, save_waveform
from shaper.target import Target, infidelity
from shaper.wiring import path_of, play
from shaper.workflow.verify import as_json, check_claims, effects_of, verify, with_evidence

MHZ, NS, US = 2e6 * np.pi, 1e-9, 1e-6
CLOSE = 1e-12
FULL = 25 * MHZ
DATA = Path(__file__).resolve().parent.parent / "configs" / "alder_data"

JOB = """
title = "Quarter-turn phase gate, Alder bench, qubit 1"
[qubit]
t1_us = 60.0
t2_us = 45.0
anharmonicity_MHz = -210.0
[drive]
rabi_max_MHz = 25.0
sample_rate_MSps = 1000.0
dac_bits = 10
[target]
gate = "z"
angle_deg = 90.0
[tolerance]
amplitude = 0.002
detuning_MHz = 0.05
[pulse]
duration_ns = 60.0
slice_ns = 1.0
"""


@pytest.fixture(scope="module")
def job():
    return parse_job(JOB)


@pytest.fixture(scope="module")
def pulse(job):
    """A smooth z(90), by scipy's least squares on the scoring propagator."""
    t = (np.arange(60) + 0.5) / 60
    modes = np.sin(np.pi * np.outer(np.arange(1, 6), t))

    def drive(x):
        return 0.5 * FULL * np.tanh((x.reshape(2, 5) @ modes).T)

    def error(x):
        return job.target.error_rows @ propagate(drive(x), np.full(60, NS), 0.0, 0.0)

    start = np.array([0.9, 0.1, 0.4, 0, 0, -0.3, 0.8, 0.2, 0, 0])
    found = least_squares(error, start, xtol=1e-15, ftol=1e-15, gtol=1e-15)
    return make_pulse(
        drive(found.x),
        np.ones(60, int),
        full_scale=FULL,
        bits=10,
        bound="circle",
        sample_rate=1e9,
        origin="optimized",
    )


@pytest.fixture(scope="module")
def waveform(job, pulse):
    return Waveform(
        title=job.title,
        job_text=JOB,
        created="2026-01-01T00:00:00Z",
        software="test",
        seed=0,
        status="converged",
        target=job.target.quaternion,
        error_rows=job.target.error_rows,
        error_scale=job.target.scale,
        pulses={"shaped": pulse},
        scores={"shaped": score(pulse, job)},
    )


def test_exponentials_are_scipys(rng):
    for size, scale in ((2, 0.1), (2, 30.0), (3, 1.0), (9, 2.0)):
        a = rng.normal(size=(5, size, size)) + 1j * rng.normal(size=(5, size, size))
        h = scale * (a + a.conj().swapaxes(1, 2)) / 2
        ours = independent.exponential(-1j * h - 0.01 * np.eye(size))
        assert np.max(np.abs(ours - expm(-1j * h - 0.01 * np.eye(size)))) < 100 * CLOSE
    assert np.array_equal(independent.exponential(np.zeros((2, 2))), np.eye(2))


def test_second_opinion_agrees_on_a_qubit(rng):
    drive, durations = rng.normal(0, 20 * MHZ, (9, 2)), rng.uniform(1, 3, 9) * NS
    q = propagate(drive, durations, 0.03, 2 * MHZ)
    unitary = independent.gate(drive, durations, 0.03, 2 * MHZ)
    assert np.max(np.abs(unitary - rotation.matrix(q))) < CLOSE
    grid = independent.gates(drive, durations, np.array([0.0, 0.03]), np.array([0.0, 2 * MHZ]))
    assert np.max(np.abs(grid[1] - unitary)) < CLOSE
    begin, end = np.array([0, 0, 1.0]), np.array([0.6, 0, 0.8])
    for target in (
        Target(rotation.about_y(0.3)),
        Target(rotation.about_y(0.3), np.array([0.0, 0.0, 1.0])),
        Target(rotation.between(begin, end), end, "state"),
    ):
        found = independent.infidelity(independent.superoperator(unitary), target)
        assert found == pytest.approx(infidelity(q, target), abs=CLOSE)
    small = rotation.product(rotation.about_x(0.02), rotation.about_y(0.3))
    vector = independent.rotation_error(rotation.matrix(small), Target(rotation.about_y(0.3)))
    assert vector == pytest.approx([np.sin(0.01), 0, 0], abs=CLOSE)


def test_second_opinion_agrees_on_decay(rng):
    drive, durations = rng.normal(0, 20 * MHZ, (9, 2)), rng.uniform(1, 3, 9) * NS
    operator = independent.open_gate(drive, durations, 0.01, MHZ, 2, 0.0, 2e-7, 1.5e-7)
    transfer = decay.transfer_matrix(drive, durations, 0.01, MHZ, 2e-7, 1.5e-7)
    target = Target(rotation.about_z(1.0))
    assert independent.infidelity(operator, target) == pytest.approx(
        decay.average_infidelity(transfer, target), abs=CLOSE
    )
    # three levels without decay: the superoperator of the unitary
    closed = independent.open_gate(drive, durations, 0.0, 0.0, 3, -200 * MHZ, None, None)
    unitary = independent.gate(drive, durations, 0.0, 0.0, 3, -200 * MHZ)
    assert np.max(np.abs(closed - independent.superoperator(unitary))) < CLOSE
    assert independent.leakage(closed) == pytest.approx(
        np.sum(np.abs(unitary[2, :2]) ** 2) / 2, abs=CLOSE
    )


@pytest.mark.parametrize("levels", [3, 4, 5])
def test_seepage_without_decay_balances_leakage(rng, levels):
    """What comes in is what went out: Wood and Gambetta 2018, for a unitary."""
    drive = rng.normal(0, 200 * MHZ, (9, 2))
    unitary = independent.gate(drive, np.full(9, NS), 0.0, MHZ, levels, -200 * MHZ)
    operator = independent.superoperator(unitary)
    leaked = independent.leakage(operator)
    assert leaked > 1e-3
    assert independent.seepage(operator) == pytest.approx(2 * leaked / (levels - 2), abs=CLOSE)
    # and by its definition: the mean over all states outside, here those of a sphere
    states = rng.normal(size=(20_000, levels - 2, 2)) @ [1, 1j]
    states /= np.linalg.norm(states, axis=1)[:, None]
    arrived = np.sum(np.abs(states @ unitary[:2, 2:].T) ** 2, axis=1)
    error = np.std(arrived) / np.sqrt(len(states))
    assert abs(independent.seepage(operator) - np.mean(arrived)) < 5 * error + CLOSE


@pytest.mark.parametrize("t2", [15 * NS, None])
def test_seepage_with_decay_is_the_master_equation(rng, t2):
    """By SciPy's integrator on the density matrix; more than leakage would give."""
    drive, durations = rng.normal(0, 60 * MHZ, (6, 2)), rng.uniform(1, 3, 6) * NS
    t1, levels, anharmonicity = 20 * NS, 4, -200 * MHZ
    operator = independent.open_gate(drive, durations, 0.02, 3 * MHZ, levels, anharmonicity, t1, t2)
    n, lower = np.diag(np.arange(levels)), np.diag(np.sqrt(np.arange(1, levels)), 1)
    dephasing = 0.0 if t2 is None else 1 / t2 - 0.5 / t1

    def slope(rho, h):
        found = -1j * (h @ rho - rho @ h)
        for rate, jump in ((1 / t1, lower), (2 * dephasing, n)):
            square = jump.T @ jump
            found = found + rate * (jump @ rho @ jump.T - (square @ rho + rho @ square) / 2)
        return found

    returned = []
    for level in (2, 3):
        rho = np.zeros((levels, levels), dtype=complex)
        rho[level, level] = 1
        for (x, y), duration in zip(1.02 * drive, durations, strict=True):
            h = (x - 1j * y) / 2 * lower + (x + 1j * y) / 2 * lower.T
            h = h + np.diag(3 * MHZ * (0.5 - np.diag(n))) + anharmonicity * n @ (n - np.eye(4)) / 2
            rho = solve_ivp(
                lambda _, y, h=h: slope(y.reshape(levels, levels), h).ravel(),
                (0, duration),
                rho.ravel(),
                method="DOP853",
                rtol=1e-11,
                atol=1e-12,
            ).y[:, -1]
            rho = rho.reshape(levels, levels)
        returned.append(np.trace(rho[:2, :2]).real)
    assert independent.seepage(operator) == pytest.approx(np.mean(returned), abs=1e-9)
    assert independent.seepage(operator) > 1.5 * independent.leakage(operator)


def test_seepage_of_idling_is_the_decay_of_the_levels_outside():
    """By hand: the third level falls at 2/T1 and is on the qubit at once; the fourth falls first
    to the third at 3/T1, and dephasing moves no population.
    """
    t1, time = 60 * US, 25 * US
    still, once = np.zeros((1, 2)), np.array([time])
    third = 1 - np.exp(-2 * time / t1)
    operator = independent.open_gate(still, once, 0.0, 0.0, 3, -0.2 * MHZ, t1, 30 * US)
    assert independent.seepage(operator) == pytest.approx(third, abs=CLOSE)
    assert independent.leakage(operator) == pytest.approx(0, abs=CLOSE)
    # from the fourth: p3 = e^-3s, p2' = 3 p3 - 2 p2
    s = time / t1
    fourth = 1 - np.exp(-3 * s) - 3 * (np.exp(-2 * s) - np.exp(-3 * s))
    operator = independent.open_gate(still, once, 0.0, 0.0, 4, -0.2 * MHZ, t1, 30 * US)
    assert independent.seepage(operator) == pytest.approx((third + fourth) / 2, abs=CLOSE)


def test_integrator_follows_the_line(rng):
    """The continuous waveform and its cell means meet, as the square of the cell."""
    samples, line = rng.normal(0, 10 * MHZ, (12, 2)), first_order(80e6)
    until = 12 * NS + line.reach
    exact = independent.integrated(line, samples, 1e9, 0.0, until, 0.02, MHZ)
    gaps = []
    for cells in (4, 8):
        kernel = taps(line, NS, cells)
        drive = filtered(kernel.kernel, samples)
        durations = np.full(len(drive), NS / cells)
        unitary = independent.gate(drive, durations, 0.02, MHZ)
        # the last cell ends a little after the integrator: same z turn afterwards
        rest = np.sum(durations) - until
        turn = np.diag(np.exp(-0.5j * MHZ * rest * np.array([1, -1])))
        gaps.append(np.max(np.abs(turn @ exact - unitary)))
    assert gaps[1] < 1e-5
    assert gaps[0] / gaps[1] == pytest.approx(4, abs=0.6)


def test_budget_entries_are_the_physics_alone(pulse, job):
    """Each entry against the room that knows that effect, and the whole within 20 %."""
    target = job.target
    spectrum = noise.power_law(1e3, 1.0, 1.0, 1e3, 1e9)
    effects = Effects(
        t1=60 * US,
        t2=45 * US,
        detuning_sigma=0.05 * MHZ,
        detuning_spectrum=spectrum,
        carrier=5e3 * MHZ,
    )
    budget = error_budget(pulse, target, effects)
    played = pulse.played
    transfer = decay.transfer_matrix(*played, 0.0, 0.0, 60 * US, 45 * US)
    still = infidelity(propagate(*played, 0.0, 0.0), target)
    lost = decay.average_infidelity(transfer, target) - still
    assert budget.alone["decay"] == pytest.approx(lost, abs=CLOSE)
    slow = noise.quasi_static_infidelity(*played, target, 0.05 * MHZ)
    assert budget.alone["slow noise"] == pytest.approx(slow, rel=0.05)
    colored = noise.colored_infidelity(*played, spectrum)
    assert budget.alone["colored noise"] == pytest.approx(colored)
    assert budget.alone["quantization"] == pytest.approx(still, rel=1e-3)
    assert 0 < budget.alone["rotating wave"] < 1e-4
    assert budget.adds_up
    assert "add up within 20%" in budget.note
    assert budget.advice.startswith(budget.dominating)


def test_leakage_entry_and_levels(pulse, job):
    effects = Effects(anharmonicity=-210 * MHZ)
    budget = error_budget(pulse, job.target, effects)
    unitary = independent.gate(*pulse.played, 0.0, 0.0, 3, -210 * MHZ)
    alone = independent.infidelity(independent.superoperator(unitary), job.target)
    assert budget.together == pytest.approx(alone, abs=CLOSE)
    assert budget.alone["leakage"] == pytest.approx(alone, rel=0.1)
    assert budget.dominating == "leakage"
    assert budget.leakage > 0
    assert budget.seepage == pytest.approx(2 * budget.leakage, abs=CLOSE)  # nothing decays
    decays = error_budget(pulse, job.target, Effects(anharmonicity=-210 * MHZ, t1=6 * US))
    fell = 2 * pulse.duration / (6 * US)  # from the third level, to first order
    assert decays.seepage - 2 * decays.leakage == pytest.approx(fell, rel=0.3)
    assert error_budget(pulse, job.target, Effects()).seepage is None
    four = error_budget(pulse, job.target, Effects(anharmonicity=-210 * MHZ, levels=4))
    assert four.alone["leakage"] == pytest.approx(budget.alone["leakage"], rel=0.2)


def test_pulse_searched_on_the_ladder(job):
    """Its phase errors belong to the search; the leakage entry is the population outside."""
    t = (np.arange(20) + 0.5) / 20
    modes = np.sin(np.pi * np.outer(np.arange(1, 5), t))
    target = Target(rotation.about_x(np.pi))
    anharmonicity, step = -210 * MHZ, np.full(20, NS)

    def drive(x):
        return 60 * MHZ * np.tanh((x.reshape(2, 4) @ modes).T)

    def error(x):
        unitary = independent.gate(drive(x), step, 0.0, 0.0, 3, anharmonicity)
        return np.append(
            independent.rotation_error(unitary, target),
            np.concatenate([unitary[2, :2].real, unitary[2, :2].imag]),
        )

    found = least_squares(error, np.array([0.6, 0, 0, 0, 0, 0.1, 0, 0.0]), xtol=1e-14, ftol=1e-14)
    shaped = make_pulse(
        drive(found.x),
        np.ones(20, int),
        full_scale=60 * MHZ,
        bits=14,
        bound="circle",
        sample_rate=1e9,
        origin="optimized",
    )
    effects = Effects(anharmonicity=anharmonicity, on_ladder=True)
    seen = error_budget(shaped, target, effects)
    assert seen.together < 1e-6
    assert seen.alone["search"] < 1e-6
    assert seen.leakage == pytest.approx(seen.alone["leakage"], abs=CLOSE)
    blind = error_budget(shaped, target, Effects(anharmonicity=anharmonicity))
    assert blind.alone["search"] > 1e-4
    assert "search and leakage" in blind.note  # the one cancels the other
    nominal = seen.together
    stored = Score(nominal, nominal, nominal, nominal, nominal, nominal)
    claims = check_claims(shaped, stored, target, effects)
    assert all(claim.holds for claim in claims if claim.name.startswith("codes"))


def test_uncorrected_line_shows_and_interacting_errors_are_named(pulse, job):
    path = BenchPath(line=first_order(60e6))
    budget = error_budget(pulse, job.target, Effects(path=path, correction="none"))
    assert budget.dominating == "line"
    assert budget.alone["line"] > 1e-4
    # a tolerance on top pushes the same way at its worst point
    wide = Effects(path=path, correction="none", amplitude_tolerance=0.03)
    both = error_budget(pulse, job.target, wide)
    assert not both.adds_up
    assert "line and tolerance" in both.note
    assert both.total + both.crossed["line", "tolerance"] == pytest.approx(both.together, rel=0.05)


def test_calibrated_mixer_costs_nothing(pulse, job):
    """Codes made through the calibration: the claims hold behind the mixer, and only there."""
    calibration = Calibration(gain=1.04, phase=0.05, offset_i=0.2 * MHZ)
    path = BenchPath(calibration=calibration)
    played = path.to_play(np.repeat(pulse.drive, pulse.samples, axis=0), 1e9)
    through = make_pulse(
        played,
        np.ones(60, int),
        full_scale=FULL,
        bits=14,
        bound="circle",
        sample_rate=1e9,
        origin="optimized",
    )
    through = type(pulse)(**{**through.__dict__, "drive": pulse.drive})
    claims = score(make_same(pulse, 14), job)
    good = Effects(path=path, cells=1, amplitude_tolerance=0.002, detuning_tolerance=0.05 * MHZ)
    budget = error_budget(through, job.target, Effects(path=path, cells=1))
    assert budget.total < 1e-7
    ignored = error_budget(through, job.target, Effects())
    assert ignored.total > 1e-4
    float_claims = [c for c in check_claims(through, claims, job.target, good) if "float" in c.name]
    assert all(claim.holds for claim in float_claims)


def test_intermediate_frequency_has_its_own_entry(pulse, job):
    """What turns within a held sample is not the search's fault."""
    path = BenchPath(intermediate_frequency=100e6)
    played = path.to_play(0.9 * np.repeat(pulse.drive, pulse.samples, axis=0), 1e9)
    through = make_pulse(
        played,
        np.ones(60, int),
        full_scale=FULL,
        bits=14,
        bound="circle",
        sample_rate=1e9,
        origin="optimized",
    )
    through = type(pulse)(**{**through.__dict__, "drive": 0.9 * pulse.drive})
    target = gate_of(0.9 * pulse.drive)
    budget = error_budget(through, target, Effects(path=path, cells=16))
    assert budget.alone["search"] < CLOSE
    assert 1e-8 < budget.alone["mixer"] < 1e-3
    assert budget.dominating == "mixer"


def test_a_pulse_bent_for_its_mixer_has_no_mixer_entry():
    """What was met on the way is the search's to answer for; the same pulse as it was shows it."""
    text = JOB.replace("[target]", "intermediate_MHz = 100.0\n[target]", 1)
    job = parse_job(text + "[mixer]\ngain = 1.03\nskew_ns = 0.1\n")
    t = (np.arange(60) + 0.5) / 60
    drive = 15 * MHZ * np.stack([np.sin(np.pi * t), 0.5 * np.sin(2 * np.pi * t)], -1)
    target, effects = gate_of(drive), Effects(path=path_of(job), cells=16)
    plain, bent = (
        play(job, drive, np.ones(60, int), "optimized", polished=polished)
        for polished in (False, True)
    )
    as_it_was = error_budget(plain, target, effects)
    assert as_it_was.dominating == "mixer"
    assert as_it_was.alone["mixer"] > 1e-6
    budget = error_budget(bent, target, effects)
    assert "mixer" not in budget.alone
    assert budget.alone["search"] < CLOSE
    assert budget.alone["grid"] < 1e-9  # followed by an integrator, without cells
    assert budget.dominating == "quantization"
    assert budget.together < as_it_was.alone["mixer"]


@pytest.mark.parametrize("skew", [0.0, 0.3, -1.4])
def test_integrator_follows_the_mixer(rng, skew):
    """Held samples through late arms and carrier, and their cell means, meet as they shrink."""
    faults = Calibration(1.04, 0.05, 0.2 * MHZ, -0.1 * MHZ, skew * NS)
    path = BenchPath(faults, 130e6, phase=0.3, first=5)
    samples = rng.normal(0, 10 * MHZ, (12, 2))
    exact = independent.integrated_mixer(path, samples, 1e9, 0.02, MHZ)
    gaps = []
    for cells in (10, 20):  # the skew on their edges
        drive, cell = path.at_qubit(samples, 1e9, cells)
        unitary = independent.gate(drive, np.full(len(drive), cell), 0.02, MHZ)
        gaps.append(np.max(np.abs(exact - unitary)))
    assert gaps[1] < 1e-4
    assert gaps[0] / gaps[1] == pytest.approx(4, abs=0.2)


def gate_of(drive):
    return Target(propagate(drive, np.full(len(drive), NS), 0.0, 0.0))


def make_same(pulse, bits):
    return make_pulse(
        pulse.drive,
        pulse.samples,
        full_scale=FULL,
        bits=bits,
        bound="circle",
        sample_rate=1e9,
        origin="optimized",
    )


def test_true_claims_hold_and_false_ones_do_not(waveform, job):
    effects = effects_of(job)
    pulse, stored = waveform.pulses["shaped"], waveform.scores["shaped"]
    claims = check_claims(pulse, stored, job.target, effects)
    assert len(claims) == 6 + (stored.guaranteed is not None)
    assert all(claim.holds for claim in claims)
    for field in ("nominal", "dac_mean", "dac_worst"):
        false = type(stored)(**{**stored.__dict__, field: getattr(stored, field) / 2 + 1e-9})
        claims = check_claims(pulse, false, job.target, effects)
        assert sum(not claim.holds for claim in claims) == 1
    proved = type(stored)(**{**stored.__dict__, "guaranteed": stored.dac_worst * 0.9})
    assert not check_claims(pulse, proved, job.target, effects)[-1].holds


def test_command(tmp_path, waveform, capsys):
    path = tmp_path / "z90.h5"
    save_waveform(path, waveform)
    assert main(["verify", str(path), "--json", "--carrier-GHz", "5"]) == 0
    printed = capsys.readouterr()
    result = json.loads(printed.out)["shaped"]
    assert result["holds"]
    assert set(result["budget"]) == {
        "search",
        "quantization",
        "rotating wave",
        "leakage",
        "decay",
        "tolerance",
    }
    assert "evidence stored" in printed.err
    evidence = load_waveform(path).evidence
    assert evidence["budget_together"].values[0] == result["together"]
    assert evidence["budget_leakage"].values[0] == result["leakage"]
    assert evidence["budget_seepage"].values[0] == result["seepage"] > 2 * result["leakage"]
    assert evidence["verified"].values[0] == 1
    assert main(["verify", str(path), "--keep-file", "--figure", str(tmp_path / "b.svg")]) == 0
    printed = capsys.readouterr()
    assert "every claim holds" in printed.out
    assert "dominates" in printed.out
    (line,) = [line for line in printed.out.splitlines() if line.startswith("(seepage")]
    assert line.split() == ["(seepage,", "not", "in", "it)", f"{result['seepage']:.2e}"]
    assert "T1 brings some back" in printed.out
    assert (tmp_path / "b.svg").stat().st_size > 1000


def test_two_levels_have_no_seepage(waveform):
    """None, not a zero that nobody computed; nan in the file."""
    two = JOB.replace("anharmonicity_MHz = -210.0\n", "")
    found = verify(type(waveform)(**{**waveform.__dict__, "job_text": two}))
    assert as_json(found)["shaped"]["seepage"] is None
    assert np.isnan(with_evidence(waveform, found).evidence["budget_seepage"].values[0])
    assert "seepage" not in text(found).lower()


def test_command_on_a_false_file(tmp_path, waveform, capsys):
    """A file whose figures are too good gets exit code 1 and says which."""
    stored = waveform.scores["shaped"]
    false = type(stored)(**{**stored.__dict__, "dac_worst": stored.dac_worst / 3})
    path = tmp_path / "z90.h5"
    save_waveform(path, type(waveform)(**{**waveform.__dict__, "scores": {"shaped": false}}))
    before = path.read_bytes()
    assert main(["verify", str(path), "--keep-file"]) == 1
    assert "DOES NOT HOLD" in capsys.readouterr().out
    assert path.read_bytes() == before
    assert main(["verify", str(path), "--pulse", "other"]) == 2
    assert "expected one of shaped or all, got other" in capsys.readouterr().err
    assert main(["verify", str(path), "--carrier-GHz", "-1"]) == 2


def test_verify_from_python(waveform):
    found = verify(waveform, ["all"])
    again = with_evidence(waveform, found)
    assert again.evidence["budget"].values.shape == (1, len(SOURCES))
    assert set(again.pulses) == set(waveform.pulses)
    with pytest.raises(InputError):
        verify(waveform, ["nothing"])


BENCH = """
[line]
kind = "step_response"
file = "step_response.csv"
[mixer]
gain = 1.02
phase_deg = 1.0
[noise]
detuning_sigma_kHz = 20.0
detuning_psd_file = "noise_spectrum.csv"
"""


def test_effects_come_from_the_job():
    """Every section of the bench reaches the budget, in SI; files beside the job."""
    job = parse_job(JOB + BENCH, folder=DATA)
    effects = effects_of(job, on_ladder=True)
    assert effects.path.line.bandwidth > 100e6
    assert effects.path.calibration == Calibration(gain=1.02, phase=np.radians(1.0))
    assert effects.detuning_sigma == pytest.approx(0.02 * MHZ)
    assert effects.detuning_spectrum.density[0] == pytest.approx((2 * np.pi) ** 2 * 1020)
    assert effects.on_ladder
    assert effects.levels == 3
    plain = effects_of(parse_job(JOB))
    assert plain.path.straight
    assert not plain.on_ladder
    slow = BENCH.replace("step_response", "first_order").replace(
        'file = "first_order.csv"', "bandwidth_MHz = 5.0"
    )
    with pytest.raises(InputError, match="at least 1/duration = 16.67 MHz, got 5 MHz"):
        effects_of(parse_job(JOB + slow, folder=DATA))


def test_claims_behind_the_line_hold(job, pulse):
    """What the search sees behind its own grid is what the second opinion sees."""
    line_job = parse_job(JOB + BENCH.split("[mixer]")[0], folder=DATA)
    effects = effects_of(line_job)
    kernel = taps(effects.path.line, NS, 4).kernel

    def lost(samples):
        fine = filtered(kernel, samples)
        q = propagate(fine, np.full(len(fine), NS / 4), 0.0, 0.0)
        return float(infidelity(q, job.target))

    played = np.repeat(pulse.drive, pulse.samples, axis=0)
    nominal = lost(played)
    stored = Score(nominal, np.nan, np.nan, np.nan, np.nan, np.nan)
    (claim,) = check_claims(pulse, stored, job.target, effects)
    assert claim.holds
    assert nominal > 1e-6  # the pulse knows nothing of the line
