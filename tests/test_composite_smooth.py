"""Smooth pulses on a three-level ladder: published first-order corrections, and the bound."""

import math

import numpy as np
import pytest

from shaper.composite.compose import library_pulses, single
from shaper.composite.smooth import SMOOTH, smooth_pulses, smooth_rotation
from shaper.errors import InputError
from shaper.evidence.levels import level_infidelity, on_levels
from shaper.job import parse_job
from shaper.physics.propagate import propagate
from shaper.target import infidelity

LENGTH, SAMPLES = 20e-9, 8000  # midpoint slices: off by the square of 2.5 ps over 5 ns
ANHARMONICITY = 2 * math.pi * -200e6
# 180 about x in 20 ns on three levels, anharmonicity -200 MHz, Gaussian with sigma = T/4:
# leakage, and average gate infidelity (Pedersen, Moller and Molmer 2007), by Taylor integration
# in 34 digits. The whole derivative cuts the leakage, half of it the gate error.
LADDER = {
    "gaussian": (6.81585165925e-05, 0.006780450224841),
    "gaussian-derivative": (2.317295427051e-09, 0.006997084337259),
    "gaussian-half-derivative": (1.706422283619e-05, 4.662678963662e-05),
}


def three_levels(drive, duration, anharmonicity=ANHARMONICITY):
    """[3, 3] complex: product of exponentials of the ladder's Hamiltonian, level 2 at the end."""
    up = np.diag([1.0, math.sqrt(2)], 1)
    x, y = (up + up.T) / 2, (-1j * up + 1j * up.T) / 2
    h = drive[:, 0, None, None] * x + drive[:, 1, None, None] * y
    h = h + np.diag([0, 0, anharmonicity])
    values, vectors = np.linalg.eigh(h)
    steps = np.einsum("kij,kj,klj->kil", vectors, np.exp(-1j * values * duration), vectors.conj())
    total = np.eye(3, dtype=complex)
    for step in steps:
        total = step @ total
    return total


@pytest.mark.parametrize("name", LADDER)
def test_derivative_correction_against_published(name):
    drive = smooth_rotation(SMOOTH[name], math.pi, 0.0, SAMPLES, SAMPLES / LENGTH, ANHARMONICITY)
    block = three_levels(drive, LENGTH / SAMPLES)[:2, :2]
    leakage = 1 - np.trace(block.conj().T @ block).real / 2
    wanted = np.array([[0, -1j], [-1j, 0]])
    overlap = abs(np.trace(wanted.conj().T @ block)) ** 2
    error = 1 - (overlap + np.trace(block.conj().T @ block).real) / 6
    assert leakage == pytest.approx(LADDER[name][0], rel=1e-4, abs=1e-12)
    assert error == pytest.approx(LADDER[name][1], rel=1e-4)


def test_the_comparison_sees_the_levels():
    """From the codes, through another path than above: same leakage as the plain product."""
    here = job(gate="x")
    pulses = library_pulses(here)
    found = {name: on_levels(*pulses[name].pulse.played, here) for name in ("cosine", *LADDER)}
    for name, (error, lost, returned) in found.items():
        drive, durations = pulses[name].pulse.played
        total = np.eye(3, dtype=complex)
        for rate, duration in zip(drive, durations, strict=True):
            total = three_levels(rate[None], duration, here.anharmonicity) @ total
        block = total[:2, :2]
        assert lost == pytest.approx(1 - np.trace(block.conj().T @ block).real / 2, abs=1e-13)
        assert returned == pytest.approx(np.sum(np.abs(total[:2, 2]) ** 2), abs=1e-13)
        assert error >= 2 / 3 * lost, name
        at = level_infidelity(
            drive, durations, here, np.array([0.0, 0.03]), here.detuning + np.array([0.0, 1e6])
        )
        assert at[0] == pytest.approx(error, rel=1e-9)
        assert at[1] != pytest.approx(error, rel=1e-3)
    assert found["gaussian-derivative"][1] < 0.05 * found["gaussian"][1]
    assert found["gaussian-half-derivative"][0] < 0.2 * found["gaussian"][0]


def job(bound="circle", anharmonicity="anharmonicity_MHz = -210.0", gate="z"):
    return parse_job(
        f"""
        [qubit]
        {anharmonicity}
        [drive]
        rabi_max_MHz = 25.0
        bound = "{bound}"
        sample_rate_MSps = 1000.0
        dac_bits = 14
        [target]
        gate = "{gate}"
        angle_deg = 70.0
        [pulse]
        duration_ns = 60.0
        slice_ns = 1.0
        """
    )


@pytest.mark.parametrize("bound", ["circle", "box"])
def test_smooth_pulses_keep_the_bound_and_are_as_short_as_it_allows(bound):
    here = job(bound)
    way = single(here.target, bound)
    found = smooth_pulses(way, here)
    assert set(found) == set(SMOOTH)
    for name, pulse in found.items():
        reach = np.hypot(*pulse.drive.T) if bound == "circle" else np.abs(pulse.drive)
        assert np.max(reach) <= here.rabi_max
        assert np.max(reach) >= 0.85 * here.rabi_max, name  # one sample less would not fit
        if SMOOTH[name].share == 0:  # without levels, exactly the target
            end = propagate(pulse.drive, pulse.segment_durations, 0.0, 0.0)
            assert infidelity(end, here.target) < 1e-24


def test_without_anharmonicity_there_is_nothing_to_correct():
    found = library_pulses(job(anharmonicity=""))
    assert "cosine" in found and "cosine-derivative" not in found
    assert found["cosine"].sequence is None and found["BB1"].sequence is not None


def test_names_that_the_library_does_not_have():
    with pytest.raises(InputError, match="nearest: CORPSE"):
        library_pulses(job(), ["Corpse"])
    with pytest.raises(InputError, match="expected one of"):
        library_pulses(job(gate="x"), ["90-180-90"])  # only for half turns
    assert list(library_pulses(job(), ["SK1", "BB1"])) == ["SK1", "BB1"]
