"""Frames and streams: whole, byte by byte, in random pieces and with a tail, good and damaged."""

from __future__ import annotations

import random

import pytest
from hypothesis import given
from hypothesis import strategies as st
from samples import in_pieces, random_frame

from protobench.wire import Codec, Dropped, EncodingError, Frame, StuffingError, load_codec, stuff, unstuff

SECOND_NS = 1_000_000_000
FRAMES = 20_000


def shown(results: list[bytes | Dropped]) -> list[tuple[str, bytes]]:
    """What came out, without the wording of details."""
    return [(item.reason, b"") if isinstance(item, Dropped) else ("", item) for item in results]


def fed(codec: Codec, pieces: list[bytes]) -> list[tuple[str, bytes]]:
    decoder = codec.stream_decoder()
    return shown([item for piece in pieces for item in decoder.feed(piece, 0)])


# ------------------------------------------------------------ stuffing


@given(st.binary(max_size=600))
def test_stuffing_comes_back_and_holds_no_delimiter(data: bytes) -> None:
    block = stuff(data)
    assert 0 not in block
    assert unstuff(block) == data


@given(st.binary(max_size=600))
def test_any_block_is_the_canonical_one_or_refused(block: bytes) -> None:
    try:
        data = unstuff(block)
    except StuffingError as error:
        assert str(error)
    else:
        assert stuff(data) == block


@pytest.mark.parametrize(
    "block", [b"", b"\0", b"\x05\x11", b"\xff" + b"\x01" * 254 + b"\x01", b"\x02\x11\x00", b"\x01\x00\x01"]
)
def test_bad_blocks_are_refused(block: bytes) -> None:
    with pytest.raises(StuffingError):
        unstuff(block)


def test_every_short_block_is_canonical_or_refused() -> None:
    """All blocks of up to two bytes, and those of the length at which a second encoding would begin."""
    blocks = [bytes([a]) for a in range(256)] + [bytes([a, b]) for a in range(256) for b in range(256)]
    blocks += [bytes([255]) + bytes([1]) * size for size in (252, 253, 254, 255, 256)]
    canonical = 0
    for block in blocks:
        try:
            data = unstuff(block)
        except StuffingError:
            continue
        canonical += 1
        assert stuff(data) == block
    # 01; 02 with any byte; 01 01; a full group alone, and one with an empty group and a zero after it
    assert canonical == 1 + 255 + 1 + 2


# ------------------------------------------------------------ frames


def test_frames_come_back_as_they_went(codec: Codec, rng: random.Random) -> None:
    for _ in range(2000):
        data = random_frame(codec, rng)
        frame = codec.frames.unpack(data)
        assert isinstance(frame, Frame)
        assert codec.frames.check_length(frame) is None or len(frame.body) > 213
        again = codec.frames.pack(
            frame.kind,
            frame.body,
            source=frame.source,
            destination=frame.destination,
            session=frame.session,
            number=frame.number,
            flags=frame.flags,
        )
        assert again == data
        assert frame == codec.frames.unpack(again)


@given(st.binary(max_size=300))
def test_any_bytes_make_a_frame_or_a_named_drop(data: bytes) -> None:
    codec = load_codec()
    result = codec.frames.unpack(data)
    if isinstance(result, Frame):
        assert codec.crc(data[:-4]) == int.from_bytes(data[-4:], "big")
    else:
        assert result.reason == ("too-short" if len(data) < 24 else "too-long" if len(data) > 253 else "crc")
        assert len(result.data) <= 254


@pytest.mark.parametrize(
    ("size", "reason"), [(0, "too-short"), (23, "too-short"), (24, "crc"), (253, "crc"), (254, "too-long")]
)
def test_lengths_at_their_bounds(codec: Codec, size: int, reason: str) -> None:
    result = codec.frames.unpack(bytes(size))
    assert isinstance(result, Dropped)
    assert result.reason == reason


def test_a_length_field_that_lies_is_found_after_the_check_sequence(codec: Codec) -> None:
    for body, told in ((b"\x80", 0), (b"\x80", 2), (bytes(213), 212), (bytes(214), 214), (bytes(229), 229)):
        data = codec.frames.pack(1, body, source=1, destination=2, session=3, number=4, body_length=told)
        frame = codec.frames.unpack(data)
        assert isinstance(frame, Frame)
        dropped = codec.frames.check_length(frame)
        assert dropped is not None
        assert dropped.reason == "length"
    with pytest.raises(EncodingError, match="flags"):
        codec.frames.pack(1, b"", source=1, destination=2, session=3, number=4, flags=256)


def test_every_flipped_bit_of_the_longest_frame_is_found(codec: Codec) -> None:
    data = codec.frames.pack(1, bytes(range(229)), source=1, destination=2, session=3, number=4)
    assert len(data) == 253
    for bit in range(8 * len(data)):
        flipped = bytearray(data)
        flipped[bit // 8] ^= 1 << bit % 8
        result = codec.frames.unpack(bytes(flipped))
        assert isinstance(result, Dropped)
        assert result.reason == "crc"


# ------------------------------------------------------------ streams


def random_stream(codec: Codec, rng: random.Random, frames: int) -> tuple[bytes, list[tuple[str, bytes]]]:
    """A stream of good frames, fill and damage, ended by a delimiter; and what must come out of it."""
    stream = bytearray()
    expected: list[tuple[str, bytes]] = []
    for _ in range(frames):
        frame = random_frame(codec, rng)
        block = stuff(frame)
        damage = rng.random()
        if damage < 0.70:
            expected.append(("", frame))
        elif damage < 0.80:
            block = rng.randbytes(rng.randint(1, 40)).replace(b"\0", b"\1")
            expected.append(_alone(block))
        elif damage < 0.85:
            block = block[: rng.randint(1, len(block))]
            expected.append(_alone(block))
        elif damage < 0.90:
            block = bytes(rng.randint(1, 255) for _ in range(rng.randint(255, 700)))
            expected.append(("too-long", b""))
        else:
            expected.append(("", frame))
            block = b"\0" * rng.randint(1, 3) + block
        stream += block + b"\0" * rng.choice([1, 1, 1, 2])
    return bytes(stream), expected


def _alone(block: bytes) -> tuple[str, bytes]:
    try:
        return "", unstuff(block)
    except StuffingError:
        return "stuffing", b""


def test_twenty_thousand_random_frames_come_out_the_same_in_any_pieces(
    codec: Codec, rng: random.Random
) -> None:
    stream, expected = random_stream(codec, rng, FRAMES)
    assert len(expected) == FRAMES
    assert fed(codec, [stream]) == expected
    for longest in (3, 64, 4096):
        assert fed(codec, in_pieces(stream, rng, longest)) == expected


def test_byte_by_byte_and_with_a_tail(codec: Codec, rng: random.Random) -> None:
    stream, expected = random_stream(codec, rng, 500)
    single = [stream[at : at + 1] for at in range(len(stream))]
    assert fed(codec, single) == expected
    frame = random_frame(codec, rng)
    tail = codec.stuff(frame)
    for size in range(len(tail)):
        assert fed(codec, [stream + tail[:size]]) == expected
        assert fed(codec, [stream + tail[:size], tail[size:]]) == [*expected, ("", frame)]


@given(st.lists(st.binary(max_size=400), max_size=12))
def test_any_bytes_in_any_pieces_come_out_the_same_and_are_held_in_bounds(pieces: list[bytes]) -> None:
    codec = load_codec()
    decoder = codec.stream_decoder()
    results: list[bytes | Dropped] = []
    for piece in pieces:
        results += decoder.feed(piece, 0)
        assert len(decoder._tail) <= 254
    joined = b"".join(pieces)
    assert shown(results) == fed(codec, [joined])
    assert shown(results) == fed(codec, [joined[at : at + 1] for at in range(len(joined))])


def test_a_bad_frame_never_costs_the_good_one_after_it(codec: Codec, rng: random.Random) -> None:
    for _ in range(500):
        bad = rng.randbytes(rng.randint(0, 600))
        good = random_frame(codec, rng)
        assert fed(codec, [bad + b"\0" + codec.stuff(good)])[-1] == ("", good)


def test_a_long_block_is_dropped_once_and_held_in_bounds(codec: Codec) -> None:
    decoder = codec.stream_decoder()
    results: list[bytes | Dropped] = []
    for _ in range(1000):
        results += decoder.feed(b"\x01" * 1000, 0)
        assert len(decoder._tail) <= 254
    assert shown(results) == [("too-long", b"")]
    assert decoder.feed(b"\0\0", 0) == []
    good = codec.frames.pack(1, b"\x80", source=1, destination=2, session=3, number=4)
    assert decoder.feed(codec.stuff(good), 0) == [good]


@pytest.mark.parametrize("gap_ms", [0, 199, 200, 999, 1000])
def test_a_gap_up_to_the_limit_is_bridged(codec: Codec, gap_ms: int) -> None:
    good = codec.frames.pack(1, b"\x80", source=1, destination=2, session=3, number=4)
    block = codec.stuff(good)
    decoder = codec.stream_decoder()
    assert decoder.feed(block[:9], 5) == []
    assert decoder.deadline_ns == 5 + SECOND_NS
    assert decoder.feed(block[9:], 5 + gap_ms * 1_000_000) == [good]
    assert decoder.deadline_ns is None


def test_a_longer_gap_discards_the_half_frame_and_not_the_next(codec: Codec) -> None:
    good = codec.frames.pack(1, b"\x80", source=1, destination=2, session=3, number=4)
    decoder = codec.stream_decoder()
    assert decoder.feed(codec.stuff(good)[:9], 5) == []
    results = decoder.feed(codec.stuff(good), 6 + SECOND_NS)
    assert shown(results) == [("half-frame", b""), ("", good)]


def test_a_half_frame_is_discarded_without_further_bytes(codec: Codec) -> None:
    decoder = codec.stream_decoder()
    decoder.feed(b"\x05\x11", 0)
    assert decoder.expire(SECOND_NS) == []
    assert shown(decoder.expire(SECOND_NS + 1)) == [("half-frame", b"")]
    assert decoder.expire(9 * SECOND_NS) == []
    assert decoder.deadline_ns is None


def test_silence_between_frames_is_no_half_frame(codec: Codec) -> None:
    decoder = codec.stream_decoder()
    good = codec.frames.pack(1, b"\x80", source=1, destination=2, session=3, number=4)
    for second in range(0, 20, 5):
        assert decoder.feed(b"\0" + codec.stuff(good), second * SECOND_NS) == [good]


def test_a_long_block_cut_by_silence_ends_there(codec: Codec) -> None:
    good = codec.frames.pack(1, b"\x80", source=1, destination=2, session=3, number=4)
    decoder = codec.stream_decoder()
    assert shown(decoder.feed(b"\x01" * 300, 0)) == [("too-long", b"")]
    assert decoder.feed(codec.stuff(good), 2 * SECOND_NS) == [good]


# ------------------------------------------------------------ parts


def test_parts_are_bare_frames_or_segments(codec: Codec, rng: random.Random) -> None:
    frames = [random_frame(codec, rng) for _ in range(50)]
    assert codec.split_part(frames[0]) == [frames[0]]
    segment = b"\0" + b"".join(codec.stuff(frame) for frame in frames)
    assert codec.split_part(segment) == frames
    assert codec.split_part(b"\0") == []
    assert codec.split_part(b"") == [b""]
    assert shown(codec.split_part(segment[:-1]))[-1] == ("half-frame", b"")
    assert codec.split_part(segment[:-1])[:-1] == frames[:-1]
    assert shown(codec.split_part(b"\0" + b"\x01" * 300)) == [("too-long", b"")]
    assert shown(codec.split_part(b"\0\x05\x11\0")) == [("stuffing", b"")]


@given(st.binary(max_size=800))
def test_any_part_makes_frames_or_named_drops(part: bytes) -> None:
    for item in load_codec().split_part(part):
        if isinstance(item, Dropped):
            assert item.reason in ("half-frame", "too-long", "stuffing")
