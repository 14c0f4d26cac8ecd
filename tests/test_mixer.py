"""I/Q faults: the tone that a real mixer would make, published image figures, exact correction."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from shaper.drive import dac, mixer
from shaper.drive.path import Path
from shaper.errors import InputError, SafetyError
from shaper.physics.propagate import propagate
from shaper.target import Target, infidelity

EXACT = 1e-12
MHZ, NS = 2e6 * np.pi, 1e-9


def rf_spectrum(drive, calibration, carrier, count):
    """[harmonic]: textbook mixer, (I + dI) cos - g (Q + dQ) sin(+phi), sampled and transformed."""
    t = np.arange(count) / count
    i, q = np.asarray(drive).T
    wt = 2 * np.pi * carrier * t
    out = (i + calibration.offset_i) * np.cos(wt) - calibration.gain * (
        q + calibration.offset_q
    ) * np.sin(wt + calibration.phase)
    return 2 * np.abs(np.fft.rfft(out)) / count


def tone(frequency, count, size=0.5):
    t = 2 * np.pi * frequency * np.arange(count) / count
    return size * np.stack([np.cos(t), np.sin(t)], -1)


def test_one_tone_lands_on_the_upper_sideband():
    spectrum = rf_spectrum(tone(7, 1024), mixer.Calibration(), 100, 1024)
    assert np.argmax(spectrum) == 107
    spectrum[107] = 0
    assert np.max(spectrum) < EXACT


# percent and degrees to image rejection in dB, published figures
@pytest.mark.parametrize(
    ("gain", "degrees", "rejection"), [(1.01, 1, 40.0), (1.05, 3, 28.9), (1.001, 0.1, 60.0)]
)
def test_image_rejection(gain, degrees, rejection):
    faulty = mixer.Calibration(gain=gain, phase=np.radians(degrees))
    assert mixer.image_rejection(faulty) == pytest.approx(rejection, abs=0.25)
    spectrum = rf_spectrum(tone(7, 1024), faulty, 100, 1024)
    assert 20 * np.log10(spectrum[107] / spectrum[93]) == pytest.approx(
        mixer.image_rejection(faulty), abs=1e-6
    )
    assert mixer.image_rejection(mixer.Calibration()) == np.inf


def test_correction_removes_image_and_leakage():
    faulty = mixer.Calibration(gain=1.04, phase=np.radians(3), offset_i=0.01, offset_q=-0.02)
    wanted = tone(7, 1024)
    raw = rf_spectrum(wanted, faulty, 100, 1024)
    assert 20 * np.log10(raw[93] / raw[107]) == pytest.approx(-29.71, abs=0.01)
    played = mixer.corrected(wanted, faulty)
    clean = rf_spectrum(played, faulty, 100, 1024)
    assert clean[107] == pytest.approx(0.5, abs=EXACT)
    assert max(clean[93], clean[100]) < EXACT
    assert np.max(np.hypot(*mixer.corrected(wanted, mixer.Calibration(phase=0.05)).T)) > 0.51


@given(
    gain=st.floats(0.5, 2.0),
    phase=st.floats(-0.5, 0.5),
    offset=st.floats(-0.2, 0.2),
    i=st.floats(-1, 1),
    q=st.floats(-1, 1),
)
def test_mixed_undoes_corrected(gain, phase, offset, i, q):
    faulty = mixer.Calibration(gain, phase, offset, -offset)
    drive = np.array([[i, q]])
    assert mixer.mixed(mixer.corrected(drive, faulty), faulty) == pytest.approx(drive, abs=1e-11)


def test_skew_is_taken_out():
    """A smooth Q arm played earlier arrives on time."""
    t = np.arange(64) - 32
    drive = np.stack([np.exp(-((t / 8) ** 2)), np.exp(-((t / 10) ** 2))], -1)
    late = mixer.Calibration(skew=0.4 * NS)
    played = mixer.corrected(drive, late, 1e9)
    right, wrong = (
        np.max(np.abs(mixer.arrived(x, late, 1e9, 10).reshape(64, 10, 2).mean(1) - drive))
        for x in (played, drive)
    )
    assert right < 0.005  # the held steps' own curvature
    assert wrong > 0.025
    whole = mixer.shifted(drive[:, 1], 3.0)
    assert np.max(np.abs(whole[3:] - drive[:-3, 1])) < EXACT
    with pytest.raises(ValueError, match="sample_rate"):
        mixer.corrected(drive, late)


def test_headroom_is_checked_after_the_correction():
    faulty = mixer.Calibration(phase=0.1)
    drive = np.array([[0.7, 0.7]])
    mixer.require_headroom(drive, 1.0, "circle")
    with pytest.raises(SafetyError, match="after it, got 1.0.*; lower rabi_max by"):
        mixer.require_headroom(mixer.corrected(drive, faulty), 1.0, "circle")


def test_intermediate_frequency_keeps_gate_and_phase(rng):
    drive = rng.normal(0, 10 * MHZ, (50, 2))
    durations = np.full(50, NS)
    target = Target(propagate(drive, durations, 0.0, 0.0))
    for frequency in (120e6, -80e6):
        played = mixer.upconverted(drive, 1e9, frequency, first=1234, phase=0.3)
        perfect = (mixer.Calibration(), 1e9, 16, frequency)
        back = mixer.arrived_at_carrier(played, *perfect, first=1234, phase=0.3)
        arrived = propagate(back, np.full(len(back), NS / 16), 0.0, 0.0)
        assert infidelity(arrived, target) < 3e-4  # left: 43 degrees of turn within a sample
        # a pulse that forgets the phase reference makes another gate
        other = mixer.arrived_at_carrier(played, *perfect, first=1235, phase=0.3)
        assert infidelity(propagate(other, np.full(800, NS / 16), 0.0, 0.0), target) > 5e-3
    wanted = np.ones((1000, 2)) * [1.0, 0.0]
    spectrum = np.fft.fft(mixer.upconverted(wanted, 1e9, 120e6) @ [1, 1j])
    assert np.argmax(np.abs(spectrum)) == 120  # above the local oscillator


@given(
    st.floats(-0.49, 0.49),
    st.integers(0, 100_000),
    st.floats(-3, 3),
    st.integers(1, 16),
    st.integers(0, 2**32 - 1),
)
def test_mean_over_each_sample_is_the_wanted_drive(share, first, phase, cells, seed):
    """Below half the sample rate, wherever the pulse begins, the hold takes nothing away."""
    drive = np.random.default_rng(seed).normal(0, 1, (9, 2))
    path = Path(intermediate_frequency=share * 1e9, phase=phase, first=first)
    back, cell = path.at_qubit(path.to_play(drive, 1e9), 1e9, cells)
    assert cell * cells == pytest.approx(NS)
    # the turn of 100 000 samples is known to some 1e-10 of a turn
    assert back.reshape(9, cells, 2).mean(1) == pytest.approx(drive, abs=1e-9)


@given(
    st.sampled_from(["circle", "box"]),
    st.floats(-0.49, 0.49),
    st.floats(0.8, 1.25),
    st.floats(-0.2, 0.2),
    st.floats(-0.1, 0.1),
    st.integers(0, 2**32 - 1),
)
def test_share_of_the_bound_is_kept_by_what_is_played(bound, share, gain, phase, offset, seed):
    """A drive at its share of the bound keeps the bound, and somewhere nearly reaches it."""
    rng = np.random.default_rng(seed)
    faulty = mixer.Calibration(gain=gain, phase=phase, offset_i=offset, offset_q=-offset / 2)
    path = Path(calibration=faulty, intermediate_frequency=share * 1e9)
    angle = rng.uniform(0, 2 * np.pi, 200)
    drive = np.stack([np.cos(angle), np.sin(angle)], -1)
    if bound == "box":
        drive = np.concatenate([drive / np.max(np.abs(drive), 1)[:, None], np.sign(drive)])
    room = path.share(1e9, 1.0, bound)
    played = path.to_play(room * drive, 1e9)
    mixer.require_headroom(played, 1.0, bound)
    codes = dac.encode(played, 1.0, 12, bound).astype(int)
    reach = np.hypot(*codes.T) if bound == "circle" else np.max(np.abs(codes), axis=1)
    assert np.max(reach) <= dac.largest_code(12)
    assert np.max(reach) > 0.7 * dac.largest_code(12)


@pytest.mark.parametrize("skew", [0.0, 0.13 * NS, -0.4 * NS])
def test_a_late_arm_on_an_intermediate_frequency(rng, skew):
    """Cell means of the held, late, mixed and turned back waveform, against quadrature of it."""
    faulty = mixer.Calibration(1.05, 0.06, 0.02, -0.03, skew)
    drive = rng.normal(0, 1, (5, 2))
    found = mixer.arrived_at_carrier(drive, faulty, 1e9, 4, 170e6, first=7, phase=0.4)
    t = (np.arange(5 * 4 * 5000) + 0.5) / 20_000 * NS  # midpoints
    late = np.floor((t - skew) / NS).astype(int)
    inside = (late >= 0) & (late < 5)
    i = drive[np.floor(t / NS).astype(int), 0] + 0.02
    q = np.where(inside, drive[np.clip(late, 0, 4), 1], 0) - 0.03
    carrier = 2 * np.pi * 170e6 * (t + 7 * NS) + 0.4
    mixed = i + 1.05 * q * 1j * np.exp(1j * 0.06)
    means = (mixed * np.exp(-1j * carrier)).reshape(20, 5000).mean(1)
    assert found == pytest.approx(np.stack([means.real, means.imag], -1), abs=1e-6)
    still = mixer.arrived_at_carrier(drive, faulty, 1e9, 4, 0.0)
    assert still == pytest.approx(mixer.arrived(drive, faulty, 1e9, 4), abs=EXACT)


def test_bad_calibrations_give_one_line():
    for fault, match in (
        ({"gain": 0.0}, "gain: expected a positive ratio"),
        ({"phase": 1.0}, "phase: expected below 45 degrees"),
        ({"offset_q": np.nan}, "offset_q: expected a finite"),
    ):
        with pytest.raises(InputError, match=match):
            mixer.Calibration(**fault)
    with pytest.raises(InputError, match="below half the sample rate = 500 MHz, got 600 MHz"):
        mixer.upconverted(np.zeros((4, 2)), 1e9, 600e6)
