"""Explanations of frames, dropped and refused ones too."""

from __future__ import annotations

import random

from hypothesis import given
from hypothesis import strategies as st
from samples import odd_body, random_message

from protobench.wire import BodyError, Codec, FieldError, explain_frame, load_codec


def test_each_field_has_its_name_value_and_unit(codec: Codec) -> None:
    message = codec.new("move", epoch=7, lease=3, motion=1, magnitude=-45000)
    explained = explain_frame(codec, message.to_frame(0x11, 2, 3, 4))
    assert (explained.kind, explained.dropped, explained.problems) == ("move", None, ())
    header = {line.name: line.value for line in explained.header}
    assert header["kind"] == "move (0x27)"
    assert header["source"] == "0x00000011"
    body = {line.name: (line.place, line.value, line.unit) for line in explained.body}
    assert body["motion"] == ("key 2", "pivot (1)", "")
    assert body["magnitude"] == ("key 3", "-45000", "motion unit")


def test_faults_stand_beside_their_fields(codec: Codec) -> None:
    body = codec.pack_body({0: 1, 2: 9, 70: [1], 121: {1: True}})
    data = codec.frames.pack(codec.kind("move").code, body, source=1, destination=2, session=3, number=4)
    explained = explain_frame(codec, data)
    assert [problem.rule for problem in explained.problems] == ["not-understood", "missing", "range"]
    lines = {line.place: line for line in explained.body}
    assert "no such value" in lines["key 2"].value
    assert "missing" in lines["key 1"].problem
    assert lines["key 121"].name == "unknown, ignored"
    assert lines["key 121"].value == "{1: true}"


def test_a_dropped_frame_is_explained_as_far_as_it_goes(codec: Codec) -> None:
    data = codec.new("status").to_frame(1, 2, 3, 4)
    broken = explain_frame(codec, data[:-1] + bytes([data[-1] ^ 1]))
    assert broken.dropped is not None
    assert broken.dropped.reason == "crc"
    assert len(broken.header) == 8
    short = explain_frame(codec, data[:9])
    assert short.dropped is not None
    assert short.dropped.reason == "too-short"
    assert len(short.header) == 5


def test_every_kind_can_be_explained(codec: Codec, rng: random.Random) -> None:
    for kind in codec.kinds.values():
        for _ in range(20):
            explained = explain_frame(codec, random_message(kind, rng).to_frame(1, 2, 3, 4))
            assert explained.kind == kind.name
            assert not explained.problems
        for _ in range(200):
            data = codec.frames.pack(
                kind.code, odd_body(kind, rng), source=1, destination=2, session=3, number=4
            )
            assert all(isinstance(e, BodyError | FieldError) for e in explain_frame(codec, data).problems)


@given(st.binary(max_size=300))
def test_any_bytes_are_explained(data: bytes) -> None:
    codec = load_codec()
    explained = explain_frame(codec, data)
    assert explained.dropped is None or explained.dropped.reason
    assert explained.dropped is not None or len(explained.header) == 8
