"""Messages of every kind: there and back, and what is said of those that are wrong."""

from __future__ import annotations

import enum
import random
import re
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st
from samples import good_value, odd_body, random_message

from protobench.wire import BodyError, Codec, EncodingError, FieldError, FieldRule, MessageKind, load_codec
from protobench.wire.examine import examine
from protobench.wire.patterns import kind_pattern
from protobench.wire.specs import FieldType, Presence

KINDS = sorted(load_codec().kinds)


@pytest.fixture(params=KINDS)
def kind(request: pytest.FixtureRequest, codec: Codec) -> MessageKind:
    return codec.kind(request.param)


def test_messages_come_back_as_they_went(kind: MessageKind, rng: random.Random) -> None:
    for _ in range(200):
        message = random_message(kind, rng)
        body = message.to_body()
        assert kind.decode(body) == message
        assert kind.examine(body).message == message
        assert kind.decode(body).to_body() == body


def test_bodies_of_every_kind_fit_in_a_frame(kind: MessageKind, codec: Codec) -> None:
    """Encoding does not look at the size of a body; this does, once, for the longest that each kind has."""
    longest = {}
    for spec in kind.spec.fields:
        rng = random.Random(0)
        candidates = [good_value(spec, rng) for _ in range(300)]
        if spec.type in (FieldType.LIST, FieldType.RECORDS):
            candidates = [value for value in candidates if len(value) == spec.size_max]
        longest[spec.key] = max(candidates, key=lambda value: len(_packed(codec, value)))
    assert len(codec.pack_body(longest)) <= codec.frames.layout.body_size_max


def _packed(codec: Codec, value: Any) -> bytes:
    return codec.pack_body({0: value})


def test_the_straight_line_functions_agree_with_the_careful_way(
    kind: MessageKind, rng: random.Random
) -> None:
    """The expression matches exactly the bodies without fault and without unknown keys."""
    match = re.compile(kind_pattern(kind.spec), re.DOTALL).fullmatch
    limits = load_codec().body_limits
    good = 0
    for _ in range(1500):
        body = odd_body(kind, rng)
        many = rng.random() < 0.3
        try:
            examined = kind.examine(body, many)
        except BodyError as error:
            with pytest.raises(BodyError, match=re.escape(str(error))):
                kind.decode(body, many)
            continue
        if examined.problems:
            with pytest.raises(FieldError, match=re.escape(str(examined.problems[0]))):
                kind.decode(body, many)
            continue
        good += 1
        assert kind.decode(body, many) == examined.message
        unexamined = many and any(spec.presence is Presence.UNICAST for spec in kind.spec.fields)
        if not examined.ignored and not unexamined:
            assert match(body), body.hex()
    assert good > 20
    assert not match(b"")
    assert limits.size_max == 213


def test_the_expression_matches_nothing_that_has_a_fault(kind: MessageKind, rng: random.Random) -> None:
    """What it leaves to the unpacker is the number of pairs alone."""
    match = re.compile(kind_pattern(kind.spec), re.DOTALL).fullmatch
    for _ in range(1500):
        body = odd_body(kind, rng)
        if not match(body):
            continue
        try:
            values = load_codec().unpack_body(body)
        except BodyError as error:
            assert error.rule in ("truncated", "trailing"), error
            continue
        absent_unicast = [
            spec.key
            for spec in kind.spec.fields
            if spec.presence is Presence.UNICAST and spec.key not in values
        ]
        findings = examine(kind.spec, values, many=False)
        assert [problem.key for problem in findings.problems] == absent_unicast
        assert not findings.ignored


@given(st.sampled_from(KINDS), st.binary(max_size=230), st.booleans())
def test_any_bytes_make_a_message_or_a_named_error(name: str, body: bytes, many: bool) -> None:
    kind = load_codec().kind(name)
    try:
        message = kind.decode(body, many)
    except (BodyError, FieldError) as error:
        assert error.rule
    else:
        assert message == kind.examine(body, many).message


def test_names_and_codes_lead_to_the_same_kind(codec: Codec) -> None:
    assert len(codec.kinds_by_code) == len(codec.kinds)
    for code, kind in codec.kinds_by_code.items():
        assert codec.kind(kind.name) is kind
        assert kind.code == code
        assert kind.message_class.KIND is kind


MOVE = {0: 7, 1: 3, 2: 1, 3: -45000}


@pytest.mark.parametrize(
    ("changes", "rule", "key", "refusal"),
    [
        ({0: None}, FieldRule.MISSING, 0, "malformed"),
        ({1: True}, FieldRule.TYPE, 1, "malformed"),
        ({1: "3"}, FieldRule.TYPE, 1, "malformed"),
        ({65: 1}, FieldRule.TYPE, 65, "malformed"),
        ({1: -1}, FieldRule.RANGE, 1, "out-of-range"),
        ({1: 1 << 32}, FieldRule.RANGE, 1, "out-of-range"),
        ({2: 99}, FieldRule.RANGE, 2, "out-of-range"),
        ({4: 16}, FieldRule.RANGE, 4, "out-of-range"),
        ({66: 1}, FieldRule.NOT_UNDERSTOOD, 66, "not-understood"),
        ({119: 1}, FieldRule.NOT_UNDERSTOOD, 119, "not-understood"),
        ({119: 1, 118: 1, 0: None, 2: 99}, FieldRule.NOT_UNDERSTOOD, 118, "not-understood"),
        ({1: None, 0: "x", 2: 99}, FieldRule.TYPE, 0, "malformed"),
        ({0: 1 << 40, 2: 99}, FieldRule.RANGE, 0, "out-of-range"),
    ],
)
def test_the_first_fault_in_the_order_of_judging_is_told(
    codec: Codec, changes: dict[int, Any], rule: FieldRule, key: int, refusal: str
) -> None:
    values = {k: v for k, v in (MOVE | changes).items() if v is not None}
    with pytest.raises(FieldError) as caught:
        codec.kind("move").decode(codec.pack_body(values))
    error = caught.value
    assert (error.rule, error.key, error.rule.refusal) == (rule, key, refusal)
    assert error.kind == "move"
    assert error.value == values.get(key)
    assert str(key) in str(error)


def test_unknown_keys_below_the_critical_ones_and_private_ones_are_ignored(codec: Codec) -> None:
    kind = codec.kind("move")
    body = codec.pack_body(MOVE | {63: [1], 120: 1, 127: {1: b"x"}})
    examined = kind.examine(body)
    assert not examined.problems
    assert examined.ignored == {63: (1,), 120: 1, 127: {1: b"x"}}
    assert kind.decode(body) == kind.decode(codec.pack_body(MOVE))


def test_a_value_out_of_range_is_kept_for_those_who_judge_the_fence_first(codec: Codec) -> None:
    examined = codec.kind("move").examine(codec.pack_body(MOVE | {2: 99}))
    assert (examined.message.epoch, examined.message.lease, examined.message.motion) == (7, 3, 99)
    assert [problem.rule for problem in examined.problems] == [FieldRule.RANGE]


def test_a_stated_default_and_its_absence_mean_the_same(codec: Codec) -> None:
    kind = codec.kind("move")
    stated = kind.decode(codec.pack_body({0: 7, 1: 3, 2: 1, 3: 0, 4: 0, 65: False}))
    absent = kind.decode(codec.pack_body({0: 7, 1: 3, 2: 1}))
    assert stated == absent
    assert stated.to_body() == codec.pack_body({0: 7, 1: 3, 2: 1})
    assert absent.start_at is None


def test_unicast_fields_are_not_examined_in_a_frame_to_many(codec: Codec) -> None:
    kind = codec.kind("renew-lease")
    for fence in ({}, {0: "x"}, {0: 1 << 40, 1: 5}, {0: 1, 1: 2}):
        message = kind.decode(codec.pack_body({**fence, 2: 1000}), True)
        assert (message.epoch, message.lease, message.duration) == (None, None, 1000)
    with pytest.raises(FieldError, match="missing"):
        kind.decode(codec.pack_body({2: 1000}))
    assert kind.decode(codec.pack_body({0: 1, 1: 2, 2: 1000})).epoch == 1
    assert kind.new(duration=1000).to_body() == codec.pack_body({2: 1000})


@pytest.mark.parametrize(
    ("fields", "field"),
    [
        ({"epoch": -1}, "epoch"),
        ({"epoch": None}, "epoch"),
        ({"epoch": 1.0}, "epoch"),
        ({"lease": True}, "lease"),
        ({"motion": "pivot"}, "motion"),
        ({"motion": 7}, "motion"),
        ({"magnitude": 1 << 31}, "magnitude"),
        ({"start_at": 1 << 64}, "start_at"),
        ({"allow_last_bond": 1}, "allow_last_bond"),
        ({"epoch": object()}, "epoch"),
    ],
)
def test_what_cannot_be_sent_is_named(codec: Codec, fields: dict[str, Any], field: str) -> None:
    message = codec.new("move", **({"epoch": 7, "lease": 3, "motion": 1} | fields))
    with pytest.raises(EncodingError) as caught:
        message.to_body()
    assert (caught.value.kind, caught.value.field) == ("move", field)
    with pytest.raises(EncodingError):
        message.to_frame(1, 2, 3, 4)


def test_a_header_value_that_does_not_fit_is_named(codec: Codec) -> None:
    message = codec.new("status")
    with pytest.raises(EncodingError) as caught:
        message.to_frame(1, 1 << 32, 3, 4)
    assert (caught.value.field, caught.value.value) == ("destination", 1 << 32)


def test_a_field_that_a_kind_does_not_have_is_a_type_error(codec: Codec) -> None:
    with pytest.raises(TypeError, match="speed"):
        codec.new("move", epoch=1, lease=1, motion=1, speed=1)
    with pytest.raises(TypeError, match="motion"):
        codec.new("move", epoch=1, lease=1)
    with pytest.raises(KeyError):
        codec.new("leap")


def test_members_of_an_enum_and_lists_are_taken(codec: Codec) -> None:
    class Motion(enum.IntEnum):
        PIVOT = 1

    assert codec.new("move", epoch=1, lease=1, motion=Motion.PIVOT).to_body() == codec.pack_body(
        {0: 1, 1: 1, 2: 1}
    )
    message = codec.new("clear-faults", epoch=1, lease=1, occurrences=[3, 4])
    assert message.occurrences == (3, 4)


def test_rows_are_records(codec: Codec) -> None:
    entry = [1, 0, 5, 2, 3, 4, -7, 1, 0, 1]
    message = codec.new("fault-page", total=1, lost=0, entries=[entry])
    entry[2] = 2
    with pytest.raises(EncodingError):
        codec.new("fault-page", total=1, lost=0, entries=[entry[:-1]]).to_body()
    names = [field.name for field in codec.kind("fault-page").spec.fields[2].record.fields]  # type: ignore[union-attr]
    assert names.index("class") == 2
    assert message.entries[0].class_ == 5
    with pytest.raises(EncodingError):
        message.to_body()  # occurrence 1, code 0: codes begin with 1


def test_a_message_shows_its_fields_and_knows_its_like(codec: Codec) -> None:
    message = codec.new("time-exchange", t1=5)
    assert repr(message) == "TimeExchange(t1=5)"
    assert message == codec.new("time-exchange", t1=5)
    assert message != codec.new("time-exchange", t1=6)
    assert codec.new("status") != codec.new("describe")
