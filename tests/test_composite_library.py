"""Every entry of the composite library: the rotation, the error orders, the published figures."""

import csv
import math
from pathlib import Path

import numpy as np
import pytest
import reference
from hypothesis import given, settings
from hypothesis import strategies as st
from mpmath import mp

from shaper import rotation
from shaper.composite import length, place, time_optimal
from shaper.composite.compose import compositions, library_pulses, two_pulse
from shaper.composite.library import LIBRARY
from shaper.composite.sequence import arc_rates, played_ideally
from shaper.evidence.order import error_series, leading
from shaper.evidence.score import score
from shaper.evidence.window import tolerance_window
from shaper.job import parse_job
from shaper.physics.noise import quasi_static_infidelity
from shaper.physics.propagate import propagate
from shaper.target import Target, infidelity

DEG = math.pi / 180
EXACT = 1e-14**2  # infidelity of a rotation that is its target to 1e-14
EXACT_WHOLE = 1e-12**2  # up to twenty arcs, each a root found to 1e-13, one after the other
TEN_DIGITS = 1e-10
ROUND_OFF = 5e-15  # of the rotation error, after twenty arcs
TRACE_ROUND_OFF = 3e-14  # of the trace formula of the second implementation, after twenty arcs
RABI_MHZ = 25.0


def table(name):
    path = Path(__file__).parent / "data" / name
    with open(path) as file:
        rows = list(csv.DictReader(line for line in file if not line.startswith("#")))
    return [pytest.param(row, id=f"{row['sequence']}-{row['angle_deg']}") for row in rows]


def job(gate="x", angle_deg=90.0, bound="circle", more=""):
    angle = f"angle_deg = {angle_deg}" if gate in "xyz" else ""
    return parse_job(
        f"""
        [drive]
        rabi_max_MHz = {RABI_MHZ}
        bound = "{bound}"
        sample_rate_MSps = 1000.0
        dac_bits = 16
        [target]
        gate = "{gate}"
        {angle}
        {more}
        [pulse]
        duration_ns = 60.0
        slice_ns = 1.0
        """
    )


def unitary_job(q, bound="circle"):
    """The job whose target is this rotation, typed as a matrix."""
    entries = [[[c.real, c.imag] for c in row] for row in rotation.matrix(q).tolist()]
    text = job(bound=bound).text.replace('gate = "x"', f"unitary = {entries}")
    return parse_job(text.replace("angle_deg = 90.0", ""))


def same_to_ten_digits(found, expected):
    """Of the infidelity, down to where round-off of the rotation error is all that is left."""
    a, b = math.sqrt(found), math.sqrt(expected)
    return abs(a - b) <= TEN_DIGITS * b + ROUND_OFF


def process_infidelity(sequence, target, eps=0.0, f=0.0):
    drive = np.stack([np.cos(sequence.phases), np.sin(sequence.phases)], axis=-1)
    return 1.5 * infidelity(propagate(drive, sequence.angles, eps, f), target)


def check_row(row, sequence, here):
    """Length, orders, coefficients and infidelities of one line of the published tables."""
    assert np.sum(sequence.angles) == pytest.approx(float(row["length"]), rel=TEN_DIGITS)
    ideal = played_ideally(sequence, here)
    for key, error in (("eps", "amplitude"), ("f", "detuning")):
        found = leading(*ideal, here, error)
        assert found.order == int(row[f"{key}_order"])
        expected = float(row[f"{key}_coefficient"])
        assert 1.5 * found.coefficient == pytest.approx(expected, rel=TEN_DIGITS)
        for column in row:
            if column.startswith(f"{key}="):
                value = float(column.split("=")[1])
                got = process_infidelity(sequence, here.target, **{key: value})
                assert same_to_ten_digits(got, float(row[column])), column


@pytest.mark.parametrize("row", table("composites.csv"))
def test_composites_against_published(row):
    angle = float(row["angle_deg"])
    here = job(angle_deg=angle)
    sequence = LIBRARY[row["sequence"]].rotation(angle * DEG, 0.0)
    check_row(row, sequence, here)
    ideal = played_ideally(sequence, here)
    for key, error, unit in (("eps", "amplitude", 1.0), ("f", "detuning", here.rabi_max)):
        for threshold in ("1e-4", "1e-3", "1e-2"):
            window = tolerance_window(*ideal, here, error, float(threshold) / 1.5) / unit
            expected = float(row[f"{key}_window_{threshold}"])
            assert window == pytest.approx(expected, rel=1e-9)  # a root: loses a digit or two


@pytest.mark.parametrize("row", table("composite_sandwiches.csv"))
def test_sandwiches_of_composites_against_published(row):
    here = job("z", float(row["angle_deg"]))
    check_row(row, compositions(here)[row["sequence"]], here)


@pytest.mark.parametrize("name", LIBRARY)
@pytest.mark.parametrize("angle_deg", [30, 60, 120, -75, 180, 400])
def test_every_entry_is_its_rotation_and_has_its_orders(name, angle_deg):
    """About any axis in the xy plane; orders as the entry claims, by series."""
    entry, phase = LIBRARY[name], 0.7
    sequence = entry.rotation(angle_deg * DEG, phase)
    if entry.only_half_turn and angle_deg != 180:
        assert sequence is None
        return
    wanted = rotation.about_equator(angle_deg * DEG, phase)
    assert infidelity(sequence.quaternion, Target(wanted)) < EXACT
    here = unitary_job(wanted)
    ideal = played_ideally(sequence, here)
    assert leading(*ideal, here, "amplitude").order == entry.amplitude_order
    assert leading(*ideal, here, "detuning").order == entry.detuning_order


@pytest.mark.parametrize("name", [n for n, e in LIBRARY.items() if not e.only_half_turn])
@pytest.mark.parametrize("angle_deg", [30, 60, 120])
def test_infidelity_at_more_angles_against_textbook_matrices(name, angle_deg):
    sequence = LIBRARY[name].rotation(angle_deg * DEG, 0.0)
    drive = np.stack([np.cos(sequence.phases), np.sin(sequence.phases)], axis=-1)
    wanted = reference.rotation((1, 0, 0), angle_deg * DEG)
    for eps, f in ((0.05, 0.0), (-0.1, 0.0), (0.0, 0.1), (0.03, -0.07)):
        actual = reference.propagator(drive, sequence.angles, eps, f)
        expected = reference.average_gate_infidelity(actual, wanted)
        found = infidelity(
            propagate(drive, sequence.angles, eps, f), Target(rotation.about_x(angle_deg * DEG))
        )
        assert found == pytest.approx(expected, rel=TEN_DIGITS, abs=TRACE_ROUND_OFF)


def test_closed_forms_of_leading_coefficients():
    """Fitted and checked elsewhere to 36 digits at six angles; here at four others."""
    for theta in (0.3, 1.1, 2.2, 3.0):
        here = job(angle_deg=theta / DEG)
        pi2 = math.pi**2
        closed = {
            "BB1": theta**2 * (16 * pi2 - theta**2) * (theta**2 + 2 * pi2) / 4608,
            "SK1": theta**2 * (16 * pi2 - theta**2) / 64,
            "CORPSE": theta**2 / 4,
            "short-CORPSE": (2 * math.pi - theta) ** 2 / 4,
        }
        for name, expected in closed.items():
            ideal = played_ideally(LIBRARY[name].rotation(theta, 0.0), here)
            found = 1.5 * leading(*ideal, here, "amplitude").coefficient
            assert found == pytest.approx(expected, rel=TEN_DIGITS), name


def test_series_against_forty_digits():
    """The Taylor polynomials of CORPSE in the detuning against mpmath's, power by power."""
    here = job()
    sequence = LIBRARY["CORPSE"].rotation(math.pi / 2, 0.0)
    found = error_series(*played_ideally(sequence, here), here, "detuning", degree=5)
    with mp.workdps(40):
        sigma = [
            mp.matrix([[0, 1], [1, 0]]),
            mp.matrix([[0, -1j], [1j, 0]]),
            mp.matrix([[1, 0], [0, -1]]),
        ]

        def vector_part(f):
            u = mp.eye(2)
            for a, p in zip(sequence.angles, sequence.phases, strict=True):
                a, p = mp.mpf(float(a)), mp.mpf(float(p))
                h = mp.cos(p) * sigma[0] + mp.sin(p) * sigma[1] + f * sigma[2]
                u = mp.expm(-0.5j * a * h, method="taylor") * u
            back = mp.expm(0.25j * mp.pi * sigma[0], method="taylor")
            e = u * back  # the error, after the target
            return [(1j * (s * e)[0, 0] + 1j * (s * e)[1, 1]).real / 2 for s in sigma]

        for component in range(3):
            expected = mp.taylor(lambda f, c=component: vector_part(f)[c], 0, 5)
            assert np.allclose(found[:, component], [float(c) for c in expected], atol=1e-11)


# 1 - F averaged over a Gaussian detuning of standard deviation sigma (in Rabi rates):
# Gauss-Hermite, 80 nodes, in 50 digits; agrees with direct quadrature to 1e-25.
GAUSSIAN = [
    ("plain", "x", 180, 0.05, 0.00249283342023),
    ("plain", "x", 90, 0.1, 0.00497401734989),
    ("CORPSE", "x", 180, 0.05, 2.37330269844e-06),
    ("CORPSE", "x", 90, 0.02, 9.60630054151e-09),
    ("short-CORPSE", "x", 180, 0.1, 0.000794673507002),
    ("plain", "z", 90, 0.02, 0.00119826931744),
    ("plain", "z", 180, 0.1, 0.0194501778005),
]


@pytest.mark.parametrize("name, gate, angle, sigma, expected", GAUSSIAN)
def test_mean_over_gaussian_detuning(name, gate, angle, sigma, expected):
    here = job(gate, angle)
    drive, durations = played_ideally(compositions(here)[name], here)
    found = quasi_static_infidelity(drive, durations, here.target, sigma * here.rabi_max)
    assert 1.5 * found == pytest.approx(expected, rel=1e-9)


# 1 - P(0 -> 1), exact, in 50 digits: at amplitude error 0.1 and at detuning 0.1 Rabi rates;
# then the orders. Levitt and Freeman 1979; Ryan, Hodges and Cory 2010.
INVERSION = {
    "plain": (0.024471742, 0.0099617597, 2, 2),
    "90-180-90": (0.00059886615, 0.0096476203, 4, 2),
    "Knill": (0.00057824697, 3.177056e-07, 6, 6),
    "short-CORPSE": (0.024471742, 0.00027123343, 2, 4),
    "BB1": (9.1628523e-06, 0.010015214, 6, 2),
}


@pytest.mark.parametrize("name", INVERSION)
def test_inversion(name):
    text = job().text.replace('gate = "x"', "from_state = [0, 0, 1]\nto_state = [0, 0, -1]")
    here = parse_job(text.replace("angle_deg = 90.0", ""))
    sequence = compositions(here)[name]
    drive = np.stack([np.cos(sequence.phases), np.sin(sequence.phases)], axis=-1)
    amplitude, detuned, *orders = INVERSION[name]
    for eps, f, expected in ((0.1, 0.0, amplitude), (0.0, 0.1, detuned)):
        found = infidelity(propagate(drive, sequence.angles, eps, f), here.target)
        assert found == pytest.approx(expected, rel=5e-8)  # eight digits quoted
    ideal = played_ideally(sequence, here)
    assert [leading(*ideal, here, e).order for e in ("amplitude", "detuning")] == orders


def test_two_half_turns_are_z():
    """180 about x then 180 about theta/2; eps^2 and f^2 coefficients in 50 digits."""
    for theta, eps2, f2 in (
        (45, 9.493964950619567, 0.15224093497742649),
        (90, 8.424234300364119, 0.5857864376269049),
        (135, 6.823269244691915, 1.2346331352698205),
        (180, 4.934802200544679, 2.0),
    ):
        here = job("z", theta)
        found = two_pulse(here.target)
        assert infidelity(found.quaternion, here.target) < EXACT
        assert found.angles == pytest.approx([math.pi, math.pi])
        assert found.phases == pytest.approx([0.0, theta / 2 * DEG])
        ideal = played_ideally(found, here)
        assert 1.5 * leading(*ideal, here, "amplitude").coefficient == pytest.approx(eps2)
        assert 1.5 * leading(*ideal, here, "detuning").coefficient == pytest.approx(f2)


unit_quaternions = (
    st.lists(st.integers(-100, 100), min_size=4, max_size=4)
    .filter(any)
    .map(lambda q: np.array(q) / np.linalg.norm(q))
)


@settings(deadline=None, max_examples=40)
@given(q=unit_quaternions, bound=st.sampled_from(["circle", "box"]))
def test_every_composition_meets_any_target_and_keeps_its_order(q, bound):
    here = unitary_job(q, bound)
    found = compositions(here)
    assert bool(found) != here.target.needs_no_pulse
    for name, sequence in found.items():
        assert infidelity(sequence.quaternion, here.target) < EXACT_WHOLE, name
        # no quicker than light: nothing beats the limit of the circle that holds the bound
        reach = 1.0 if bound == "circle" else math.sqrt(2)
        shortest = time_optimal(here.target).length / reach
        assert length(sequence, bound) >= shortest * (1 - 1e-9), name


@pytest.mark.parametrize("gate", ["z", "hadamard", "y"])
@pytest.mark.parametrize("bound", ["circle", "box"])
def test_compositions_inherit_the_orders_of_their_entries(gate, bound):
    here = job(gate, 70.0, bound)
    for name, sequence in compositions(here).items():
        entry = LIBRARY.get(name.removeprefix("two-pulse-").removeprefix("reversed-"))
        if entry is None:
            continue
        ideal = played_ideally(sequence, here)
        assert leading(*ideal, here, "amplitude").order >= entry.amplitude_order, name
        assert leading(*ideal, here, "detuning").order >= entry.detuning_order, name


def test_uniform_sequences_have_one_rate_in_the_box():
    here = job("x", 90.0, "box")
    for name, sequence in compositions(here).items():
        rates = arc_rates(sequence, "box")
        if sequence.uniform:
            assert np.ptp(rates) == 0, name
    assert compositions(here)["CORPSE"].uniform and not compositions(here)["BB1"].uniform


def test_every_composition_on_the_grid_is_still_its_target():
    """As loaded: floats exact, 16-bit codes close, the price of the grid visible in the worst."""
    here = job("z", 90.0, more="[tolerance]\namplitude = 0.02\ndetuning_MHz = 0.5")
    for name, sequence in compositions(here).items():
        pulse = place(sequence, here)
        result = score(pulse, here)
        assert result.nominal < 1e-20, name
        assert result.dac < 1e-6, name
        assert pulse.origin == "composite" and pulse.source == sequence.source


def test_a_target_that_needs_no_pulse_has_no_compositions():
    assert compositions(job("z", 90.0, more='equivalence = "up_to_final_z"')) == {}


@settings(deadline=None, max_examples=25)
@given(
    q=unit_quaternions,
    bound=st.sampled_from(["circle", "box"]),
    bits=st.integers(8, 16),
    rate=st.floats(60.0, 3000.0),
)
def test_no_composite_ever_exceeds_the_bound(q, bound, bits, rate):
    """Floats and codes, on coarse and fine sample grids, smooth pulses included."""
    text = unitary_job(q, bound).text.replace("dac_bits = 16", f"dac_bits = {bits}")
    text = text.replace("sample_rate_MSps = 1000.0", f"sample_rate_MSps = {rate!r}")
    text = text.replace("slice_ns = 1.0", f"slice_ns = {1e3 / rate!r}")
    text = text.replace("duration_ns = 60.0", f"duration_ns = {6e4 / rate!r}")
    here = parse_job(text.replace("[drive]", "[qubit]\nanharmonicity_MHz = -210.0\n[drive]"))
    top = 2 ** (bits - 1) - 1
    for name, found in library_pulses(here).items():
        drive, codes = found.pulse.drive / here.rabi_max, found.pulse.codes.astype(int)
        if bound == "circle":
            assert np.max(np.hypot(*drive.T)) <= 1 + 1e-12, name
            assert np.max(np.sum(codes**2, axis=1)) <= top**2, name
        else:
            assert np.max(np.abs(drive)) <= 1 + 1e-12, name
            assert np.max(np.abs(codes)) <= top, name
