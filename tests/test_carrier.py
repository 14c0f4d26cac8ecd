"""The lab frame against the rotating frame and the Bloch-Siegert shift."""

import numpy as np
import pytest
from scipy.optimize import brentq

from shaper import rotation
from shaper.physics.carrier import (
    bloch_siegert_shift,
    propagate_with_carrier,
    propagate_with_shift,
)
from shaper.physics.propagate import propagate


def angle_between(a, b):
    """Rotation angle (rad) between two quaternions."""
    return 2 * np.arcsin(np.linalg.norm(rotation.product(rotation.conjugate(b), a)[1:]))


@pytest.mark.parametrize(
    ("ratio", "shift"),
    # resonance of (w0/2) sz + Omega cos(wt) sx from one-period propagators in 40 digits,
    # computed outside the project: Omega/w0 and shift/w0
    [(0.02, 0.0001000024989063), (0.1, 0.002501545441826), (0.2, 0.01002391453364)],
)
def test_published_bloch_siegert_shift(ratio, shift):
    assert bloch_siegert_shift(ratio, 1.0) == pytest.approx(shift, abs=1e-8 + 2 * (ratio / 2) ** 8)

    def slope(carrier):
        """d quasienergy / d w0 at w0 = 1: zero on resonance."""
        h = 0.03 * ratio
        w = [
            propagate_with_carrier(
                np.array([[ratio, 0.0]]), np.array([2 * np.pi / carrier]), carrier, delta=d
            )[0]
            for d in (1 + h - carrier, 1 - h - carrier)
        ]
        return np.arccos(abs(w[0])) - np.arccos(abs(w[1]))

    found = brentq(slope, 1 + 0.5 * shift, 1 + 1.5 * shift, xtol=1e-9) - 1
    assert found == pytest.approx(shift, rel=1e-3)  # the difference quotient's own error


def test_far_carrier_is_the_rotating_frame(rng):
    """The gap to the rotating frame falls with the carrier, at any phase and with errors on."""
    drive, durations = rng.normal(0, 1.0, (4, 2)), rng.uniform(0.5, 1.5, 4)
    expected = propagate(drive, durations, 0.05, 0.2)
    gaps = [
        angle_between(
            propagate_with_carrier(drive, durations, w, eps=0.05, delta=0.2, phase=0.7), expected
        )
        for w in (100.0, 400.0)
    ]
    assert gaps[1] < 0.02
    assert gaps[1] < gaps[0] / 2  # falls as 1/carrier, with an oscillating factor


def test_shift_and_kicks_explain_the_gap(rng):
    """With the first-order terms in, what is left falls as the square of the carrier."""
    drive, durations = rng.normal(0, 1.0, (6, 2)), rng.uniform(0.5, 1.5, 6)
    left, plain = [], []
    for carrier in (40.0, 160.0):
        lab = propagate_with_carrier(drive, durations, carrier, eps=0.05, delta=0.2, phase=0.7)
        first = propagate_with_shift(drive, durations, carrier, eps=0.05, delta=0.2, phase=0.7)
        left.append(angle_between(lab, first))
        plain.append(angle_between(lab, propagate(drive, durations, 0.05, 0.2)))
    assert left[0] < 0.1 * plain[0]
    assert left[1] < 0.03 * plain[1]
    assert 8 < left[0] / left[1] < 32


def test_smooth_pulse_feels_the_shift_alone():
    """Without jumps the rotating frame with |W|^2/(4 w) added is the lab frame."""
    n, length, carrier = 400, 60.0, 12.0
    t = (np.arange(n) + 0.5) / n
    drive = np.stack([0.35 * np.sin(np.pi * t) ** 2, 0.1 * np.sin(2 * np.pi * t)], axis=1)
    durations = np.full(n, length / n)
    lab = propagate_with_carrier(drive, durations, carrier)
    q = np.array([1.0, 0, 0, 0])
    for rate, duration in zip(drive, durations, strict=True):
        shift = bloch_siegert_shift(np.hypot(*rate), carrier)
        q = rotation.product(propagate(rate[None], np.array([duration]), 0.0, shift), q)
    plain = angle_between(lab, propagate(drive, durations, 0.0, 0.0))
    assert angle_between(lab, q) < 0.15 * plain


def test_no_drive_is_the_detuning_alone():
    q = propagate_with_carrier(np.zeros((1, 2)), np.array([3.0]), 20.0, delta=0.4)
    assert angle_between(q, rotation.about_z(1.2)) < 1e-9
    with pytest.raises(ValueError, match="carrier"):
        propagate_with_carrier(np.zeros((1, 2)), np.array([3.0]), 0.0)
