"""The drive line against scipy.signal, scikit-rf and an integrator."""

import importlib.util
import subprocess
import sys
from pathlib import Path

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from scipy import signal
from scipy.integrate import solve_ivp
from scipy.ndimage import gaussian_filter1d
from scipy.optimize import least_squares

from shaper import rotation
from shaper.drive import line as lines
from shaper.drive import path as paths
from shaper.drive.line_data import around_carrier, read_step_response, read_touchstone
from shaper.errors import InputError
from shaper.physics import two_level
from shaper.physics.propagate import propagate
from shaper.rotation import conjugate, product
from shaper.target import Target, infidelity

jax.config.update("jax_enable_x64", True)

ROOT = Path(__file__).resolve().parent.parent
DATA = ROOT / "configs" / "alder_data"
MHZ, NS = 2e6 * np.pi, 1e-9
EXACT = 1e-10
needs_rf = pytest.mark.skipif(importlib.util.find_spec("skrf") is None, reason="needs scikit-rf")


def cell_means(line, drive, slice_duration, cells):
    kernel = lines.taps(line, slice_duration, cells)
    return lines.filtered(kernel.kernel, drive)[kernel.lead * cells :]


def test_first_order_is_scipy_signal(rng):
    """Cell means from the integral of H(s)/s under a zero-order hold."""
    drive, bandwidth, cells = rng.normal(size=(20, 2)), 60e6, 5
    ours = cell_means(lines.first_order(bandwidth), drive, NS, cells)
    pole = 2 * np.pi * bandwidth * NS
    system = signal.StateSpace([[-pole, 0], [1, 0]], [[pole], [0]], [[0, 1]], [[0]])
    held = np.repeat(drive, cells, axis=0)
    held = np.vstack([held, np.zeros((len(ours) - len(held) + 1, 2))])
    time = np.arange(len(held)) / cells
    for k in range(2):
        _, area, _ = signal.lsim(system, held[:, k], time, interp=False)
        assert np.max(np.abs(ours[:, k] - np.diff(area) * cells)) < 3 * lines.SETTLED


def test_gaussian_is_the_convolution(rng):
    drive, bandwidth, cells, fine = rng.normal(size=(15, 2)), 80e6, 2, 200
    kernel = lines.taps(lines.gaussian(bandwidth), NS, cells)
    ours = lines.filtered(kernel.kernel, drive)
    sigma = np.sqrt(np.log(2)) / (2 * np.pi * bandwidth * NS) * fine  # cells of the fine grid
    tail = kernel.added - kernel.lead
    padded = np.pad(np.repeat(drive, fine, axis=0), ((kernel.lead * fine, tail * fine), (0, 0)))
    smooth = gaussian_filter1d(padded, sigma, axis=0, mode="constant", truncate=8)
    means = smooth.reshape(-1, fine // cells, 2).mean(axis=1)
    assert np.max(np.abs(ours - means)) < 2e-6  # the tail cut and the fine grid


@pytest.mark.parametrize("make", [lines.first_order, lines.gaussian])
def test_bandwidth_is_half_power(make):
    line = make(75e6)
    assert abs(line.response(np.array([75e6]))[0]) ** 2 == pytest.approx(0.5, rel=1e-12)
    # the step response is the response: Fourier integral of its derivative
    t = np.linspace(-20 * NS, 60 * NS, 80001)
    rise = np.diff(line.step(t))
    for f in (20e6, 75e6, 200e6):
        sum_ = rise @ np.exp(-2j * np.pi * f * (t[:-1] + t[1:]) / 2)
        assert sum_ == pytest.approx(line.response(np.array([f]))[0], abs=1e-6)
    # and the ramp its integral
    assert np.max(np.abs(np.gradient(line.ramp(t), t) - line.step(t))[5:-5]) < 1e-3


def test_no_line_changes_nothing(rng):
    drive = rng.normal(size=(6, 2))
    kernel = lines.taps(lines.none(), NS, 3)
    assert kernel.added == 0
    assert np.max(np.abs(lines.filtered(kernel.kernel, drive) - np.repeat(drive, 3, 0))) < EXACT


def test_area_is_kept_and_sidebands_turn(rng):
    """Mean over the cells is the mean over the slices; i H turns x into y."""
    drive = rng.normal(size=(9, 2))
    for line in (lines.first_order(90e6), lines.gaussian(90e6)):
        kernel = lines.taps(line, NS, 4)
        arrived = lines.filtered(kernel.kernel, drive)
        assert np.sum(arrived, 0) / 4 == pytest.approx(np.sum(drive, 0), abs=1e-4)
        turned = lines.filtered(1j * kernel.kernel, drive)
        assert np.max(np.abs(turned - np.stack([-arrived[:, 1], arrived[:, 0]], -1))) < EXACT


@pytest.mark.parametrize("line", [lines.first_order(60e6), lines.first_order(200e6)])
def test_cells_of_the_score_are_enough_for_rough_pulses(rng, line):
    """Random phases at the bound, against 16 times as many cells.

    An infidelity of 5e-5 changes by twice its root times the error of the propagator: half a
    percent of it is 1.8e-5.
    """
    phase = rng.uniform(0, 2 * np.pi, 80)
    samples = 25 * MHZ * np.stack([np.cos(phase), np.sin(phase)], axis=-1)
    path, rate = paths.Path(line=line), 1 / NS

    def end(cells):
        drive, cell = path.at_qubit(samples, rate, cells)
        return propagate(drive, np.full(len(drive), cell), 0.01, MHZ)

    fine = end(16 * path.cells(rate))
    error = product(conjugate(fine), end(path.cells(rate)))[1:]
    assert np.linalg.norm(error) < 1.8e-5
    coarse = product(conjugate(fine), end(2))[1:]
    assert np.linalg.norm(coarse) > 1.8e-5


def test_the_path_filters_as_the_line_does(rng):
    samples = rng.normal(size=(9, 2))
    for line in (lines.first_order(90e6), lines.gaussian(90e6)):
        kernel = lines.taps(line, NS, 8)
        drive, cell = paths.Path(line=line).at_qubit(samples, 1 / NS, 8)
        assert cell == pytest.approx(NS / 8)
        expected = lines.filtered(kernel.kernel, samples)
        assert drive == pytest.approx(expected, abs=5 * lines.SETTLED)  # tails end a little apart


def test_fourth_order_cells_need_fewer_of_them(rng):
    """Against 512 cells a slice: halving the cells divides the error by 16 instead of 4."""
    line, drive = lines.first_order(90e6), rng.normal(0, 25 * MHZ, (12, 2))

    def end(kernel):
        fine = lines.filtered(kernel, drive)
        return propagate(fine, np.full(len(fine), NS / kernel.shape[1]), 0.02, 2 * MHZ)

    exact = end(lines.taps(line, NS, 512).kernel)
    plain, better = (
        [np.max(np.abs(end(make(lines.taps(line, NS, n).kernel)) - exact)) for n in (4, 8)]
        for make in (lambda kernel: kernel, lines.fourth_order)
    )
    assert plain[0] / plain[1] == pytest.approx(4, rel=0.1)
    assert better[0] < 0.02 * plain[0]
    assert better[0] / better[1] > 10


@pytest.mark.parametrize("slices", [1, 9, 70])
@pytest.mark.parametrize("turn", [1, np.exp(0.3j)])
def test_gathered_is_the_transpose_of_filtered(rng, slices, turn):
    """<slope, filtered(drive)> = <gathered(slope), drive>, for NumPy and JAX arrays alike."""
    kernel = lines.taps(lines.first_order(90e6), NS, 4).kernel * turn
    drive = rng.normal(size=(slices, 2))
    arrived = lines.filtered(kernel, drive)
    slope = rng.normal(size=(*arrived.shape, 3, 2))
    expected = np.einsum("sc...,sc->...", slope, arrived)
    for make in (np.asarray, jnp.asarray):
        found = lines.gathered(kernel, make(slope))
        assert found.shape == (slices, 2, 3, 2)
        assert np.einsum("sc...,sc->...", found, drive) == pytest.approx(expected, abs=EXACT)


def test_numpy_and_jax_agree(rng):
    drive = rng.normal(size=(9, 2))
    kernel = lines.taps(lines.first_order(90e6), NS, 4).kernel
    assert (
        np.max(np.abs(lines.filtered(kernel, jnp.asarray(drive)) - lines.filtered(kernel, drive)))
        < EXACT
    )


def test_doubling_the_cells_changes_nothing(rng):
    drive = np.cumsum(rng.normal(size=(60, 2)), 0)
    drive *= 25 * MHZ / np.max(np.hypot(*drive.T))
    line = lines.first_order(60e6)
    cells = lines.cells_needed(line, drive, NS)
    assert 2 <= cells <= 8

    def end(count):
        fine = lines.filtered(lines.taps(line, NS, count).kernel, drive)
        return propagate(fine, np.full(len(fine), NS / count), 0.0, 0.0)

    same = Target(end(8 * cells))
    assert infidelity(end(cells), same) < 2e-9
    assert infidelity(end(cells), same) / infidelity(end(2 * cells), same) > 12  # fourth order


def test_zero_order_hold_figures():
    """Droop and image of a held tone, published figures in dB."""
    share = np.array([0.05, 0.1, 0.2, 0.25, 0.4, 0.5])
    droop = -20 * np.log10(np.abs(lines.hold_response(share * 1e9, 1e9)))
    assert droop == pytest.approx([0.04, 0.14, 0.58, 0.91, 2.42, 3.92], abs=6e-3)
    tone, image = np.abs(lines.hold_response(np.array([0.2e9, 0.8e9]), 1e9))
    assert 20 * np.log10(image) == pytest.approx(-12.6, abs=0.05)
    assert tone > image
    # the staircase of the model has this sinc: transform of one slice through no line
    cells = lines.taps(lines.none(), NS, 64).kernel[0]
    time = (np.arange(64) + 0.5) / 64 * NS
    wave = np.mean(cells * np.exp(-2j * np.pi * 0.2e9 * time))
    assert wave == pytest.approx(lines.hold_response(np.array([0.2e9]), 1e9)[0], abs=1e-4)


def optimized(kernel, slices, rabi_max, target, x0):
    """A small least-squares search through the line: scipy's, on the engine's Jacobian."""
    cells = kernel.shape[1]
    count = (slices + kernel.shape[0] - 1) * cells
    durations, one = jnp.full(count, NS / cells), jnp.zeros(1)

    def drive(x):
        x = x.reshape(slices, 2)
        r = jnp.sqrt(jnp.sum(x**2, axis=1, keepdims=True) + 1e-12)
        return rabi_max * x / r * jnp.sin(r)

    def error(x):
        fine = lines.filtered(kernel, drive(x))
        q = two_level.propagate(fine, durations, one, one, 2 * rabi_max * NS)
        return target.error_rows @ jnp.stack([c[0] for c in q])

    found = least_squares(
        jax.jit(error), x0, jax.jit(jax.jacrev(error)), xtol=1e-15, ftol=1e-15, gtol=1e-15
    )
    return np.asarray(drive(jnp.asarray(found.x)))


def integrated(line, drive, slice_duration, until):
    """Independent: DOP853 through the continuous sum of step responses, no cells, no slices."""
    edges = np.diff(np.vstack([np.zeros(2), drive, np.zeros(2)]), axis=0)
    starts = slice_duration * np.arange(len(edges))

    def slope(t, q):
        wx, wy = 0.5 * (line.step(t - starts) @ edges)
        w, x, y, z = q
        return [-wx * x - wy * y, wx * w + wy * z, wy * w - wx * z, wx * y - wy * x]

    q = np.array([1.0, 0, 0, 0])
    stops = np.append(starts, until)
    for begin, end in zip(stops[:-1], stops[1:], strict=True):
        q = solve_ivp(slope, (begin, end), q, method="DOP853", rtol=1e-11, atol=1e-13).y[:, -1]
    return q


def test_optimized_through_a_line_holds_at_the_qubit():
    """60 MHz, z(90) in 60 ns at 25 MHz: below 1e-6 with the line in the model, above 1e-3
    without, both by the integrator."""
    target, line = Target(rotation.about_z(np.pi / 2)), lines.first_order(60e6)
    t = (np.arange(60) + 0.5) / 60
    x0 = np.stack([np.sin(np.pi * t), np.cos(3 * np.pi * t)], -1).ravel()
    blind = optimized(lines.taps(lines.none(), NS, 1).kernel, 60, 25 * MHZ, target, x0)
    seeing = optimized(lines.taps(line, NS, 8).kernel, 60, 25 * MHZ, target, x0)
    assert infidelity(propagate(blind, np.full(60, NS), 0.0, 0.0), target) < 1e-12
    until = 60 * NS + line.reach
    assert infidelity(integrated(line, blind, NS, until), target) > 1e-3
    assert infidelity(integrated(line, seeing, NS, until), target) < 1e-9


def test_inverse_makes_the_wanted_drive_arrive():
    """A smooth pulse through its predistortion arrives; played as it is, it does not."""
    t = (np.arange(40) + 0.5) / 40
    wanted = np.stack([np.sin(np.pi * t) ** 2, 0.5 * np.sin(2 * np.pi * t)], -1)
    line = lines.first_order(60e6)
    played = lines.inverse(line, wanted, NS, extra=6, ridge=1e-6)
    assert played.shape == (46, 2)
    kernel = lines.taps(line, NS, 1).kernel
    ideal = np.vstack([wanted, np.zeros((60, 2))])

    def miss(drive):
        arrived = lines.filtered(kernel, drive)
        return np.max(np.abs(arrived - ideal[: len(arrived)]))

    assert miss(played) < 0.02
    assert miss(wanted) > 0.15
    assert np.max(np.abs(played)) > 1.03  # it costs headroom: the bound is checked on this


def test_measured_step_response():
    line = read_step_response(DATA / "step_response.csv", 1e9)
    assert line.lead == 0.0
    assert 20 * NS < line.reach < 80 * NS
    assert line.step(np.array([1e-6]))[0] == 1.0
    # a sampled first-order response is the first-order line, to the sampling
    exact = lines.first_order(100e6)
    t = np.arange(0, 60, 0.05) * NS
    sampled = lines.tabulated("sampled", 0.0, 0.05 * NS, np.append(exact.step(t)[:-1], 1.0))
    assert sampled.bandwidth == pytest.approx(100e6, rel=0.02)
    assert sampled.response(np.array([70e6]))[0] == pytest.approx(
        exact.response(np.array([70e6]))[0], abs=2e-3
    )
    at = np.array([-1.0, 0.3, 2.21, 40.0, 100.0]) * NS
    assert sampled.ramp(at) == pytest.approx(exact.ramp(at), abs=1e-3 * NS)


@needs_rf
def test_real_touchstone_file_read_as_scikit_rf_reads_it():
    """A measured network that ships inside scikit-rf, 75 to 110 GHz."""
    import skrf

    path = Path(skrf.__file__).parent / "data" / "ring slot.s2p"
    network = skrf.Network(str(path))
    carrier, rate = 92e9, 20e9
    line = read_touchstone(path, carrier, rate)
    offset, relative = around_carrier(network.f, network.s[:, 1, 0], carrier)
    probe = carrier + np.array([-7.03e9, -2.31e9, 0.0, 1.77e9, 6.6e9])
    axis = skrf.Frequency.from_f(probe, unit="Hz")
    theirs = network.interpolate(axis, basis="s", coords="polar").s[:, 1, 0]
    ours = np.interp(probe - carrier, offset, np.abs(relative))
    assert ours == pytest.approx(np.abs(theirs / theirs[2]), abs=1e-4)
    # through the step response and back, the line still has this transmission
    assert np.abs(line.response(probe - carrier)) == pytest.approx(ours, abs=0.02)


@needs_rf
def test_alder_touchstone_file():
    line = read_touchstone(DATA / "transmission.s2p", 5e9, 1e9)
    up, down = np.abs(line.response(np.array([0.4e9, -0.4e9])))
    assert up < 0.7 < down  # the dip at 5.4 GHz lies on one side of the carrier
    assert 0 < line.lead < 20 * NS
    assert line.step(np.array([1e-6]))[0] == 1.0


def test_alder_data_are_what_the_script_makes(tmp_path):
    script = ROOT / "scripts" / "make_alder_data.py"
    subprocess.run([sys.executable, str(script), str(tmp_path)], check=True)
    for name in ("step_response.csv", "transmission.s2p", "noise_spectrum.csv"):
        assert (tmp_path / name).read_bytes() == (DATA / name).read_bytes()


HEAD = "time_ns,response\n"


@pytest.mark.parametrize(
    ("text", "match"),
    [
        ("", "expected the header time_ns,response, got an empty file"),
        ("t,s\n1,2\n", "expected the header"),
        (HEAD + "0,0\n1,x\n2,1\n", "expected numbers"),
        (HEAD + "0,0\n1,1\n", "at least 3 rows"),
        (HEAD + "0,0\n1,nan\n2,1\n", "finite"),
        (HEAD + "0,0\n1,0.5\n3,1\n4,1\n", "even, rising time base"),
        (HEAD + "".join(f"{5 * k},1\n" for k in range(9)), "at most one DAC sample"),
        (HEAD + "".join(f"{k}e-9,1\n" for k in range(50)), "over at least one DAC sample"),
        (HEAD + "".join(f"{k},{k}\n" for k in range(50)), "at rest"),
    ],
)
def test_bad_step_responses_give_one_line(tmp_path, text, match):
    path = tmp_path / "step.csv"
    path.write_text(text)
    with pytest.raises(InputError, match=match) as caught:
        read_step_response(path, 1e9)
    assert "\n" not in str(caught.value)


@needs_rf
def test_bad_touchstone_files_give_one_line(tmp_path):
    good = DATA / "transmission.s2p"
    for carrier, rate in ((7e9, 1e9), (5.8e9, 1e9)):
        with pytest.raises(InputError, match="expected data over the carrier"):
            read_touchstone(good, carrier, rate)
    with pytest.raises(InputError, match="ports: expected 1 to 2"):
        read_touchstone(good, 5e9, 1e9, ports=(3, 1))
    broken = tmp_path / "broken.s2p"
    broken.write_text("# GHz S RI R 50\n1 2 three\n")
    for path in (broken, tmp_path / "absent.s2p"):
        with pytest.raises(InputError, match="not a readable Touchstone") as caught:
            read_touchstone(path, 5e9, 1e9)
        assert "\n" not in str(caught.value)


def test_line_below_the_pulse_is_refused():
    with pytest.raises(InputError, match="at least 1/duration = 16.67 MHz, got 10 MHz"):
        lines.require_band(lines.first_order(10e6), 60 * NS)
    lines.require_band(lines.first_order(60e6), 60 * NS)
    for make in (lines.first_order, lines.gaussian):
        with pytest.raises(InputError, match="positive bandwidth"):
            make(0.0)
