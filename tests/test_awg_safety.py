"""Volts, watts, duty cycle, scaled pulses, names and lengths: what a plan computes and refuses."""

import math

import numpy as np
import pytest
from awg_case import FULL_SCALE, choice, plan, profile, pulse
from hypothesis import given, settings
from hypothesis import strategies as st
from reference import propagator, rotation

from shaper.awg.plan import make_plan
from shaper.awg.safety import exposure, rotation_of, scaled
from shaper.errors import InputError, SafetyError

TOP = 2**13 - 1
NO_GATE = np.zeros(1000, bool)
ROUND_OFF = 1e-12  # relative; a few float operations


def sine(samples=1000, amplitude=TOP):
    """I a cosine of full scale, Q zero, ten periods."""
    codes = np.zeros((samples, 2), np.int16)
    codes[:, 0] = np.rint(amplitude * np.cos(2 * np.pi * 10 * np.arange(samples) / samples))
    return codes


def test_zero_dbm_is_0_632_volts_peak_to_peak_in_50_ohm():
    """The textbook figure: 1 mW into 50 ohm is 0.2236 V rms, 0.6325 V peak to peak."""
    into = profile(outputs={"full_scale_V": 0.6325 / 2}, limits={"peak_V": 1.0})
    found = exposure(sine(), NO_GATE, into, None)
    assert found.mean_power == pytest.approx(1e-3, rel=1e-3)  # codes are rounded
    assert found.as_record()["mean_power_dBm"] == pytest.approx(0.0, abs=5e-3)
    assert found.peak_i == pytest.approx(0.31625, rel=ROUND_OFF) and found.peak_q == 0


def test_mean_power_of_a_square_by_hand():
    """Both outputs at full scale for 100 of 1000 samples: 2 V^2/R * 0.1."""
    codes = np.zeros((1000, 2), np.int16)
    codes[:100] = TOP, -TOP
    found = exposure(codes, NO_GATE, profile(), None)
    assert found.mean_power == pytest.approx(2 * 0.25**2 / 50 * 0.1, rel=ROUND_OFF)
    assert found.peak_vector == pytest.approx(0.25 * math.sqrt(2), rel=ROUND_OFF)
    assert found.duty_cycle == pytest.approx(0.1, rel=ROUND_OFF)


def test_repetition_dilutes():
    """A trace of 1 us played 10,000 times per second: a hundredth of playing without a gap."""
    alone = exposure(sine(), NO_GATE, profile(), None)
    rare = exposure(sine(), NO_GATE, profile(), 1e4)
    assert rare.mean_power == pytest.approx(alone.mean_power / 100, rel=ROUND_OFF)
    assert rare.duty_cycle == pytest.approx(alone.duty_cycle / 100, rel=ROUND_OFF)
    assert rare.peak_vector == alone.peak_vector
    with pytest.raises(InputError, match="at most 1e\\+06 per second"):
        exposure(sine(), NO_GATE, profile(), 1.1e6)


def test_high_load_gives_double_volts_and_the_most_power_any_load_can_take():
    """V_open^2 / 4 R_s: for a matched load it is what really flows."""
    matched = exposure(sine(), NO_GATE, profile(), None)
    high = exposure(sine(), NO_GATE, profile(outputs={"load_ohm": "high"}), None)
    assert high.peak_i == pytest.approx(2 * matched.peak_i, rel=ROUND_OFF)
    assert high.mean_power == pytest.approx(matched.mean_power, rel=ROUND_OFF)


def test_the_gate_counts_for_the_duty_cycle():
    gate = np.zeros(1000, bool)
    gate[:250] = True
    codes = np.zeros((1000, 2), np.int16)
    codes[100:200] = 5
    assert exposure(codes, gate, profile(), None).duty_cycle == pytest.approx(0.25, rel=ROUND_OFF)


@pytest.mark.parametrize(
    "limits, words",
    [
        ({"peak_V": 0.2}, "peak: expected at most 0.2 V into 50 ohm, got 0.2"),
        ({"mean_power_mW": 0.1}, "mean power: expected at most 0.1 mW"),
        ({"duty_cycle": 0.5}, "duty cycle: expected at most 0.5, got 0.93"),
    ],
)
def test_limits_refuse_before_any_link(rng, limits, words):
    with pytest.raises(SafetyError, match=words) as caught:
        plan(rng, into=profile(limits=limits))
    assert caught.value.exit_code == 4
    plan(rng, into=profile(limits=limits), scale=0.05, repetition=1e6)  # low and rare: allowed


@settings(max_examples=200, deadline=None)
@given(st.floats(1e-3, 1.0), st.integers(0, 2**32), st.sampled_from(["circle", "box"]))
def test_scaled_codes_stay_inside_and_near(factor, seed, bound):
    made = pulse(50, np.random.default_rng(seed), bound=bound)
    low = scaled(made, factor, bound)
    assert np.max(np.abs(low.codes - factor * made.codes)) <= 1.0 + ROUND_OFF  # nearest or inside
    reach = np.hypot(*low.codes.T.astype(float))
    assert np.all(reach <= TOP) if bound == "circle" else np.all(np.abs(low.codes) <= TOP)


@pytest.mark.parametrize("factor", [0.0, -0.1, 1.1, math.nan])
def test_scales_that_make_no_sense(rng, factor):
    with pytest.raises(InputError, match="scale"):
        plan(rng, scale=factor)


def test_the_stated_rotation_is_what_the_codes_do(rng):
    """Against matrix exponentials of the loaded codes."""
    chosen = choice(rng)
    for factor in (1.0, 0.3, 0.05):
        [entry] = make_plan([chosen], profile(), scale=factor).pulses
        codes = scaled(chosen.pulse, factor, "circle").codes
        reached = propagator(codes / TOP * FULL_SCALE, np.full(len(codes), 1e-9))
        said = rotation(entry["rotation"]["axis"], math.radians(entry["rotation"]["angle_deg"]))
        overlap = abs(np.trace(said.conj().T @ reached)) / 2
        assert overlap == pytest.approx(1.0, abs=1e-12)
        assert 0 <= entry["rotation"]["angle_deg"] <= 180


def test_nothing_turns_nothing(rng):
    from dataclasses import replace

    still = replace(pulse(4, rng), codes=np.zeros((4, 2), np.int16))
    assert rotation_of(still, 0.0) == {"angle_deg": 0.0, "axis": [0.0, 0.0, 0.0]}


def test_a_trace_ends_at_zero_when_the_last_sample_would_be_held(rng):
    made = plan(rng, samples=64)
    assert made.pulses[0]["total_samples"] == 68
    held = plan(rng, samples=64, into=profile(data={"end_at_zero": False}))
    assert held.pulses[0]["total_samples"] == 64


@pytest.mark.parametrize(
    "changes, words",
    [
        ({"data": {"sample_rate_MSps": 500.0}}, "expected 500 MSps as in the profile, got 1000"),
        ({"data": {"bits": 12}}, "expected 12 bits as in the profile, got 14"),
        ({"outputs": {"rabi_at_full_scale_MHz": 24.0}}, "as calibrated"),
        ({"memory": {"max_samples": 63}}, "expected at most 63 samples"),
    ],
)
def test_pulses_that_do_not_fit_the_instrument(rng, changes, words):
    with pytest.raises(InputError, match=words):
        plan(rng, into=profile(**changes))
    plan(rng, into=profile(outputs={"rabi_at_full_scale_MHz": 25.0}))


def test_one_set_has_one_full_scale(rng):
    other = choice(rng, "B", full_scale=2 * FULL_SCALE)
    with pytest.raises(InputError, match="one full scale"):
        make_plan([choice(rng, "A"), other], profile())


@pytest.mark.parametrize(
    "names, prefix, words",
    [
        (["A", "a"], "", "each name once, got A_I"),
        (["A_TOO_LONG_NAME"], "", "at most 12 characters"),
        (["ABCDEF"], "ABCDEF", "at most 12 characters"),
        (["9A"], "", "a letter, then"),
        (["A B"], "", "a letter, then"),
        (["A;*RST"], "", "a letter, then"),
    ],
)
def test_names(rng, names, prefix, words):
    with pytest.raises(InputError, match=words):
        plan(rng, *names, prefix=prefix)


def test_the_probe_has_its_name_for_itself(rng):
    into = profile(data={"layout": "interleaved"})
    with pytest.raises(InputError, match="reserved"):
        plan(rng, "ShaperProbe", into=into)
