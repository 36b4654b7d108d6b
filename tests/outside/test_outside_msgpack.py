"""Bodies against MessagePack's boundaries, a published vector suite and two other libraries."""

from __future__ import annotations

import json
import random
from pathlib import Path
from typing import Any

import ormsgpack
import pytest
import umsgpack

from protobench.wire import BodyError, BodyLimits, Rule, check_form, load_codec, pack_body, unpack_body

LIMITS = load_codec().body_limits
SUITE = json.loads((Path(__file__).parent / "data" / "msgpack-test-suite.json").read_text())


def in_body(value: bytes) -> bytes:
    return b"\x81\x00" + value


# Source: the MessagePack specification's formats; values checked with three libraries.
SHORTEST = [
    (0, "00"),
    (127, "7f"),
    (128, "cc80"),
    (255, "ccff"),
    (256, "cd0100"),
    (65535, "cdffff"),
    (65536, "ce00010000"),
    (2**32 - 1, "ceffffffff"),
    (2**32, "cf0000000100000000"),
    (2**64 - 1, "cfffffffffffffffff"),
    (-1, "ff"),
    (-32, "e0"),
    (-33, "d0df"),
    (-128, "d080"),
    (-129, "d1ff7f"),
    (-32768, "d18000"),
    (-32769, "d2ffff7fff"),
    (-(2**31), "d280000000"),
    (-(2**31) - 1, "d3ffffffff7fffffff"),
    (-(2**63), "d38000000000000000"),
    (False, "c2"),
    (True, "c3"),
    ("", "a0"),
    ("a" * 31, "bf" + "61" * 31),
    ("a" * 32, "d920" + "61" * 32),
    (b"", "c400"),
    ((), "90"),
    ((0,) * 15, "9f" + "00" * 15),
    ((0,) * 16, "dc0010" + "00" * 16),
    ({}, "80"),
    (dict.fromkeys(range(15), 0), "8f" + "".join(f"{key:02x}00" for key in range(15))),
    (dict.fromkeys(range(16), 0), "de0010" + "".join(f"{key:02x}00" for key in range(16))),
]


@pytest.mark.parametrize(("value", "encoded"), SHORTEST, ids=lambda value: str(value)[:20])
def test_boundaries(value: Any, encoded: str) -> None:
    body = in_body(bytes.fromhex(encoded))
    assert pack_body({0: value}, LIMITS) == body
    assert unpack_body(body, LIMITS) == {0: value}
    assert umsgpack.unpackb(body, use_tuple=True) == {0: value}


@pytest.mark.parametrize("value", ["c0", "ca3fc00000", "cb3ff8000000000000", "c1", "d4ff00", "c70000"])
def test_types_that_the_contract_leaves_out(value: str) -> None:
    with pytest.raises(BodyError) as caught:
        check_form(in_body(bytes.fromhex(value)), LIMITS)
    assert caught.value.rule is Rule.FORBIDDEN_TYPE


# --- Source: npm package msgpack-test-suite 1.0.0, in data/. Each value lists all its encodings.

WIDE = BodyLimits(
    size_max=1 << 20,
    depth_max=9,
    pairs_max=1 << 17,
    items_max=1 << 17,
    string_size_max=1 << 17,
    binary_size_max=1 << 17,
    key_max=127,
)
CASES = [
    (name, next(key for key in case if key != "msgpack"), case)
    for name, cases in SUITE.items()
    for case in cases
]


def expected(kind: str, case: dict[str, Any]) -> Any:
    """The value as this contract can hold it; None when it cannot."""
    value = case[kind]
    if kind == "binary":
        return bytes.fromhex(value.replace("-", ""))
    if kind == "bignum":
        return int(value)
    if kind in ("nil", "timestamp", "ext") or isinstance(value, float):
        return None
    if kind == "string" and not all(" " <= character <= "~" for character in value):
        return None
    if kind == "map" and value:
        return None  # its keys are strings
    return value


def holds_nil_or_text_keys(value: Any) -> bool:
    if isinstance(value, dict):
        return bool(value)
    return value is None or (isinstance(value, list) and any(holds_nil_or_text_keys(item) for item in value))


def encodings(case: dict[str, Any]) -> list[bytes]:
    return [bytes.fromhex(text.replace("-", "")) for text in case["msgpack"]]


def as_tuples(value: Any) -> Any:
    return tuple(as_tuples(item) for item in value) if isinstance(value, list) else value


@pytest.mark.parametrize(("name", "kind", "case"), CASES, ids=lambda value: str(value)[:30])
def test_published_suite(name: str, kind: str, case: dict[str, Any]) -> None:
    """Of what the contract allows one encoding is taken, the shortest, and is what we write."""
    value = expected(kind, case)
    allowed = value is not None and not holds_nil_or_text_keys(value)
    accepted = []
    for encoded in encodings(case):
        try:
            found = unpack_body(in_body(encoded), WIDE)
        except BodyError:
            continue
        accepted.append(encoded)
        assert found == {0: as_tuples(value)}
    if not allowed:
        assert accepted == []
        return
    assert len(accepted) == 1
    assert len(accepted[0]) == min(len(form) for form in encodings(case) if form[0] not in (0xCA, 0xCB))
    assert pack_body({0: value}, WIDE) == in_body(accepted[0])


def test_the_suite_is_whole_and_splits_as_expected() -> None:
    assert len(CASES) == 85
    assert sum(len(case["msgpack"]) for _, _, case in CASES) == 233
    allowed = [
        case
        for _, kind, case in CASES
        if not holds_nil_or_text_keys(expected(kind, case)) and expected(kind, case) is not None
    ]
    assert len(allowed) > 40


# --- Source: the packages u-msgpack-python and ormsgpack, implementations by others.


def random_value(rng: random.Random, depth: int) -> Any:
    choice = rng.randrange(6 if depth < 3 else 4)
    if choice == 0:
        return rng.choice([True, False])
    if choice == 1:
        return rng.choice([rng.getrandbits(rng.randint(1, 64)), -rng.getrandbits(rng.randint(1, 63)) - 1])
    if choice == 2:
        return rng.randbytes(rng.randint(0, 8))
    if choice == 3:
        return "".join(chr(rng.randint(0x20, 0x7E)) for _ in range(rng.randint(0, 8)))
    if choice == 4:
        return tuple(random_value(rng, depth + 1) for _ in range(rng.randint(0, 4)))
    return random_map(rng, depth + 1)


def random_map(rng: random.Random, depth: int) -> dict[int, Any]:
    keys = sorted(rng.sample(range(128), rng.randint(0, 4)))
    return {key: random_value(rng, depth) for key in keys}


def test_two_other_libraries_write_and_read_the_same() -> None:
    rng = random.Random(13)
    compared = 0
    for _ in range(3000):
        values = random_map(rng, 1)
        body = umsgpack.packb(values)
        if len(body) > LIMITS.size_max:
            continue
        compared += 1
        assert pack_body(values, LIMITS) == body
        assert ormsgpack.packb(values, option=ormsgpack.OPT_NON_STR_KEYS) == body
        assert unpack_body(body, LIMITS) == values
        assert umsgpack.unpackb(body, use_tuple=True) == values
    assert compared > 2500


# What u-msgpack-python writes for the same meaning in other ways, by its options and types.
ALTERNATIVES: list[tuple[str, bytes, Rule]] = [
    ("keys not ascending", umsgpack.packb({1: 0, 0: 0}), Rule.KEY_ORDER),
    ("nested keys not ascending", umsgpack.packb({0: {5: 0, 2: 0}}), Rule.KEY_ORDER),
    ("a whole number as a double", umsgpack.packb({0: 1.0}), Rule.FORBIDDEN_TYPE),
    (
        "a whole number as a single",
        umsgpack.packb({0: 1.0}, force_float_precision="single"),
        Rule.FORBIDDEN_TYPE,
    ),
    ("a default as nil", umsgpack.packb({0: None}), Rule.FORBIDDEN_TYPE),
    ("bytes as an extension", umsgpack.packb({0: umsgpack.Ext(5, b"ab")}), Rule.FORBIDDEN_TYPE),
    ("a key as a double", umsgpack.packb({1.0: 0}), Rule.KEY_TYPE),
    ("a key as a boolean", umsgpack.packb({True: 0}), Rule.KEY_TYPE),
    ("a key as text", umsgpack.packb({"0": 0}), Rule.KEY_TYPE),
    ("text beyond ASCII", umsgpack.packb({0: "é"}), Rule.NOT_ASCII),
]


@pytest.mark.parametrize(("what", "body", "rule"), ALTERNATIVES, ids=lambda value: str(value)[:30])
def test_alternative_encodings_of_another_library_are_refused(what: str, body: bytes, rule: Rule) -> None:
    with pytest.raises(BodyError) as caught:
        check_form(body, LIMITS)
    assert caught.value.rule is rule


def longer_forms(encoded: bytes) -> list[bytes]:
    """Every longer or signed way to write one integer, string, binary, array or map header."""
    value = umsgpack.unpackb(encoded, use_tuple=True)
    if type(value) is int:
        sizes = {0xCC: 1, 0xCD: 2, 0xCE: 4, 0xCF: 8, 0xD0: 1, 0xD1: 2, 0xD2: 4, 0xD3: 8}
        found = []
        for first, size in sizes.items():
            try:
                found.append(bytes([first]) + value.to_bytes(size, "big", signed=first >= 0xD0))
            except OverflowError:
                continue
        return [form for form in found if form != encoded]
    content = {str: "d9 da db", bytes: "c4 c5 c6", tuple: "dc dd", dict: "de df"}[type(value)]
    sizes = {0xD9: 1, 0xDA: 2, 0xDB: 4, 0xC4: 1, 0xC5: 2, 0xC6: 4, 0xDC: 2, 0xDD: 4, 0xDE: 2, 0xDF: 4}
    header = 2 if encoded[0] in (0xC4, 0xD9) else 3 if encoded[0] in (0xDC, 0xDE) else 1
    found = [
        bytes([first]) + len(value).to_bytes(sizes[first], "big") + encoded[header:]
        for first in bytes.fromhex(content)
    ]
    return [form for form in found if form != encoded]


@pytest.mark.parametrize(("value", "encoded"), SHORTEST, ids=lambda value: str(value)[:20])
def test_longer_forms_that_another_library_reads_as_the_same_are_refused(value: Any, encoded: str) -> None:
    if isinstance(value, bool):
        return  # a boolean has one form
    forms = longer_forms(bytes.fromhex(encoded))
    for form in forms:
        assert umsgpack.unpackb(form, use_tuple=True) == value
        with pytest.raises(BodyError) as caught:
            check_form(in_body(form), LIMITS)
        assert caught.value.rule is Rule.NOT_SHORTEST
    assert forms or value in (2**64 - 1, 2**32, -(2**31) - 1, -(2**63))
