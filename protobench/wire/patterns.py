"""What the good bodies of a kind look like, as one regular expression over their bytes.

A kind's canonical bodies are a regular language: keys are constants in ascending order, each value has few
encodings, each range of integers is a handful of byte ranges, and nesting is bounded. Only the number of
pairs that the map header tells is left to the unpacker, which fails when it is wrong. One match therefore
stands for the checks of form, type and range at once, in C and in time proportional to the body: no two
alternatives begin alike, so that the matcher never goes back over more than one value.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from protobench.wire.specs import NUMERIC, FieldSpec, FieldType, KindSpec, Presence

# prefix, bytes that follow, least and greatest value written so
_INTEGER_FORMS = (
    (b"", 1, 0, 0x7F),
    (b"\xcc", 1, 0x80, 0xFF),
    (b"\xcd", 2, 0x100, 0xFFFF),
    (b"\xce", 4, 0x1_0000, 0xFFFF_FFFF),
    (b"\xcf", 8, 0x1_0000_0000, 0xFFFF_FFFF_FFFF_FFFF),
    (b"", 1, -0x20, -1),
    (b"\xd0", 1, -0x80, -0x21),
    (b"\xd1", 2, -0x8000, -0x81),
    (b"\xd2", 4, -0x8000_0000, -0x8001),
    (b"\xd3", 8, -0x8000_0000_0000_0000, -0x8000_0001),
)


def kind_pattern(kind: KindSpec) -> bytes:
    """Return the expression for bodies of ``kind`` without unknown keys; compile it with ``re.DOTALL``."""
    required = sum(spec.presence is Presence.ALWAYS for spec in kind.fields)
    header = _any_of(_header(count, 0x80, 15, 0xDE) for count in range(required, len(kind.fields) + 1))
    return header + b"".join(_pair(spec) for spec in kind.fields)


def _pair(spec: FieldSpec) -> bytes:
    pair = _literal(bytes([spec.key])) + value_pattern(spec)
    return pair if spec.presence is Presence.ALWAYS else b"(?:" + pair + b")?"


def value_pattern(spec: FieldSpec) -> bytes:
    """Return the expression for the good values of one field."""
    if spec.type is FieldType.BOOL:
        return rb"[\xc2\xc3]"
    if spec.type in NUMERIC:
        return _numeric(spec)
    sizes = range(spec.size_min, spec.size_max + 1)
    if spec.type is FieldType.BYTES:
        return _any_of(_literal(bytes([0xC4, size])) + _times(b".", size) for size in sizes)
    if spec.type is FieldType.TEXT:
        return _any_of(_text_header(size) + _times(b"[ -~]", size) for size in sizes)
    item = _row(spec.record.fields) if spec.record else _integers(spec.low, spec.high)
    return _any_of(_header(size, 0x90, 15, 0xDC) + _times(item, size) for size in sizes)


def _row(fields: Sequence[FieldSpec]) -> bytes:
    return _header(len(fields), 0x90, 15, 0xDC) + b"".join(value_pattern(spec) for spec in fields)


def _numeric(spec: FieldSpec) -> bytes:
    if spec.type is not FieldType.ENUM:
        return _integers(spec.low, spec.high)
    return _any_of(_integers(value, value) for value in sorted(spec.values))


def _integers(low: int, high: int) -> bytes:
    """Return the expression for the canonical encodings of ``low`` to ``high``."""
    parts = []
    for prefix, size, least, greatest in _INTEGER_FORMS:
        first, last = max(low, least), min(high, greatest)
        if first <= last:
            mask = (1 << 8 * size) - 1
            parts.append(_literal(prefix) + _byte_range(first & mask, last & mask, size))
    return _any_of(parts)


def _byte_range(first: int, last: int, size: int) -> bytes:
    """Return the expression for the big-endian numbers ``first`` to ``last`` of ``size`` bytes."""
    if first == 0 and last == (1 << 8 * size) - 1:
        return _times(b".", size)
    unit = 1 << 8 * (size - 1)
    top_first, low_first = divmod(first, unit)
    top_last, low_last = divmod(last, unit)
    if top_first == top_last:
        return _literal(bytes([top_first])) + _byte_range(low_first, low_last, size - 1)
    parts = []
    if low_first:
        parts.append(_literal(bytes([top_first])) + _byte_range(low_first, unit - 1, size - 1))
        top_first += 1
    if low_last != unit - 1:
        parts.append(_literal(bytes([top_last])) + _byte_range(0, low_last, size - 1))
        top_last -= 1
    if top_first <= top_last:
        parts.append(
            b"[%b-%b]" % (_literal(bytes([top_first])), _literal(bytes([top_last]))) + _times(b".", size - 1)
        )
    return _any_of(parts)


def _header(count: int, short: int, short_max: int, long: int) -> bytes:
    return _literal(bytes([short + count]) if count <= short_max else bytes([long, 0, count]))


def _text_header(size: int) -> bytes:
    return _literal(bytes([0xA0 + size]) if size <= 31 else bytes([0xD9, size]))


def _times(item: bytes, count: int) -> bytes:
    if len(item) == 1 and count <= 8:  # written out it matches faster
        return item * count
    return b"" if count == 0 else b"(?:%b){%d}" % (item, count)


def _any_of(parts: Iterable[bytes]) -> bytes:
    alternatives = list(parts)
    return alternatives[0] if len(alternatives) == 1 else b"(?:" + b"|".join(alternatives) + b")"


def _literal(data: bytes) -> bytes:
    return b"".join(b"\\x%02x" % byte for byte in data)
