"""Several qubits under one pulse, and wide detuning ranges: scores, proofs, comparison, search."""

import dataclasses
import json
import math

import numpy as np
import pytest
import reference
from hypothesis import given, settings
from hypothesis import strategies as st

from shaper import bench
from shaper.cli import main
from shaper.composite import place, sandwich
from shaper.errors import InputError
from shaper.evidence.proof import prove_groups, prove_pulse
from shaper.evidence.score import score
from shaper.evidence.verdict import sentence
from shaper.job import parse_job
from shaper.physics.propagate import propagate
from shaper.pulse import Pulse, Waveform, make_pulse
from shaper.store import save_waveform
from shaper.target import infidelity
from shaper.workflow.compare import as_json, compare, cuts, maps
from shaper.workflow.verify import verify

MHZ = 2 * math.pi * 1e6
TRACE_ROUND_OFF = 1e-13  # of infidelities from traces, after a hundred matrix products
MISSED = 0.01  # of the largest infidelity: what may hide between the points of the score's grid
RANDOM_POINTS = 2_000  # a box, for bounds against samples

PAIR = """
title = "alder-1 turns, alder-2 stays"
[drive]
rabi_max_MHz = 4.0
sample_rate_MSps = 250.0
dac_bits = 14
[target]
gate = "z"
angle_deg = 90.0
[tolerance]
amplitude = 0.01
detuning_MHz = 0.05
[[group]]
name = "alder-2"
offset_MHz = 12.0
amplitude = 0.02
detuning_MHz = 0.3
weight = 3.0
[group.target]
gate = "identity"
equivalence = "up_to_final_z"
[pulse]
duration_ns = 176.0
slice_ns = 8.0
"""
FIRST_BOX = "[tolerance]\namplitude = 0.01\ndetuning_MHz = 0.05\n"
SECOND_BOX = "amplitude = 0.02\ndetuning_MHz = 0.3\n"
BARE = PAIR.replace(FIRST_BOX, "").replace(SECOND_BOX, "").replace("weight = 3.0\n", "")

BROADBAND = """
[drive]
rabi_max_MHz = 0.02
sample_rate_MSps = 2.0
dac_bits = 16
[target]
from_state = [0, 0, 1]
to_state = [0, 0, -1]
[tolerance]
amplitude = 0.05
detuning_MHz = 0.02
[pulse]
duration_ns = 2.0e5
slice_ns = 5.0e3
"""


def random_pulse(job, rng, strength=0.7) -> Pulse:
    """Any waveform within the bound; the targets are missed by far."""
    drive = job.rabi_max * rng.uniform(-strength, strength, size=(job.slices, 2))
    return make_pulse(
        drive,
        np.full(job.slices, job.samples_per_slice),
        full_scale=job.rabi_max,
        bits=job.dac_bits,
        bound=job.bound,
        sample_rate=job.sample_rate,
        origin="optimized",
    )


def waveform_of(job, **pulses) -> Waveform:
    return Waveform(
        title=job.title,
        job_text=job.text,
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


@pytest.fixture
def pair():
    return parse_job(PAIR)


def turned(drive, durations, eps, delta):
    """Infidelity of z(90), by the trace formula."""
    wanted = reference.rotation((0, 0, 1), math.pi / 2)
    return reference.average_gate_infidelity(
        reference.propagator(drive, durations, eps, delta), wanted
    )


def stayed(drive, durations, eps, delta):
    """Infidelity of the identity up to z: the best of |tr(z(a)^dag U)|/2 over a is |U_00|."""
    return 2 / 3 * (1 - abs(reference.propagator(drive, durations, eps, delta)[0, 0]) ** 2)


# --- scores -------------------------------------------------------------------------------------


def test_the_score_of_two_qubits_against_textbook_matrices(pair, rng):
    """Largest nominal and worst, mean by weight; each qubit at its own frequency and box."""
    pulse = random_pulse(pair, rng)
    result = score(pulse, pair)
    played, seconds = pulse.played
    qubits = ((turned, 0.0, 0.01, 0.05 * MHZ), (stayed, 12 * MHZ, 0.02, 0.3 * MHZ))
    nodes, weights = np.polynomial.legendre.leggauss(6)
    nominal, mean, worst = [], [], []
    for plain, at, amplitude, detuning in qubits:
        nominal.append(plain(played, seconds, 0.0, at))
        values = [
            [plain(played, seconds, amplitude * e, at + detuning * d) for d in nodes] for e in nodes
        ]
        mean.append(weights @ np.array(values) @ weights / 4)
        corners = [
            plain(played, seconds, amplitude * e, at + detuning * d)
            for e in (-1, 0, 1)
            for d in (-1, 0, 1)
        ]
        worst.append(max(corners))
    assert result.dac == pytest.approx(max(nominal), abs=TRACE_ROUND_OFF)
    assert result.dac_mean == pytest.approx((mean[0] + 3 * mean[1]) / 4, rel=1e-9)
    assert max(worst) * (1 - TRACE_ROUND_OFF) <= result.dac_worst <= result.guaranteed
    assert result.guaranteed <= 1.011 * result.dac_worst
    # neither qubit alone gives the figures of both
    for group in pair.groups:
        alone = score(pulse, pair.for_group(group))
        assert alone.dac_mean != pytest.approx(result.dac_mean, rel=1e-3)
        assert alone.dac_worst <= result.dac_worst


def test_a_neighbor_without_tolerance_counts_with_its_nominal(rng):
    job = parse_job(PAIR.replace(SECOND_BOX, ""))
    pulse = random_pulse(job, rng)
    neighbor = score(pulse, job.for_group(job.groups[1]))
    assert neighbor.nominal == neighbor.mean == neighbor.worst
    assert neighbor.guaranteed is None
    assert score(pulse, job).guaranteed >= neighbor.dac


def test_a_state_target_is_scored_by_the_transfer_probability(rng):
    job = parse_job(BROADBAND.replace("amplitude = 0.05\ndetuning_MHz = 0.02", ""))
    pulse = random_pulse(job, rng)
    transfer = abs(reference.propagator(*pulse.played)[1, 0]) ** 2
    assert score(pulse, job).dac == pytest.approx(1 - transfer, abs=TRACE_ROUND_OFF)


# --- grids as dense as the phase ------------------------------------------------------------------


@pytest.mark.parametrize("points", [2, 3, 5, 41, 229])
def test_lobatto_nodes_are_zeros_of_the_slope_and_integrate_exactly(points):
    """Abramowitz and Stegun 25.4.32: exact up to degree 2n - 3, and not beyond."""
    nodes, weights = bench._lobatto(points)
    slope = np.polynomial.legendre.Legendre.basis(points - 1).deriv()
    scale = abs(slope(1.0))
    assert np.max(np.abs(slope(nodes[1:-1])), initial=0.0) < 1e-11 * scale
    for degree in (0, 1, 2 * points - 4, 2 * points - 3, 2 * points - 2):
        integral = np.polynomial.legendre.Legendre.basis(degree)(nodes) @ weights
        exact = 1.0 if degree == 0 else 0.0
        beyond = degree > 2 * points - 3
        assert (abs(integral - exact) > 1e-12) == beyond


@settings(deadline=None)
@given(
    reach=st.floats(0, 1e3),
    least=st.integers(1, 30).map(lambda n: 2 * n + 1),
    density=st.floats(0.1, 20),
)
def test_points_for_grows_with_the_reach_and_in_few_steps(reach, least, density):
    points = bench.points_for(reach, least, density)
    assert points % 2 == 1 and points >= least
    assert points >= density * reach * (1 - 1e-9) or points == least
    assert points <= max(least, 1.5 * density * reach + 3)


def test_forty_one_points_serve_ordinary_jobs(pair):
    grid = bench.score_grid(pair)
    assert len(np.unique(grid.eps)) == len(np.unique(grid.delta)) == 41


def test_nothing_hides_between_the_points_of_a_wide_grid(rng):
    """25 rad: the score's grid finds the largest infidelity within a percent, 41 points do not."""
    job = parse_job(BROADBAND)
    wide = bench.score_grid(job)
    detuning = np.unique(wide.delta)
    assert len(detuning) >= 200 and len(np.unique(wide.eps)) == 41
    narrow = np.unique(bench.error_grid(job, 41, 41).delta)
    dense = np.linspace(-job.detuning_tolerance, job.detuning_tolerance, 6001)
    missed, missed_before = [], []
    for _ in range(20):
        pulse = random_pulse(job, rng)

        def largest(at, pulse=pulse):
            return np.max(infidelity(propagate(*pulse.played, 0.0, at), job.target))

        missed.append(largest(dense) - largest(detuning))
        missed_before.append(largest(dense) - largest(narrow))
    assert max(missed) < MISSED < max(missed_before)


def test_a_pulse_longer_than_the_job_gets_its_own_density():
    job = parse_job(BROADBAND)
    here, longer = bench.score_grid(job), bench.score_grid(job, 3 * job.duration)
    assert len(np.unique(longer.delta)) >= 2 * len(np.unique(here.delta))
    assert len(np.unique(longer.eps)) >= len(np.unique(here.eps))


# --- proofs ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("text", [PAIR, BROADBAND], ids=["pair", "broadband"])
def test_the_bound_of_each_qubit_is_never_below_samples_of_its_box(text, rng):
    job = parse_job(text)
    for _ in range(3):
        pulse = random_pulse(job, rng)
        proofs = prove_groups(pulse, job)
        assert len(proofs) == len(job.groups)
        for group, proof in zip(job.groups, proofs, strict=True):
            side = rng.uniform(-1, 1, size=(2, RANDOM_POINTS))
            eps = group.amplitude_tolerance * side[0]
            delta = group.detuning + group.detuning_tolerance * side[1]
            found = infidelity(propagate(*pulse.played, eps, delta), group.target)
            assert np.max(found) <= proof.guaranteed <= 1.011 * proof.sampled
            assert abs(proof.at_delta - group.detuning) <= group.detuning_tolerance * (1 + 1e-12)
        assert prove_pulse(pulse, job).guaranteed == max(p.guaranteed for p in proofs)


# --- the job file ---------------------------------------------------------------------------------


def test_the_qubits_of_a_job_in_si():
    job = parse_job(PAIR.replace("[drive]", "[qubit]\ndetuning_MHz = 1.0\n[drive]"))
    first, second = job.groups
    assert (first.name, first.target_name) == ("addressed", "z(90)")
    assert (second.name, second.target_name) == ("alder-2", "identity up to a final z")
    assert second.detuning == pytest.approx(13 * MHZ)  # the offset counts from the addressed one
    assert second.detuning_tolerance == pytest.approx(0.3 * MHZ)
    alone = job.for_group(second)
    assert alone.groups == (dataclasses.replace(second, name="addressed", weight=1.0),)
    assert not parse_job(BARE).has_tolerance
    assert parse_job(PAIR.replace(FIRST_BOX, "")).has_tolerance


@pytest.mark.parametrize(
    ("old", "new", "told"),
    [
        ('name = "alder-2"', 'name = "addressed"', "group.0.name: expected a name that no other"),
        ('name = "alder-2"\n', "", "group.0.name: expected this key, got none"),
        ("offset_MHz = 12.0\n", "", "group.0.offset_MHz: expected this key, got none"),
        ("offset_MHz = 12.0", "offset_MHz = nan", "group.0.offset_MHz: expected a finite number"),
        ("offset_MHz = 12.0", "offset_kHz = 1.0", "nearest known key: offset_MHz"),
        ("amplitude = 0.02", "amplitude = -0.02", "group.0.amplitude: expected"),
        ("weight = 3.0", "weight = 0.0", "group.0.weight: expected"),
        ('gate = "identity"', 'gate = "idle"', "group.0.target.gate: expected"),
        ('gate = "identity"', "", "group.0.target: expected exactly one of gate"),
        ("[[group]]", "[group]", "group: expected a valid list"),
    ],
)
def test_faults_of_a_group_are_one_line_each_with_its_place(old, new, told):
    text = PAIR.replace(old, new, 1)
    assert text != PAIR
    with pytest.raises(InputError) as caught:
        parse_job(text, "pair.toml")
    lines = str(caught.value).splitlines()
    assert any(told in line for line in lines), lines
    assert all(line.startswith("pair.toml: group") for line in lines)


def test_two_neighbors_of_one_name_are_refused():
    second = PAIR[PAIR.index("[[group]]") : PAIR.index("[pulse]")]
    with pytest.raises(InputError, match=r"group\.1\.name: expected a name that no other"):
        parse_job(PAIR.replace("[pulse]", second + "[pulse]"))


# --- comparison -----------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def two():
    """A random pulse and the sandwich under the job of two qubits."""
    job = parse_job(PAIR)
    rng = np.random.default_rng(1)
    return waveform_of(
        job, shaped=random_pulse(job, rng), sandwich=place(sandwich(job.target, "circle"), job)
    )


def test_rows_hold_every_qubit_and_the_largest_of_them(two, pair):
    comparison = compare(two, ["BB1"])
    for row in comparison.rows:
        assert [group.name for group in row.groups] == ["addressed", "alder-2"]
        assert row.nominal == max(group.nominal for group in row.groups)
        assert row.worst == max(group.worst for group in row.groups)
        assert row.guaranteed == max(group.guaranteed for group in row.groups)
        assert row.mean == pytest.approx((row.groups[0].mean + 3 * row.groups[1].mean) / 4)
        for group, found in zip(pair.groups, row.groups, strict=True):
            alone = score(comparison.pulses[row.name], pair.for_group(group))
            assert (found.nominal, found.mean, found.worst) == (
                alone.dac,
                alone.dac_mean,
                alone.dac_worst,
            )
            assert found.worst <= found.guaranteed <= 1.011 * found.worst
    # the sandwich serves the one and throws the other about
    first, second = {row.name: row for row in comparison.rows}["sandwich"].groups
    assert first.nominal < 1e-6 < 0.1 < second.nominal
    assert "alder-2 is worst" in sentence(comparison.verdict, comparison.job)


def test_cuts_and_maps_of_each_qubit(two, pair):
    comparison = compare(two)
    for k, group in enumerate(pair.groups):
        table = cuts(comparison, group)
        assert table["detuning_MHz"][-1] == pytest.approx(2 * group.detuning_tolerance / MHZ)
        middle = table["pulses"]["shaped"]["against_detuning"][len(table["detuning_MHz"]) // 2]
        assert middle == pytest.approx(comparison.rows[0].groups[k].nominal, rel=1e-9)
        plane = maps(comparison, group=group)["infidelity"]["shaped"]
        centre = plane[plane.shape[0] // 2, plane.shape[1] // 2]
        assert centre == pytest.approx(comparison.rows[0].groups[k].nominal, rel=1e-9)
    assert np.array_equal(
        cuts(comparison)["pulses"]["shaped"]["against_amplitude"],
        cuts(comparison, pair.groups[0])["pulses"]["shaped"]["against_amplitude"],
    )


def test_the_verdict_scales_all_boxes_together(two):
    """At the size where the answer changes, the pulses' worst cases over both qubits cross."""
    job = parse_job(PAIR.replace("offset_MHz = 12.0", "offset_MHz = 40.0"))
    names = ["BB1", "CORPSE"]
    comparison = compare(dataclasses.replace(two, job_text=job.text), names)
    verdict = comparison.verdict
    changes = [c for c in (verdict.smaller_box, verdict.larger_box) if c is not None]
    assert changes
    for change in changes:
        for factor, name in ((0.9, verdict.winner.name), (1.1, change.winner)):
            scale = change.at * (factor if change.at > 1 else 2 - factor)
            box = dataclasses.replace(
                job,
                amplitude_tolerance=scale * job.amplitude_tolerance,
                detuning_tolerance=scale * job.detuning_tolerance,
                others=tuple(
                    dataclasses.replace(
                        g,
                        amplitude_tolerance=scale * g.amplitude_tolerance,
                        detuning_tolerance=scale * g.detuning_tolerance,
                    )
                    for g in job.others
                ),
            )
            found = {n: score(p, box).dac_worst for n, p in comparison.pulses.items()}
            assert min(found, key=found.get) == name


@pytest.mark.parametrize(
    ("gate", "kind"),
    [
        ('gate = "identity"', "instead"),
        ('gate = "z"\nangle_deg = 45.0', "instead"),
        ('gate = "x"\nangle_deg = 180.0', None),
    ],
)
def test_a_frame_update_has_to_serve_every_qubit(two, gate, kind):
    text = PAIR.replace('gate = "identity"\nequivalence = "up_to_final_z"', gate)
    assert compare(dataclasses.replace(two, job_text=text)).frame_update == kind


def test_what_compare_prints_and_draws_of_two_qubits(two, tmp_path, capsys):
    path = tmp_path / "pair.h5"
    save_waveform(path, two)
    figure, plane = tmp_path / "pair.svg", tmp_path / "map.svg"
    assert main(["compare", str(path), "--figure", str(figure), "--maps", str(plane)]) == 0
    out, err = capsys.readouterr()
    rows = {row.name: row for row in compare(two).rows}
    lines = [line for line in out.splitlines() if line.split()[:2] == ["sandwich", "alder-2"]]
    assert len(lines) == 1
    shown = [float(value) for value in lines[0].split()[-4:]]
    group = rows["sandwich"].groups[1]
    wanted = [group.nominal, group.mean, group.worst, group.guaranteed]
    assert shown == pytest.approx(wanted, rel=6e-3)  # two digits after the point
    assert "12 MHz above the addressed one: identity up to a final z" in out
    for name in ("pair.svg", "pair-alder-2.svg", "map.svg", "map-alder-2.svg"):
        assert b"<svg" in (tmp_path / name).read_bytes()
        assert name in err


def test_json_of_two_qubits_and_of_one(two):
    data = json.loads(json.dumps(as_json(compare(two))))
    (other,) = data["other_qubits"]
    assert other["name"] == "alder-2" and other["detuning_MHz"] == pytest.approx(12.0)
    assert other["tolerance"] == pytest.approx({"amplitude": 0.02, "detuning_MHz": 0.3})
    assert len(other["cuts"]["pulses"]["shaped"]["against_detuning"]) == len(
        other["cuts"]["detuning_MHz"]
    )
    for pulse in data["pulses"]:
        assert [qubit["name"] for qubit in pulse["qubits"]] == ["addressed", "alder-2"]
        assert pulse["infidelity_worst"] == max(q["infidelity_worst"] for q in pulse["qubits"])
    text = PAIR[: PAIR.index("[[group]]")] + PAIR[PAIR.index("[pulse]") :]
    alone = as_json(compare(dataclasses.replace(two, job_text=text)))
    assert alone["other_qubits"] == [] and len(alone["pulses"][0]["qubits"]) == 1


def test_composites_invert_a_band_of_offsets(rng):
    """Plain, 90-180-90 and Knill against textbook matrices, on the edges and inside the band."""
    job = parse_job(BROADBAND)
    names = ["90-180-90", "Knill"]
    comparison = compare(waveform_of(job, shaped=random_pulse(job, rng)), names)
    for row in comparison.rows[1:]:
        played = comparison.pulses[row.name].played
        lost = [
            1 - abs(reference.propagator(*played, e, d * job.rabi_max)[1, 0]) ** 2
            for e in np.linspace(-0.05, 0.05, 5)
            for d in np.linspace(-1, 1, 41)
        ]
        assert max(lost) - MISSED <= row.worst <= max(lost) + MISSED
        assert max(lost) <= row.guaranteed
        assert row.nominal < 1e-8  # at the center both invert
    # the textbook drive of a half turn at an offset of the Rabi rate: sin^2(pi/sqrt 2)/2
    q = propagate(
        np.array([[job.rabi_max, 0.0]]), np.array([math.pi / job.rabi_max]), 0.0, job.rabi_max
    )
    assert 1 - infidelity(q, job.target) == pytest.approx(
        math.sin(math.pi / math.sqrt(2)) ** 2 / 2, rel=1e-12
    )


# --- the second opinion and the search ------------------------------------------------------------


def test_verify_finds_the_figures_of_all_qubits_again(two):
    assert verify(two)["shaped"].holds
    job = parse_job(PAIR)
    blind = {
        name: score(pulse, dataclasses.replace(job, others=()))
        for name, pulse in two.pulses.items()
    }
    assert not verify(dataclasses.replace(two, scores=blind), ["sandwich"])["sandwich"].holds


def test_verify_finds_a_wide_range_again(rng):
    job = parse_job(BROADBAND)
    assert verify(waveform_of(job, shaped=random_pulse(job, rng)))["shaped"].holds


def test_the_shortest_selective_pulse_from_job_to_score():
    """z(90) on one, the other 12 MHz away left alone, 4 MHz of Rabi frequency, both below 1e-6.

    One step of the clock above the time-optimal limit of the one qubit alone, 165.36 ns (Garon,
    Glaser and Sugny, Phys. Rev. A 88, 043422 (2013)): the neighbor costs next to nothing.
    """
    from shaper.workflow.optimize import optimize

    text = BARE.replace("slice_ns = 8.0", "slice_ns = 4.0").replace("176.0", '"shortest"')
    job = parse_job(text + "[search]\nstarts = 8\nstop_infidelity = 1e-6\n")
    waveform = optimize(job)
    assert waveform.status == "converged"
    pulse = waveform.pulses["shaped"]
    limit = math.pi / 2 * math.sqrt(7) / job.rabi_max
    assert limit < pulse.duration < limit + 4e-9
    first, second = turned(*pulse.played, 0.0, 0.0), stayed(*pulse.played, 0.0, 12 * MHZ)
    assert max(first, second) < 1e-6
    assert waveform.scores["shaped"].dac == pytest.approx(max(first, second), abs=TRACE_ROUND_OFF)
    # without the neighbor in the job it would be thrown about
    assert stayed(*waveform.pulses["sandwich"].played, 0.0, 12 * MHZ) > 0.01
