"""Stuffing against the published examples, both published encoders and the library."""

from __future__ import annotations

import random

import pytest
from cobs import cobs

from protobench.wire import StuffingError, load_codec, stuff, unstuff

# Source: the example table that goes with the algorithm in most descriptions of it; the last is the packet of
# S. Cheshire and M. Baker, "Consistent Overhead Byte Stuffing", IEEE/ACM Trans. on Networking 7(2), 1999.
TABLE = [
    ("", "01"),
    ("00", "01 01"),
    ("00 00", "01 01 01"),
    ("00 11 00", "01 02 11 01"),
    ("11 22 00 33", "03 11 22 02 33"),
    ("11 22 33 44", "05 11 22 33 44"),
    ("11 00 00 00", "02 11 01 01 01"),
    (bytes(range(1, 255)).hex(), "ff" + bytes(range(1, 255)).hex()),
    ("00" + bytes(range(1, 255)).hex(), "01 ff" + bytes(range(1, 255)).hex()),
    (bytes(range(1, 256)).hex(), "ff" + bytes(range(1, 255)).hex() + "02 ff"),
    (bytes(range(2, 256)).hex() + "00", "ff" + bytes(range(2, 256)).hex() + "01 01"),
    (bytes(range(3, 256)).hex() + "00 01", "fe" + bytes(range(3, 256)).hex() + "02 01"),
    ("45 00 00 2C 4C 79 00 00 40 06 4F 37", "02 45 01 04 2C 4C 79 01 05 40 06 4F 37"),
]


@pytest.mark.parametrize(("data", "block"), TABLE)
def test_published_examples(data: str, block: str) -> None:
    assert stuff(bytes.fromhex(data)) == bytes.fromhex(block)
    assert unstuff(bytes.fromhex(block)) == bytes.fromhex(data)
    assert cobs.encode(bytes.fromhex(data)) == bytes.fromhex(block)


def encode_closing(data: bytes) -> bytes:
    """What the C listing published with the paper does: after a full group it always writes one more."""
    out = bytearray()
    group = bytearray()
    for byte in data:
        if byte:
            group.append(byte)
        if byte == 0 or len(group) == 254:
            out += bytes([len(group) + 1]) + group
            group.clear()
    return bytes(out + bytes([len(group) + 1]) + group)


# Source: the C listing in the paper (seen in transcriptions) for one encoder, the cobs package for the other.
def test_both_published_encoders_agree_up_to_the_longest_frame() -> None:
    assert load_codec().frames.layout.frame_size_max == 253
    rng = random.Random(5)
    for size in range(254):
        for data in (
            bytes([1]) * size,
            bytes(size),
            rng.randbytes(size),
            rng.randbytes(size).replace(b"\0", b"\1"),
        ):
            assert encode_closing(data) == stuff(data) == cobs.encode(data)
            assert len(stuff(data)) <= 254


def test_they_differ_at_254_and_only_one_encoding_is_taken() -> None:
    data = bytes([1]) * 254
    assert encode_closing(data) == stuff(data) + b"\x01"
    assert len(encode_closing(data)) == 256
    assert cobs.decode(encode_closing(data)) == data
    with pytest.raises(StuffingError, match="canonical"):
        unstuff(encode_closing(data))


# Source: the cobs package refuses these too (its DecodeError); the empty one it takes, this contract does
# not.
@pytest.mark.parametrize("block", ["", "00", "0511", "05112233", "021100", "010001"])
def test_blocks_that_are_no_encoding(block: str) -> None:
    with pytest.raises(StuffingError):
        unstuff(bytes.fromhex(block))


# Source: the paper's bound, at most one byte more in 254.
def test_overhead_is_at_most_one_byte_in_254() -> None:
    rng = random.Random(6)
    for size in range(1, 1200, 7):
        data = rng.randbytes(size).replace(b"\0", b"\1")
        assert len(stuff(data)) - size == max(1, -(-size // 254))
