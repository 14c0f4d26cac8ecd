"""Codes as bytes: IEEE 488.2 definite-length arbitrary blocks of 16-bit words.

A block is ``#``, one digit d from 1 to 9, d digits that count the bytes, then exactly that many
bytes. The count alone ends it: the data may hold any byte, also a newline. The indefinite form
``#0`` needs an end signal beside the bytes, which a socket does not have; it is never sent and is
refused when it comes.
"""

from __future__ import annotations

import numpy as np

from shaper.errors import ShaperError

MAX_BYTES = 999_999_999  # nine digits of count
BYTE_ORDERS = {"big": ">i2", "little": "<i2"}
LAYOUTS = {"apart": ("i", "q"), "interleaved": ("iq",)}  # the blocks that each layout makes
WORD_BITS = 16


class BlockError(ShaperError):
    """Bytes that are not exactly one definite-length block."""


def header(count: int) -> bytes:
    """``#dN``: what stands before ``count`` bytes of data.

    Raises:
        BlockError: if the count does not fit nine digits.
    Source:
        IEEE 488.2, definite length arbitrary block response data (from memory).
    """
    if not 0 <= count <= MAX_BYTES:
        raise BlockError(f"block: expected 0 to {MAX_BYTES} bytes, got {count}")
    digits = b"%d" % count
    return b"#%d" % len(digits) + digits


def encode(data: bytes | memoryview) -> bytes:
    """The data as one block, header first."""
    return header(len(data)) + bytes(data)


def decode(block: bytes | memoryview) -> memoryview:
    """The data of exactly one block; leading zeros in the count are legal.

    Returns:
        A view, without a copy.
    Raises:
        BlockError: for another form, a short count, or bytes after the end.
    """
    view = memoryview(block)
    digits = count_digits(bytes(view[:2]))
    count = byte_count(bytes(view[2 : 2 + digits]), digits)
    data = view[2 + digits :]
    if len(data) != count:
        raise BlockError(f"block: expected {count} bytes as counted, got {len(data)}")
    return data


def count_digits(start: bytes) -> int:
    """How many digits of count follow the first two bytes of a block."""
    if len(start) != 2 or start[:1] != b"#":
        raise BlockError(f"block: expected # and a digit, got {start!r}")
    if start == b"#0":
        raise BlockError("block: expected a definite length, got the indefinite form #0")
    if not start[1:].isdigit():
        raise BlockError(f"block: expected # and a digit from 1 to 9, got {start!r}")
    return int(start[1:])


def byte_count(text: bytes, digits: int) -> int:
    """The count of data bytes from its digits."""
    if len(text) != digits or not text.isdigit():
        raise BlockError(f"block: expected {digits} digits of byte count, got {text!r}")
    return int(text)


def to_bytes(words: np.ndarray, byte_order: str) -> bytes:
    """[word] integers as two bytes each.

    Anything that is not a flat array of integers within 16 bits is refused: a silent wrap,
    truncation or dropped imaginary part would be played by the instrument.

    Raises:
        ValueError: for another kind, shape or range.
    """
    words = np.asarray(words)
    if words.ndim != 1 or words.dtype.kind not in "iu":
        raise ValueError(
            f"words: expected a flat array of integers, got {words.dtype} of shape {words.shape}"
        )
    if words.dtype.kind != "i" or words.dtype.itemsize > 2:
        if words.size and not -(2**15) <= int(words.min()) <= int(words.max()) < 2**15:
            raise ValueError(f"words: expected 16-bit integers, got {words.min()} to {words.max()}")
    return words.astype(BYTE_ORDERS[byte_order]).tobytes()


def from_bytes(data: bytes | bytearray | memoryview, byte_order: str) -> np.ndarray:
    """[word] int16 from two bytes each.

    Raises:
        BlockError: if a byte is left over.
    """
    if len(data) % 2:
        raise BlockError(f"block: expected a whole number of 16-bit words, got {len(data)} bytes")
    return np.frombuffer(data, BYTE_ORDERS[byte_order]).astype(np.int16)


def split(codes: np.ndarray, layout: str) -> dict[str, np.ndarray]:
    """The blocks' words by component: ``i`` and ``q``, or both in turn as ``iq``.

    Args:
        codes: [sample, 2] int16.
        layout: "apart" or "interleaved" (I0, Q0, I1, Q1, ...).
    """
    codes = np.asarray(codes, dtype=np.int16)
    if layout == "interleaved":
        return {"iq": codes.reshape(-1)}
    return {"i": codes[:, 0].copy(), "q": codes[:, 1].copy()}


def join(words: dict[str, np.ndarray]) -> np.ndarray:
    """[sample, 2] int16: the inverse of ``split``."""
    if "iq" in words:
        return words["iq"].reshape(-1, 2)
    return np.stack([words["i"], words["q"]], axis=1)


def place(codes: np.ndarray, bits: int, *, justify: str, gate: np.ndarray, bit: int | None):
    """Codes where the instrument's word has them, with the marker in a free low bit of I.

    Args:
        codes: [sample, 2] int16 of ``bits`` bits, sign included.
        justify: "right" (plain integers) or "left" (shifted to the most significant bits).
        gate: [sample] bool, where the marker is high.
        bit: which bit of the I word carries it; None for no marker.
    Returns:
        [sample, 2] int16.
    Raises:
        ValueError: if the marker bit is taken by the code, or a code does not fit the bits.
    """
    codes = np.asarray(codes, dtype=np.int16)
    free = WORD_BITS - bits if justify == "left" else 0
    if codes.size and int(np.max(np.abs(codes.astype(np.int32)))) >= 2 ** (bits - 1):
        raise ValueError(f"codes: expected {bits} bits, got {np.max(np.abs(codes))}")
    words = codes << free
    if bit is not None:
        if not 0 <= bit < free:
            raise ValueError(f"marker bit: expected one of the {free} free low bits, got {bit}")
        words[:, 0] |= np.asarray(gate, dtype=np.int16) << bit
    return words


def unplace(
    words: np.ndarray, bits: int, justify: str, bit: int | None
) -> tuple[np.ndarray, np.ndarray]:
    """Codes and gate from the instrument's words: the inverse of ``place``.

    Returns:
        [sample, 2] int16 and [sample] bool.
    """
    words = np.asarray(words, dtype=np.int16)
    free = WORD_BITS - bits if justify == "left" else 0
    gate = np.zeros(len(words), bool) if bit is None else (words[:, 0] >> bit & 1).astype(bool)
    return words >> free, gate
