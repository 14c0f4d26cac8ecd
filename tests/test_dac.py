"""DAC codes: not one beyond the bound, the nearest point inside, padding that the AWG takes."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from shaper.drive import dac
from shaper.errors import SafetyError

RABI_MAX = 2 * math.pi * 25e6  # rad/s
HALF_CODE = 0.5 + 1e-9  # rounding, and the round-off of dividing by full scale
# The bound's edge cuts a corner off a lattice cell: the nearest point inside is one cell away.
INSIDE = math.sqrt(2)

bounds = st.sampled_from(["circle", "box"])
bits = st.integers(8, 16)
seeds = st.integers(0, 2**32 - 1)


def random_drive(seed, bound, edge, samples=200):
    """Drives all over the disc or box; every second one exactly on its edge if asked."""
    rng = np.random.default_rng(seed)
    if bound == "box":
        drive = rng.uniform(-1, 1, (samples, 2))
        if edge:
            drive[::2, 0] = np.sign(drive[::2, 0])
            drive[::4, 1] = np.sign(drive[::4, 1])
        return drive * RABI_MAX
    radius, angle = np.sqrt(rng.uniform(0, 1, samples)), rng.uniform(0, 2 * math.pi, samples)
    if edge:
        radius[::2] = 1.0
    return RABI_MAX * radius[:, None] * np.stack([np.cos(angle), np.sin(angle)], axis=-1)


@settings(deadline=None, max_examples=200)
@given(seeds, bounds, bits, st.booleans())
def test_no_code_leaves_the_bound(seed, bound, bits, edge):
    """In exact integers, so that no rounding can hide a violation."""
    codes = dac.encode(random_drive(seed, bound, edge), RABI_MAX, bits, bound)
    assert codes.dtype == np.int16
    i, q = codes.astype(int).T
    top = 2 ** (bits - 1) - 1
    assert np.max(np.abs(codes.astype(int))) <= top
    if bound == "circle":
        assert np.all(i * i + q * q <= top * top)


@settings(deadline=None, max_examples=100)
@given(seeds, bounds, bits, st.booleans())
def test_codes_are_plain_rounding_where_that_stays_inside(seed, bound, bits, edge):
    drive = random_drive(seed, bound, edge)
    codes = dac.encode(drive, RABI_MAX, bits, bound).astype(int)
    top = 2 ** (bits - 1) - 1
    exact = drive / RABI_MAX * top
    plain = np.rint(exact).astype(int)
    inside = np.sum(plain**2, axis=1) <= top**2 if bound == "circle" else np.ones(len(plain), bool)
    assert np.array_equal(codes[inside], np.clip(plain, -top, top)[inside])
    assert np.max(np.abs(codes - exact)[inside]) <= HALF_CODE
    assert np.max(np.hypot(*(codes - exact).T)) <= INSIDE


@settings(deadline=None, max_examples=60)
@given(st.floats(0, 2 * math.pi), st.integers(3, 9))
def test_at_the_edge_of_the_circle_the_nearest_point_inside_is_taken(angle, bits):
    """Against a search over the whole neighborhood, in exact integers."""
    top = 2 ** (bits - 1) - 1
    exact = top * np.array([math.cos(angle), math.sin(angle)])
    drive = RABI_MAX * np.array([[math.cos(angle), math.sin(angle)]])
    i, q = dac.encode(drive, RABI_MAX, bits, "circle")[0].astype(int)
    around = range(-3, 4)
    base = np.trunc(exact).astype(int)
    points = [(base[0] + a, base[1] + b) for a in around for b in around]
    inside = [(a, b) for a, b in points if a * a + b * b <= top * top]
    nearest = min(math.dist(exact, point) for point in inside)
    assert math.dist(exact, (i, q)) == pytest.approx(nearest, abs=1e-9)


@settings(deadline=None, max_examples=100)
@given(seeds, bounds, st.integers(2, 16))
def test_codes_come_back(seed, bound, bits):
    """What the codes stand for encodes to the same codes: the round trip is exact."""
    codes = dac.encode(random_drive(seed, bound, True), RABI_MAX, bits, bound)
    played = dac.decode(codes, RABI_MAX, bits)
    reach = np.hypot(*played.T) if bound == "circle" else np.abs(played)
    assert np.max(reach) <= RABI_MAX * (1 + 1e-15)
    assert np.array_equal(dac.encode(played, RABI_MAX, bits, bound), codes)


@pytest.mark.parametrize("bits", [8, 12, 14, 16])
def test_full_scale_is_the_largest_code_of_either_sign(bits):
    drive = RABI_MAX * np.array([[1.0, 0.0], [-1.0, 0.0], [0.0, 1.0], [0.0, -1.0], [0.0, 0.0]])
    top = 2 ** (bits - 1) - 1
    expected = [[top, 0], [-top, 0], [0, top], [0, -top], [0, 0]]
    assert dac.encode(drive, RABI_MAX, bits, "circle").tolist() == expected


@pytest.mark.parametrize(
    ("drive", "bound"),
    [
        ([[1.0001, 0.0]], "circle"),
        ([[0.8, 0.8]], "circle"),
        ([[0.0, -1.0001]], "box"),
        ([[math.nan, 0.0]], "circle"),
        ([[0.0, math.nan]], "box"),
        ([[math.inf, 0.0]], "box"),
    ],
)
def test_what_exceeds_the_bound_is_refused_not_clipped(drive, bound):
    with pytest.raises(SafetyError, match="expected at most"):
        dac.encode(RABI_MAX * np.array(drive), RABI_MAX, 14, bound)


@given(st.integers(0, 5000), st.integers(1, 512), st.integers(1, 3000))
def test_padded_length_is_the_shortest_that_the_awg_takes(samples, granularity, minimum):
    found = dac.padded_length(samples, granularity, minimum)
    assert found % granularity == 0
    assert found >= max(samples, minimum)
    assert found - granularity < max(samples, minimum)


def test_padding_is_zeros_at_the_end():
    codes = np.arange(1, 11, dtype=np.int16).reshape(5, 2)
    padded = dac.pad(codes, granularity=4, minimum=6)
    assert padded.shape == (8, 2)
    assert padded.dtype == np.int16
    assert np.array_equal(padded[:5], codes)
    assert not np.any(padded[5:])
