"""The careful way to read and check a message: slow beside the straight-line functions, but it says why."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from protobench.wire.errors import FieldError, FieldRule
from protobench.wire.specs import NUMERIC, FieldSpec, FieldType, KindSpec, Presence


@dataclass(frozen=True, slots=True)
class Findings:
    """What the fields of a canonical body hold.

    ``values``: by field name in Python, for every field of the kind; None where it is absent without a
    default, has the wrong type, or is not examined; a value out of range is kept. ``problems``: in the order
    of judging. ``ignored``: unknown keys that may be ignored, with their values.
    """

    values: dict[str, Any]
    problems: tuple[FieldError, ...]
    ignored: dict[int, Any]


def examine(kind: KindSpec, body: Mapping[int, Any], many: bool) -> Findings:
    """Look at all fields of ``body``, an unpacked canonical map; ``many``: sent to a group or to all."""
    values: dict[str, Any] = {}
    problems: list[FieldError] = []
    for spec in kind.fields:
        value, rule = _judge(spec, body, many)
        values[spec.attribute] = value
        if rule is not None:
            problems.append(FieldError(kind.name, spec.key, spec.name, body.get(spec.key), rule, spec.wanted))
    known = {spec.key for spec in kind.fields}
    ignored = {key: value for key, value in body.items() if key not in known}
    for key in [key for key in ignored if kind.is_critical(key)]:
        wanted = "a key of this kind, since it must be understood"
        problems.append(FieldError(kind.name, key, "", ignored.pop(key), FieldRule.NOT_UNDERSTOOD, wanted))
    problems.sort(key=lambda problem: (problem.rule.rank, problem.key))
    return Findings(values, tuple(problems), ignored)


def _judge(spec: FieldSpec, body: Mapping[int, Any], many: bool) -> tuple[Any, FieldRule | None]:
    """Return what the message holds for one field, and the rule that is broken."""
    if spec.presence is Presence.UNICAST and many:
        return None, None
    if spec.key not in body:
        return spec.default, None if spec.presence is Presence.OPTIONAL else FieldRule.MISSING
    value = body[spec.key]
    if not has_type(spec, value):
        return None, FieldRule.TYPE
    return value, None if in_range(spec, value) else FieldRule.RANGE


def has_type(spec: FieldSpec, value: object) -> bool:
    """Whether a value is of the field's type.

    Any integer will do for an integer, whatever its sign: that is a matter of range. Text is printable ASCII.
    """
    if spec.type in NUMERIC:
        return type(value) is int
    if spec.type is FieldType.LIST:
        return isinstance(value, tuple) and all(type(item) is int for item in value)
    if spec.record is not None:
        return isinstance(value, tuple) and all(_is_record(spec, row) for row in value)
    if isinstance(value, str):
        return spec.type is FieldType.TEXT and value.isascii() and value.isprintable()
    return type(value) is {FieldType.BOOL: bool, FieldType.BYTES: bytes}.get(spec.type)


def _is_record(spec: FieldSpec, row: object) -> bool:
    if spec.record is None or not isinstance(row, tuple) or len(row) != len(spec.record.fields):
        return False
    return all(has_type(part, value) for part, value in zip(spec.record.fields, row, strict=True))


def in_range(spec: FieldSpec, value: Any) -> bool:
    """Whether a value of the right type is in range, in length too, and its items are."""
    if spec.type is FieldType.BOOL:
        return True
    if spec.type is FieldType.ENUM:
        return value in spec.values
    if spec.type in NUMERIC:
        return bool(spec.low <= value <= spec.high)
    if not spec.size_min <= len(value) <= spec.size_max:
        return False
    if spec.type is FieldType.LIST:
        return all(spec.low <= item <= spec.high for item in value)
    if spec.record is None:
        return True
    return all(
        in_range(part, item) for row in value for part, item in zip(spec.record.fields, row, strict=True)
    )
