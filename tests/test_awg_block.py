"""Blocks against the bytes of the standard's description, struct and hypothesis."""

import struct

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from shaper.awg import block
from shaper.awg.block import BlockError

INT16 = hnp.arrays(np.int16, st.integers(0, 300), elements=st.integers(-(2**15), 2**15 - 1))
PAIRS = st.integers(0, 150).flatmap(
    lambda n: hnp.arrays(np.int16, (n, 2), elements=st.integers(-(2**15), 2**15 - 1))
)


def test_bytes_written_out_by_hand():
    assert block.encode(block.to_bytes(np.array([1, -2]), "big")) == b"#14\x00\x01\xff\xfe"
    assert block.encode(block.to_bytes(np.array([1, -2]), "little")) == b"#14\x01\x00\xfe\xff"
    assert block.encode(b"") == b"#10"
    assert block.header(999_999_999) == b"#9999999999"
    assert bytes(block.decode(b"#3004\x00\x0a#;")) == b"\x00\x0a#;"  # leading zeros are legal


@given(INT16, st.sampled_from(["big", "little"]))
def test_round_trip(words, order):
    message = block.encode(block.to_bytes(words, order))
    back = block.from_bytes(block.decode(message), order)
    np.testing.assert_array_equal(back, words)
    sign = {"big": ">", "little": "<"}[order]
    assert struct.unpack(f"{sign}{len(words)}h", block.decode(message)) == tuple(words.tolist())


@given(PAIRS, st.sampled_from(list(block.LAYOUTS)))
def test_layout_round_trip(codes, layout):
    words = block.split(codes, layout)
    assert tuple(words) == block.LAYOUTS[layout]
    np.testing.assert_array_equal(block.join(words), codes)


def test_interleaved_begins_with_i():
    words = block.split(np.array([[1, 2], [3, 4]], np.int16), "interleaved")["iq"]
    assert words.tolist() == [1, 2, 3, 4]


@pytest.mark.parametrize(
    "data",
    [
        b"",
        b"#",
        b"14ab",
        b"#0ab\n",  # indefinite
        b"#A0000000004abcd",  # ten digits in hexadecimal: not in the standard
        b"#1",
        b"#2 4abcd",
        b"#2+4abcd",
        b"#31_0" + bytes(10),
        b"#14abc",  # short
        b"#14abcde",  # one byte too many
        b"#14abcd\n",  # the terminator belongs to the message, not to the block
        "#١4abcd".encode(),
    ],
)
def test_strict(data):
    with pytest.raises(BlockError):
        block.decode(data)


def test_too_long_for_nine_digits():
    with pytest.raises(BlockError, match="999999999"):
        block.header(10**9)


@pytest.mark.parametrize(
    "words",
    [
        np.array([40000], np.int32),  # would wrap
        np.array([40000], np.uint16),
        np.array([1.5]),  # would be truncated
        np.array([1 + 2j]),  # would lose its imaginary part
        np.array([[1, 2]], np.int16),  # would get a wrong byte count
        np.array([True]),
        np.array(["1"]),
    ],
)
def test_silent_data_errors_are_refused(words):
    with pytest.raises(ValueError, match="words"):
        block.to_bytes(words, "big")


def test_odd_byte_is_refused():
    with pytest.raises(BlockError, match="whole number"):
        block.from_bytes(b"abc", "big")


@given(st.integers(4, 16), st.data())
def test_left_justified_with_marker(bits, data):
    top = 2 ** (bits - 1) - 1
    codes = data.draw(hnp.arrays(np.int16, (9, 2), elements=st.integers(-top, top)))
    gate = data.draw(hnp.arrays(bool, 9))
    free = 16 - bits
    bit = data.draw(st.integers(0, free - 1)) if free else None
    words = block.place(codes, bits, justify="left", gate=gate, bit=bit).astype(int)
    np.testing.assert_array_equal(words >> free, codes)  # arithmetic shift: sign kept
    low = words[:, 0] & (2**free - 1)
    np.testing.assert_array_equal(low, gate * (2**bit if bit is not None else 0))
    assert not np.any(words[:, 1] & (2**free - 1))


@pytest.mark.parametrize("justify, bit", [("left", 2), ("left", -1), ("right", 0)])
def test_marker_must_have_a_free_bit(justify, bit):
    with pytest.raises(ValueError, match="marker bit"):
        block.place(np.zeros((4, 2), np.int16), 14, justify=justify, gate=np.ones(4), bit=bit)


def test_code_beyond_its_bits_is_refused():
    with pytest.raises(ValueError, match="14 bits"):
        block.place(np.array([[8192, 0]]), 14, justify="left", gate=np.zeros(1), bit=None)
