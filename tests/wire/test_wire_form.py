"""The form of a body: every rule, where it breaks, and agreement with an independent definition."""

from __future__ import annotations

import time
from typing import Any

import msgpack
import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from protobench.wire import BodyError, BodyLimits, EncodingError, Rule, check_form, pack_body, unpack_body

LIMITS = BodyLimits(
    size_max=213, depth_max=3, pairs_max=32, items_max=16, string_size_max=32, binary_size_max=32, key_max=127
)


def in_map(value: str) -> bytes:
    return bytes.fromhex("8100" + value)


# what breaks, where, the body
REFUSED = [
    (Rule.EMPTY, 0, ""),
    (Rule.SIZE, 213, "80" + "00" * 213),
    (Rule.NOT_A_MAP, 0, "00"),
    (Rule.NOT_A_MAP, 0, "90"),
    (Rule.NOT_A_MAP, 0, "c1"),
    (Rule.NOT_A_MAP, 0, "a0"),
    (Rule.TRUNCATED, 1, "81"),
    (Rule.TRUNCATED, 2, "8100"),
    (Rule.TRUNCATED, 3, "8100cc"),
    (Rule.TRUNCATED, 6, "8100ce010203"),
    (Rule.TRUNCATED, 4, "8100a261"),
    (Rule.TRUNCATED, 4, "8100c403"),
    (Rule.TRUNCATED, 1, "de"),
    (Rule.TRUNCATED, 2, "de00"),
    (Rule.TRAILING, 1, "80c0"),
    (Rule.TRAILING, 3, "81000180"),
    (Rule.KEY_TYPE, 1, "81a10000"),
    (Rule.KEY_TYPE, 1, "81c300"),
    (Rule.KEY_TYPE, 1, "81c000"),
    (Rule.KEY_TYPE, 1, "81ca3f80000000"),
    (Rule.KEY_TYPE, 1, "818000"),
    (Rule.KEY_RANGE, 1, "81cc8000"),
    (Rule.KEY_RANGE, 1, "81ff00"),
    (Rule.KEY_RANGE, 1, "81d0df00"),
    (Rule.NOT_SHORTEST, 1, "81cc0100"),
    (Rule.NOT_SHORTEST, 1, "81d00100"),
    (Rule.KEY_ORDER, 3, "8201000000"),
    (Rule.KEY_TWICE, 3, "8201000100"),
    (Rule.KEY_ORDER, 5, "8100820100" + "0000"),
    (Rule.KEY_TWICE, 5, "8100820100" + "0100"),
    (Rule.FORBIDDEN_TYPE, 2, "8100c0"),
    (Rule.FORBIDDEN_TYPE, 2, "8100c1"),
    (Rule.FORBIDDEN_TYPE, 2, "8100ca3fc00000"),
    (Rule.FORBIDDEN_TYPE, 2, "8100cb3ff8000000000000"),
    (Rule.FORBIDDEN_TYPE, 2, "8100d40100"),
    (Rule.FORBIDDEN_TYPE, 2, "8100d6ff00000000"),
    (Rule.FORBIDDEN_TYPE, 2, "8100c7000100"),
    (Rule.FORBIDDEN_TYPE, 3, "810091c0"),
    (Rule.NOT_SHORTEST, 2, "8100cc7f"),
    (Rule.NOT_SHORTEST, 2, "8100cd00ff"),
    (Rule.NOT_SHORTEST, 2, "8100ce0000ffff"),
    (Rule.NOT_SHORTEST, 2, "8100cf00000000ffffffff"),
    (Rule.NOT_SHORTEST, 2, "8100d0e0"),
    (Rule.NOT_SHORTEST, 2, "8100d07f"),
    (Rule.NOT_SHORTEST, 2, "8100d17fff"),  # as long as its unsigned form
    (Rule.NOT_SHORTEST, 2, "8100d1ff80"),
    (Rule.NOT_SHORTEST, 2, "8100d2ffff8000"),
    (Rule.NOT_SHORTEST, 2, "8100d37fffffffffffffff"),
    (Rule.NOT_SHORTEST, 2, "8100d3ffffffff80000000"),
    (Rule.NOT_SHORTEST, 2, "8100d90161"),
    (Rule.NOT_SHORTEST, 2, "8100da000161"),
    (Rule.NOT_SHORTEST, 2, "8100db0000000161"),
    (Rule.NOT_SHORTEST, 2, "8100c5000161"),
    (Rule.NOT_SHORTEST, 2, "8100c60000000161"),
    (Rule.NOT_SHORTEST, 2, "8100dc000101"),
    (Rule.NOT_SHORTEST, 2, "8100dd0000000101"),
    (Rule.NOT_SHORTEST, 0, "de00010000"),
    (Rule.NOT_SHORTEST, 0, "df000000010000"),
    (Rule.NOT_ASCII, 3, "8100a11f"),
    (Rule.NOT_ASCII, 3, "8100a17f"),
    (Rule.NOT_ASCII, 4, "8100a3" + "61c3a9"),
    (Rule.STRING_SIZE, 2, "8100d921" + "61" * 33),
    (Rule.BINARY_SIZE, 2, "8100c421" + "00" * 33),
    (Rule.ITEMS, 2, "8100dc0011" + "00" * 17),
    (Rule.PAIRS, 0, "de0021" + "".join(f"{key:02x}00" for key in range(33))),
    (Rule.DEPTH, 4, "8100919190"),
    (Rule.DEPTH, 5, "810091810080"),
]


@pytest.mark.parametrize(("rule", "offset", "body"), REFUSED, ids=lambda value: str(value)[:24])
def test_each_rule_is_named_with_its_place(rule: Rule, offset: int, body: str) -> None:
    with pytest.raises(BodyError) as caught:
        check_form(bytes.fromhex(body), LIMITS)
    assert (caught.value.rule, caught.value.offset) == (rule, offset), caught.value


def test_every_rule_has_a_refused_body() -> None:
    assert {rule for rule, _, _ in REFUSED} == set(Rule)


@pytest.mark.parametrize(
    ("body", "values"),
    [
        ("80", {}),
        ("8100cc80", {0: 128}),
        ("8100ccff", {0: 255}),
        ("8100cd0100", {0: 256}),
        ("8100ce00010000", {0: 65536}),
        ("8100cf0000000100000000", {0: 1 << 32}),
        ("8100cfffffffffffffffff", {0: (1 << 64) - 1}),
        ("8100e0", {0: -32}),
        ("8100d0df", {0: -33}),
        ("8100d1ff7f", {0: -129}),
        ("8100d2ffff7fff", {0: -32769}),
        ("8100d3ffffffff7fffffff", {0: -(1 << 31) - 1}),
        ("8100d38000000000000000", {0: -(1 << 63)}),
        ("82007e7fc3", {0: 126, 127: True}),
        ("8100d920" + "7e" * 32, {0: "~" * 32}),
        ("8100bf" + "20" * 31, {0: " " * 31}),
        ("8100c420" + "00" * 32, {0: bytes(32)}),
        ("8100dc0010" + "00" * 16, {0: (0,) * 16}),
        ("81009181007f", {0: ({0: 127},)}),
        ("8100919100", {0: ((0,),)}),
    ],
)
def test_bounds_are_kept_to_the_last(body: str, values: dict[int, Any]) -> None:
    assert unpack_body(bytes.fromhex(body), LIMITS) == values
    assert pack_body(values, LIMITS) == bytes.fromhex(body)


def test_32_pairs_are_taken() -> None:
    body = pack_body(dict.fromkeys(range(32), 0), LIMITS)
    assert body[:3] == bytes.fromhex("de0020")
    assert unpack_body(body, LIMITS) == dict.fromkeys(range(32), 0)


@pytest.mark.parametrize(
    "claim",
    ["dfffffffff", "8100ddffffffff", "8100dbffffffff", "8100c6ffffffff", "8100c9ffffffff01", "81" * 213],
)
def test_a_header_that_claims_much_costs_nothing(claim: str) -> None:
    body = bytes.fromhex(claim)
    begin = time.perf_counter()
    for _ in range(1000):
        with pytest.raises(BodyError):
            unpack_body(body, LIMITS)
    assert time.perf_counter() - begin < 1.0  # a thousand; claiming 2^32 items once would take longer


values = st.recursive(
    st.booleans()
    | st.integers(-(1 << 63), (1 << 64) - 1)
    | st.binary(max_size=33)
    | st.text(st.characters(min_codepoint=0x1F, max_codepoint=0x80), max_size=33)
    | st.none()
    | st.floats(),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.integers(-1, 128), inner, max_size=4),
    max_leaves=12,
)


def is_canonical(body: bytes) -> bool:
    """The definition once more, by other means: unpack, look at the values, pack sorted, compare."""
    if len(body) > LIMITS.size_max:
        return False
    pairs: list[list[Any]] = []

    def hook(found: list[tuple[Any, Any]]) -> dict[Any, Any]:
        pairs.append([key for key, _ in found])
        return dict(found)

    try:
        value = msgpack.unpackb(body, object_pairs_hook=hook, strict_map_key=False)
        packed = msgpack.packb(value)
    except (ValueError, TypeError, OverflowError):
        return False
    if not isinstance(value, dict) or packed != body:
        return False
    ordered = all(all(type(key) is int for key in keys) and sorted(set(keys)) == keys for keys in pairs)
    return ordered and _allowed(value, 1)


def _allowed(value: Any, depth: int) -> bool:
    if type(value) in (bool, int):
        return True
    if type(value) is bytes:
        return len(value) <= 32
    if type(value) is str:
        return len(value) <= 32 and all(" " <= character <= "~" for character in value)
    if depth > 3:
        return False
    if type(value) is list:
        return len(value) <= 16 and all(_allowed(item, depth + 1) for item in value)
    if type(value) is not dict or len(value) > 32 or any(not 0 <= key <= 127 for key in value):
        return False
    return all(_allowed(item, depth + 1) for item in value.values())


def accepts(body: bytes) -> bool:
    try:
        check_form(body, LIMITS)
    except BodyError as error:
        assert 0 <= error.offset <= len(body)
        return False
    return True


@given(st.binary(max_size=220))
@example(bytes.fromhex("81c301"))
def test_any_bytes_are_judged_as_the_other_definition_does(body: bytes) -> None:
    assert accepts(body) == is_canonical(body)


@given(st.dictionaries(st.integers(0, 130), values, max_size=5), st.data())
def test_packed_maps_and_damaged_ones_are_judged_as_the_other_definition_does(
    value: dict[int, Any], data: st.DataObject
) -> None:
    body = msgpack.packb(value)
    assert accepts(body) == is_canonical(body)
    place = data.draw(st.integers(0, len(body) - 1))
    damaged = body[:place] + bytes([data.draw(st.integers(0, 255))]) + body[place + 1 :]
    assert accepts(damaged) == is_canonical(damaged)


@given(st.dictionaries(st.integers(-1, 128), values, max_size=5))
def test_packing_gives_a_canonical_body_or_says_why_not(value: dict[int, Any]) -> None:
    try:
        body = pack_body(value, LIMITS)
    except EncodingError:
        return
    assert is_canonical(body)
    assert unpack_body(body, LIMITS) == _as_unpacked(value)


def _as_unpacked(value: Any) -> Any:
    if isinstance(value, list):
        return tuple(_as_unpacked(item) for item in value)
    if isinstance(value, dict):
        return {key: _as_unpacked(item) for key, item in value.items()}
    return value


@pytest.mark.parametrize(
    "value", [{0: None}, {0: 1.5}, {0: 1 << 64}, {0: object()}, {"a": 1}, {0: [[[]]]}, {128: 0}]
)
def test_what_has_no_canonical_body_is_the_callers_fault(value: Any) -> None:
    with pytest.raises(EncodingError):
        pack_body(value, LIMITS)


def test_a_map_in_itself_is_refused() -> None:
    value: dict[int, Any] = {}
    value[0] = value
    with pytest.raises(EncodingError):
        pack_body(value, LIMITS)
