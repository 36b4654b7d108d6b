"""A frame or a body, field by field, for people: dropped and refused ones too."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from protobench.wire.body import unpack_body
from protobench.wire.codec import Codec
from protobench.wire.errors import BodyError, Dropped, FieldError
from protobench.wire.examine import examine
from protobench.wire.messages import MessageKind
from protobench.wire.specs import NUMERIC, FieldSpec, FieldType


@dataclass(frozen=True, slots=True)
class Line:
    """One field.

    ``place``: ``offset 3`` in a header, ``key 3`` in a body, ``key 3 row 0`` in a record; ``name``, ``value``
    and ``unit`` in words (``unit`` is empty where there is none); ``problem``: what is wrong, or empty.
    """

    place: str
    name: str
    value: str
    unit: str = ""
    problem: str = ""


@dataclass(frozen=True, slots=True)
class Explanation:
    """A frame in words.

    ``kind``: name of the kind, empty where the contract has none; ``header`` and ``body``: what could be
    read; ``dropped``: reason and detail, or None; ``problems``: what a module would refuse, in the order of
    judging.
    """

    kind: str
    header: Sequence[Line]
    body: Sequence[Line]
    dropped: Dropped | None
    problems: Sequence[BodyError | FieldError]


def explain_frame(codec: Codec, data: bytes) -> Explanation:
    """Explain one bare frame."""
    frame = codec.frames.unpack(data)
    header = _header_lines(codec, data)
    if isinstance(frame, Dropped):
        return Explanation("", header, (), frame, ())
    kind = codec.kinds_by_code.get(frame.kind)
    dropped = codec.frames.check_length(frame)
    lines, problems = explain_body(codec, kind, frame.body, codec.contract.is_multicast(frame.destination))
    return Explanation(kind.name if kind else "", header, lines, dropped, problems)


def explain_body(
    codec: Codec, kind: MessageKind | None, body: bytes, many: bool = False
) -> tuple[Sequence[Line], Sequence[BodyError | FieldError]]:
    """Explain one body, as a message of ``kind`` or, without one, as a bare map.

    ``many``: whether it goes to a group or to all, where ``unicast`` fields are not examined.
    """
    try:
        values = unpack_body(body, codec.body_limits)
    except BodyError as error:
        return (Line(f"byte {error.offset}", "body", body.hex() or "(empty)", problem=str(error)),), (error,)
    if kind is None:
        return [Line(f"key {key}", "", _plain(value)) for key, value in values.items()], ()
    problems = examine(kind.spec, values, many).problems
    by_key = {problem.key: problem for problem in problems}
    specs = {spec.key: spec for spec in kind.spec.fields}
    lines: list[Line] = []
    for key in sorted({*values, *by_key}):
        lines += _field_lines(key, specs.get(key), values, by_key.get(key))
    return lines, problems


def _field_lines(
    key: int, spec: FieldSpec | None, values: Mapping[int, Any], problem: FieldError | None
) -> list[Line]:
    wrong = str(problem) if problem else ""
    if spec is None:
        return [
            Line(f"key {key}", "unknown" if problem else "unknown, ignored", _plain(values[key]), "", wrong)
        ]
    if key not in values:
        return [Line(f"key {key}", spec.name, "absent", problem=wrong)]
    value = values[key]
    lines = [Line(f"key {key}", spec.name, show(spec, value), _unit(spec), wrong)]
    if spec.record is None or problem is not None:
        return lines
    for number, row in enumerate(value):
        place = f"key {key} row {number}"
        parts = zip(spec.record.fields, row, strict=True)
        lines += [
            Line(place, f"{spec.name}.{part.name}", show(part, item), _unit(part)) for part, item in parts
        ]
    return lines


def show(spec: FieldSpec, value: Any) -> str:
    """Return one value in words: enumerations by name and number, addresses and bit sets in hexadecimal."""
    if type(value) is int and spec.type is FieldType.ENUM:
        return f"{spec.values.get(value, 'no such value')} ({value})"
    if type(value) is int and spec.type in NUMERIC and spec.unit in ("address", "bits"):
        return f"0x{value:x}"
    if spec.record is not None and isinstance(value, tuple):
        return f"{len(value)} records"
    if spec.unit == "address" and isinstance(value, tuple):
        return "[" + ", ".join(f"0x{item:x}" if type(item) is int else _plain(item) for item in value) + "]"
    return _plain(value)


def _unit(spec: FieldSpec) -> str:
    return "" if spec.unit in ("1", "address", "bits") or spec.type is FieldType.ENUM else spec.unit


def _plain(value: Any) -> str:
    if isinstance(value, bytes):
        return value.hex() or "(no bytes)"
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return f'"{value}"'
    if isinstance(value, tuple):
        return "[" + ", ".join(_plain(item) for item in value) + "]"
    if isinstance(value, dict):
        return "{" + ", ".join(f"{key}: {_plain(item)}" for key, item in value.items()) + "}"
    return str(value)


def _header_lines(codec: Codec, data: bytes) -> list[Line]:
    """Return as much of the header as there is."""
    lines = []
    for field in codec.frames.layout.fields:
        raw = data[field.offset : field.offset + field.size]
        if len(raw) < field.size:
            break
        lines.append(Line(f"offset {field.offset}", field.name, _header_value(codec, field.name, raw)))
    return lines


def _header_value(codec: Codec, name: str, raw: bytes) -> str:
    value = int.from_bytes(raw, "big")
    if name == "kind":
        kind = codec.kinds_by_code.get(value)
        return f"{kind.name if kind else 'unknown'} (0x{value:02x})"
    if name in ("version", "body_length", "number"):
        return str(value)
    return f"0x{value:0{2 * len(raw)}x}"
