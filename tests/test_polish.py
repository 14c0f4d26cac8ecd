"""The code polish: rounding errors that cancel, on several gates, bits and grids."""

import numpy as np
import pytest

from shaper import rotation
from shaper.drive import dac
from shaper.drive.line import filtered, first_order, taps
from shaper.drive.polish import error_slope, polish
from shaper.physics.propagate import propagate
from shaper.target import Target, infidelity
from tests.reference import average_gate_infidelity, propagator

MHZ, NS = 2e6 * np.pi, 1e-9
FULL = 25 * MHZ
BETTER = 100  # times, at 8 bits: what the polish is there for
CLOSE = 2e-8  # infidelity, at 14 bits


def gate_of(drive, durations):
    """A smooth drive and the gate that it makes: a float pulse without error."""
    return Target(propagate(drive, durations, 0.0, 0.0))


def smooth(rng, slices):
    t = (np.arange(slices) + 0.5) / slices
    modes = np.sin(np.pi * np.outer(np.arange(1, 6), t))
    drive = (rng.normal(size=(2, 5)) @ modes).T
    return FULL * drive / np.max(np.hypot(*drive.T))


@pytest.mark.parametrize("pulse", range(3))
def test_eight_bits_lose_a_hundred_times_less(rng, pulse):
    rng = np.random.default_rng([rng.integers(1000), pulse])
    drive, durations = smooth(rng, 60), np.full(60, NS)
    target = gate_of(drive, durations)
    for bits in (8, 14):
        rounded = dac.encode(drive, FULL, bits, "circle")
        found = polish(
            rounded, drive, target, full_scale=FULL, bits=bits, bound="circle", sample_rate=1e9
        )
        # scipy.linalg.expm of the decoded codes has the last word
        wanted = rotation.matrix(target.quaternion)
        plain, polished = (
            average_gate_infidelity(propagator(dac.decode(c, FULL, bits), durations), wanted)
            for c in (rounded, found.codes)
        )
        assert polished < CLOSE
        if bits == 8:
            assert polished < plain / BETTER
        assert np.max(np.hypot(*found.codes.T.astype(int))) <= dac.largest_code(bits)
        assert found.codes.dtype == np.int16
        assert np.max(np.abs(found.codes - rounded)) <= 1


def test_robust_pulse_stays_robust(rng):
    """Over a grid the codes keep the float pulse's own errors, corners included."""
    drive, durations = smooth(rng, 80), np.full(80, NS)
    target = gate_of(drive, durations)
    eps, delta = (v.ravel() for v in np.meshgrid([-0.02, 0, 0.02], [-1 * MHZ, 0, 1 * MHZ]))
    rounded = dac.encode(drive, FULL, 8, "circle")
    found = polish(
        rounded,
        drive,
        target,
        full_scale=FULL,
        bits=8,
        bound="circle",
        sample_rate=1e9,
        eps=eps,
        delta=delta,
    )
    floats = infidelity(propagate(drive, durations, eps, delta), target)

    def change(codes):
        drive = dac.decode(codes, FULL, 8)
        return np.max(np.abs(infidelity(propagate(drive, durations, eps, delta), target) - floats))

    assert found.after < found.before / 20
    assert change(found.codes) < change(rounded) / 4


def test_through_a_line(rng):
    drive, line = smooth(rng, 40), first_order(60e6)
    kernel = taps(line, NS, 4).kernel

    def end(samples):
        fine = filtered(kernel, samples)
        return propagate(fine, np.full(len(fine), NS / 4), 0.0, 0.0)

    target = Target(end(drive))
    rounded = dac.encode(drive, FULL, 8, "box")
    found = polish(
        rounded,
        drive,
        target,
        full_scale=FULL,
        bits=8,
        bound="box",
        sample_rate=1e9,
        kernel=kernel,
    )
    plain, polished = (
        infidelity(end(dac.decode(c, FULL, 8)), target) for c in (rounded, found.codes)
    )
    assert polished < plain / BETTER


@pytest.mark.parametrize("with_line", [False, True])
def test_slope_is_the_central_difference(rng, with_line):
    drive, target = smooth(rng, 12), Target(rotation.about_z(0.7))
    drive[3] = 0.0
    kernel = taps(first_order(60e6), NS, 2).kernel * np.exp(0.3j) if with_line else None
    eps, delta = np.array([0.0, 0.05]), np.array([0.0, 2 * MHZ])

    def error(samples):
        fine = samples if kernel is None else filtered(kernel, samples)
        step = NS if kernel is None else NS / 2
        return propagate(fine, np.full(len(fine), step), eps, delta) @ target.error_rows.T

    slope = error_slope(drive, kernel, 1e9, eps, delta, target.error_rows)
    for index in ((0, 0), (3, 1), (11, 0)):
        up, down = drive.copy(), drive.copy()
        up[index] += 1e4
        down[index] -= 1e4
        numeric = (error(up) - error(down)) / 2e4
        assert np.max(np.abs(slope[:, :, *index] - numeric)) < 1e-8 * np.max(np.abs(numeric))


def test_nothing_to_do_is_left_alone():
    drive = np.zeros((8, 2))
    codes = np.zeros((8, 2), dtype=np.int16)
    found = polish(
        codes,
        drive,
        Target(rotation.IDENTITY),
        full_scale=FULL,
        bits=12,
        bound="circle",
        sample_rate=1e9,
    )
    assert found.moves == 0
    assert np.array_equal(found.codes, codes)
