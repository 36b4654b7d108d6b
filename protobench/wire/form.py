"""The form of a body: one pass over the bytes that names the first thing that is not canonical.

This is the definition. Faster ways to the same answer exist for known kinds (:mod:`protobench.wire.codegen`);
they are held to this one by tests.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

from protobench.wire.errors import BodyError


@dataclass(frozen=True, slots=True)
class BodyLimits:
    """Bounds of a body: bytes, depth (the body map is 1), pairs, items, lengths in bytes, greatest key."""

    size_max: int
    depth_max: int
    pairs_max: int
    items_max: int
    string_size_max: int
    binary_size_max: int
    key_max: int


class Rule(StrEnum):
    """Names of the rules that a body can break."""

    EMPTY = "empty"
    SIZE = "size"
    NOT_A_MAP = "not-a-map"
    TRUNCATED = "truncated"
    TRAILING = "trailing"
    KEY_TYPE = "key-type"
    KEY_RANGE = "key-range"
    KEY_ORDER = "key-order"
    KEY_TWICE = "key-twice"
    NOT_SHORTEST = "not-shortest"
    FORBIDDEN_TYPE = "forbidden-type"
    NOT_ASCII = "not-ascii"
    DEPTH = "depth"
    PAIRS = "pairs"
    ITEMS = "items"
    STRING_SIZE = "string-size"
    BINARY_SIZE = "binary-size"


def check_form(body: bytes, limits: BodyLimits) -> None:
    """Return when ``body`` is one canonical map; else raise BodyError with rule and offset.

    Takes time proportional to the bytes looked at, whatever a header claims, and allocates nothing for its
    content.
    """
    if not body:
        raise BodyError(Rule.EMPTY, 0, "no bytes; an empty map is 80")
    if len(body) > limits.size_max:
        raise BodyError(Rule.SIZE, limits.size_max, f"{len(body)} bytes, at most {limits.size_max}")
    if not _is_map(body[0]):
        raise BodyError(Rule.NOT_A_MAP, 0, f"begins with {body[0]:02x}")
    end = _check_value(body, 0, 1, limits)
    if end != len(body):
        raise BodyError(Rule.TRAILING, end, f"{len(body) - end} bytes after the map")


def _is_map(first: int) -> bool:
    return 0x80 <= first <= 0x8F or first in (0xDE, 0xDF)


def _check_value(body: bytes, at: int, depth: int, limits: BodyLimits) -> int:
    """Check the value at ``at``, where a container would have ``depth``; return where it ends."""
    first = _bytes(body, at, 1)[0]
    if first <= 0x7F or first >= 0xE0 or first in (0xC2, 0xC3):
        return at + 1
    if first in _INTEGERS:
        return _check_integer(body, at, first)
    if first in _FORBIDDEN:
        raise BodyError(Rule.FORBIDDEN_TYPE, at, f"{first:02x} is {_FORBIDDEN[first]}")
    family, count, start = _read_header(body, at, first)
    rule, unit, bound = _BOUNDS[family]
    if count > getattr(limits, bound):
        raise BodyError(rule, at, f"{family} of {count} {unit}, at most {getattr(limits, bound)}")
    if family == "binary":
        return start + len(_bytes(body, start, count))
    if family == "string":
        return _check_characters(body, start, count)
    if depth > limits.depth_max:
        raise BodyError(Rule.DEPTH, at, f"{family} at depth {depth}, at most {limits.depth_max}")
    if family == "array":
        return _check_items(body, start, count, depth, limits)
    return _check_pairs(body, start, count, depth, limits)


_BOUNDS = {
    "binary": (Rule.BINARY_SIZE, "bytes", "binary_size_max"),
    "string": (Rule.STRING_SIZE, "bytes", "string_size_max"),
    "array": (Rule.ITEMS, "items", "items_max"),
    "map": (Rule.PAIRS, "pairs", "pairs_max"),
}


def _bytes(body: bytes, at: int, count: int) -> bytes:
    found = body[at : at + count]
    if len(found) < count:
        raise BodyError(Rule.TRUNCATED, len(body), f"the body ends {count - len(found)} bytes too early")
    return found


# first byte: size of the argument, signed, least and greatest value that needs this size
_INTEGERS = {
    0xCC: (1, False, 0x80, 0xFF),
    0xCD: (2, False, 0x100, 0xFFFF),
    0xCE: (4, False, 0x1_0000, 0xFFFF_FFFF),
    0xCF: (8, False, 0x1_0000_0000, 0xFFFF_FFFF_FFFF_FFFF),
    0xD0: (1, True, -0x80, -0x21),
    0xD1: (2, True, -0x8000, -0x81),
    0xD2: (4, True, -0x8000_0000, -0x8001),
    0xD3: (8, True, -0x8000_0000_0000_0000, -0x8000_0001),
}

_FORBIDDEN = {0xC0: "nil", 0xC1: "never used", 0xCA: "floating point", 0xCB: "floating point"}
_FORBIDDEN |= dict.fromkeys((0xC7, 0xC8, 0xC9, *range(0xD4, 0xD9)), "an extension type")


def _check_integer(body: bytes, at: int, first: int) -> int:
    size, signed, least, greatest = _INTEGERS[first]
    value = int.from_bytes(_bytes(body, at + 1, size), "big", signed=signed)
    if not least <= value <= greatest:
        raise BodyError(Rule.NOT_SHORTEST, at, f"{value} written as {first:02x} with {size} more bytes")
    return at + 1 + size


# first byte: family, size of the count, least count that needs this size
_HEADERS = {
    0xC4: ("binary", 1, 0),
    0xC5: ("binary", 2, 0x100),
    0xC6: ("binary", 4, 0x1_0000),
    0xD9: ("string", 1, 32),
    0xDA: ("string", 2, 0x100),
    0xDB: ("string", 4, 0x1_0000),
    0xDC: ("array", 2, 16),
    0xDD: ("array", 4, 0x1_0000),
    0xDE: ("map", 2, 16),
    0xDF: ("map", 4, 0x1_0000),
}


def _read_header(body: bytes, at: int, first: int) -> tuple[str, int, int]:
    """Return family, count and where the content starts, of a string, binary, array or map."""
    if first <= 0x8F:
        return "map", first & 0x0F, at + 1
    if first <= 0x9F:
        return "array", first & 0x0F, at + 1
    if first <= 0xBF:
        return "string", first & 0x1F, at + 1
    family, size, least = _HEADERS[first]
    count = int.from_bytes(_bytes(body, at + 1, size), "big")
    if count < least:
        raise BodyError(
            Rule.NOT_SHORTEST, at, f"{family} of {count} written as {first:02x} with {size} more bytes"
        )
    return family, count, at + 1 + size


def _check_characters(body: bytes, at: int, count: int) -> int:
    for offset, byte in enumerate(_bytes(body, at, count), at):
        if not 0x20 <= byte <= 0x7E:
            raise BodyError(Rule.NOT_ASCII, offset, f"byte {byte:02x} in a string, only 20 to 7e")
    return at + count


def _check_items(body: bytes, at: int, count: int, depth: int, limits: BodyLimits) -> int:
    for _ in range(count):
        at = _check_value(body, at, depth + 1, limits)
    return at


def _check_pairs(body: bytes, at: int, count: int, depth: int, limits: BodyLimits) -> int:
    last = -1
    for _ in range(count):
        last = _check_key(body, at, last, limits)
        at = _check_value(body, at + 1, depth + 1, limits)
    return at


def _check_key(body: bytes, at: int, last: int, limits: BodyLimits) -> int:
    first = _bytes(body, at, 1)[0]
    if first in _INTEGERS:
        _check_integer(body, at, first)
    if first in _INTEGERS or first >= 0xE0 or limits.key_max < first <= 0x7F:
        raise BodyError(Rule.KEY_RANGE, at, f"key outside 0..{limits.key_max}")
    if first > 0x7F:
        raise BodyError(Rule.KEY_TYPE, at, f"key begins with {first:02x}, which is no unsigned integer")
    if first == last:
        raise BodyError(Rule.KEY_TWICE, at, f"key {first} twice")
    if first < last:
        raise BodyError(Rule.KEY_ORDER, at, f"key {first} after key {last}")
    return first
