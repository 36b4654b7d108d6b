"""The check sequence against its catalogue, an RFC, an independent library and an exhaustive search."""

from __future__ import annotations

import random

import google_crc32c
import pytest

from protobench.wire import Codec, Dropped, load_codec, make_crc

POLYNOMIAL = 0x1EDC6F41


@pytest.fixture(scope="module")
def codec() -> Codec:
    return load_codec()


# Source: the public catalogue of parametrised CRC algorithms, entry CRC-32/ISCSI.
def test_catalogue_check_value(codec: Codec) -> None:
    assert codec.crc(b"123456789") == 0xE3069283
    assert codec.contract.frame.check.check_value == 0xE3069283
    assert codec.crc(b"") == 0


# Source: the same catalogue, entries CRC-32/ISO-HDLC, CRC-32/AUTOSAR, CRC-16/IBM-3740 and CRC-16/IBM-SDLC.
# They show that every parameter does what the catalogue means by it.
@pytest.mark.parametrize(
    ("width", "polynomial", "initial", "reflected", "final_xor", "check"),
    [
        (32, 0x04C11DB7, 0xFFFFFFFF, True, 0xFFFFFFFF, 0xCBF43926),
        (32, 0xF4ACFB13, 0xFFFFFFFF, True, 0xFFFFFFFF, 0x1697D06A),
        (16, 0x1021, 0xFFFF, False, 0x0000, 0x29B1),
        (16, 0x1021, 0xFFFF, True, 0xFFFF, 0x906E),
    ],
)
def test_other_entries_of_the_catalogue(
    width: int, polynomial: int, initial: int, reflected: bool, final_xor: int, check: int
) -> None:
    crc = make_crc(
        width=width, polynomial=polynomial, initial=initial, reflected=reflected, final_xor=final_xor
    )
    assert crc(b"123456789") == check


# Source: RFC 3720, appendix B.4; the last is its 48-byte SCSI read command. The RFC prints the bytes in the
# order in which they are sent there, least significant first.
@pytest.mark.parametrize(
    ("data", "sent"),
    [
        (bytes(32), "aa36918a"),
        (b"\xff" * 32, "43aba862"),
        (bytes(range(32)), "4e79dd46"),
        (bytes(range(31, -1, -1)), "5cdb3f11"),
        (
            bytes.fromhex(
                "01c00000 00000000 00000000 00000000 14000000 00000400"
                "00000014 00000018 28000000 00000000 02000000 00000000"
            ),
            "563a96d9",
        ),
    ],
)
def test_rfc_3720_vectors(codec: Codec, data: bytes, sent: str) -> None:
    assert codec.crc(data).to_bytes(4, "little").hex() == sent


# Source: the catalogue's residue, B798B438 before the final XOR, hence 48674BC7 after it.
def test_residue_exists_only_for_the_little_endian_order(codec: Codec) -> None:
    """Which this contract does not use: over its frames the same test gives a different value each time."""
    little, big = set(), set()
    for size in range(64):
        data = bytes(range(size))
        crc = codec.crc(data)
        little.add(codec.crc(data + crc.to_bytes(4, "little")))
        big.add(codec.crc(data + crc.to_bytes(4, "big")))
    assert little == {0xB798B438 ^ 0xFFFFFFFF} == {0x48674BC7}
    assert len(big) > 60


# Source: the google-crc32c package, an implementation by others.
def test_an_independent_library_agrees(codec: Codec) -> None:
    rng = random.Random(7)
    for size in [*range(260), 4096]:
        data = rng.randbytes(size)
        assert codec.crc(data) == google_crc32c.value(data)


# --- Hamming distance, from memory of the usual method. An error pattern of a cyclic code may be moved so
# that its lowest bit is bit 0. With s(i) = x^i mod G, a pattern of weight 2 is missed when s(i) = 1 for
# some i > 0, one of weight 4 when s(a) + s(b) + 1 = s(c). Odd weights are never missed when x + 1 divides
# G, which is when G has an even number of terms. The big-endian order of the check sequence only permutes
# bits, and that keeps weights.


def singles(bits: int) -> list[int]:
    found = [1]
    for _ in range(bits - 1):
        value = found[-1] << 1
        found.append(value ^ (1 << 32 | POLYNOMIAL) if value >> 32 else value)
    return found


def missed_up_to_five(data_bits: int) -> bool:
    """Whether any error of one to five bits in ``data_bits`` and their check sequence goes unseen."""
    assert (1 << 32 | POLYNOMIAL).bit_count() % 2 == 0
    values = singles(data_bits + 32)
    known = set(values)
    if len(known) < len(values):
        return True
    rest = set(values[1:])
    for number, value in enumerate(values[1:], 1):
        shifted = value ^ 1
        if not rest.isdisjoint([other ^ shifted for other in values[number + 1 :]]):
            return True
    return False


def test_hamming_distance_six_holds_at_the_longest_bare_frame(codec: Codec) -> None:
    data_bits = 8 * (codec.frames.layout.frame_size_max - codec.frames.layout.check_size)
    assert data_bits == 1992
    assert not missed_up_to_five(data_bits)


# Source: none published; found by an exhaustive search with other code. CRC-32C has distance 6 up to 5,243
# data bits, and the four bits named here are an escape for 656 bytes, the first length in whole bytes that
# has one.
def test_the_search_finds_the_escape_where_there_is_one(codec: Codec) -> None:
    assert missed_up_to_five(5244)
    data = random.Random(3).randbytes(656)
    sent = bytearray(data + codec.crc(data).to_bytes(4, "little"))
    for byte, bit in ((0, 4), (96, 3), (316, 0), (659, 7)):
        sent[byte] ^= 1 << bit
    assert codec.crc(bytes(sent[:-4])).to_bytes(4, "little") == sent[-4:]


def test_random_errors_of_up_to_five_bits_are_all_seen(codec: Codec) -> None:
    rng = random.Random(11)
    data = codec.frames.pack(1, rng.randbytes(229), source=1, destination=2, session=3, number=4)
    for _ in range(20_000):
        damaged = bytearray(data)
        for bit in rng.sample(range(8 * len(data)), rng.randint(1, 5)):
            damaged[bit // 8] ^= 1 << bit % 8
        assert isinstance(codec.frames.unpack(bytes(damaged)), Dropped)
