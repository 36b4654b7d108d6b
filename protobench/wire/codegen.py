"""Straight-line functions for one kind, written out as source and compiled once.

What they accept is exactly what :mod:`protobench.wire.examine` finds no fault with, except unknown keys;
anything else they hand over to the careful way. The proof that a body is canonical is that packing what was
read gives it back: nothing else encodes the same values, the keys packed are constants in ascending order,
and each value's type is checked.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

from protobench.wire.specs import NUMERIC, FieldSpec, FieldType, KindSpec, Presence, RecordSpec

Namespace = dict[str, Any]


def build(source: str, names: Namespace, wanted: str, origin: str) -> Any:
    """Compile ``source`` with ``names`` in view and return what it calls ``wanted``."""
    exec(compile(source, origin, "exec"), names)  # noqa: S102  # our own templates, filled from the checked contract
    return names[wanted]


def field_test(spec: FieldSpec, value: str, names: Namespace) -> str:
    """Return an expression that is true when the expression ``value`` has the field's type and range.

    Puts what the expression refers to into ``names``.
    """
    if spec.type is FieldType.BOOL:
        return f"({value} is True or {value} is False)"
    if spec.type in NUMERIC:
        return f"type({value}) is int and {_range_test(spec, value, names)}"
    if spec.type is FieldType.BYTES:
        return f"type({value}) is bytes and {_size_test(spec, value)}"
    if spec.type is FieldType.TEXT:
        printable = f"{value}.isascii() and {value}.isprintable()"
        return f"type({value}) is str and {_size_test(spec, value)} and {printable}"
    names[f"items_{spec.attribute}"] = _record_test(spec.record) if spec.record else _list_test(spec)
    return f"type({value}) is tuple and {_size_test(spec, value)} and items_{spec.attribute}({value})"


def _range_test(spec: FieldSpec, value: str, names: Namespace) -> str:
    numbers = sorted(spec.values) if spec.type is FieldType.ENUM else [spec.low, spec.high]
    if spec.type is FieldType.ENUM and len(numbers) != numbers[-1] - numbers[0] + 1:
        names[f"values_{spec.attribute}"] = frozenset(numbers)
        return f"{value} in values_{spec.attribute}"
    return f"{numbers[0]} <= {value} <= {numbers[-1]}"


def _size_test(spec: FieldSpec, value: str) -> str:
    if spec.size_min == spec.size_max:
        return f"len({value}) == {spec.size_max}"
    return f"{spec.size_min} <= len({value}) <= {spec.size_max}"


def _list_test(spec: FieldSpec) -> Callable[[tuple[object, ...]], bool]:
    low, high = spec.low, spec.high

    def test(items: tuple[object, ...]) -> bool:
        return all(type(item) is int and low <= item <= high for item in items)

    return test


def _record_test(record: RecordSpec) -> Callable[[tuple[object, ...]], bool]:
    names: Namespace = {}
    values = [f"v{number}" for number in range(len(record.fields))]
    tests = [field_test(spec, value, names) for spec, value in zip(record.fields, values, strict=True)]
    source = f"""
def test(rows):
    for row in rows:
        if not isinstance(row, tuple) or len(row) != {len(values)}:
            return False
        {", ".join(values)}, = row
        if not ({" and ".join(tests)}):
            return False
    return True
"""
    test: Callable[[tuple[object, ...]], bool] = build(source, names, "test", f"<record {record.name}>")
    return test


def init_source(fields: Sequence[FieldSpec]) -> str:
    """Return the source of ``__init__``: keyword arguments only, what may be absent has its default."""
    if not fields:
        return "def __init__(self):\n    pass\n"
    arguments = [
        f"{spec.attribute}" if spec.presence is Presence.ALWAYS else f"{spec.attribute}={spec.default!r}"
        for spec in fields
    ]
    lines = [f"    self.{spec.attribute} = {spec.attribute}" for spec in fields]
    return f"def __init__(self, *, {', '.join(arguments)}):\n" + "\n".join(lines) + "\n"


def encode_source(kind: KindSpec, names: Namespace) -> str:
    """Return the source of ``encode(message)`` → body; what it cannot take goes to ``careful_encode``."""
    lines = ["def encode(message):"]
    lines += [f"    v{spec.key} = message.{spec.attribute}" for spec in kind.fields]
    required = [spec for spec in kind.fields if spec.presence is Presence.ALWAYS]
    tests = [field_test(spec, f"v{spec.key}", names) for spec in required] or ["True"]
    lines.append(f"    if {' and '.join(tests)}:")
    if len(required) == len(kind.fields):
        return "\n".join(
            [*lines, f"        return pack({_literal(required)})", "    return careful_encode(message)\n"]
        )
    lines.append("        values = {}")
    for spec in kind.fields:
        value = f"v{spec.key}"
        if spec.presence is Presence.ALWAYS:
            lines.append(f"        values[{spec.key}] = {value}")
            continue
        lines += [
            f"        if {value} is not None:",
            f"            if not ({field_test(spec, value, names)}):",
            "                return careful_encode(message)",
            f"            if {value} != {spec.default!r}:",
            f"                values[{spec.key}] = {value}",
        ]
    return "\n".join([*lines, "        return pack(values)", "    return careful_encode(message)\n"])


def decode_source(kind: KindSpec, names: Namespace) -> str:
    """Return the source of ``decode(body, many=False)`` → message; the rest goes to ``careful_decode``."""
    required = [spec for spec in kind.fields if spec.presence is Presence.ALWAYS]
    tests = [field_test(spec, f"v{spec.key}", names) for spec in required] or ["True"]
    lines = [
        "def decode(body, many=False):",
        "    try:",
        "        found = unpack(body, strict_map_key=False, use_list=False)",
        *(f"        v{spec.key} = found[{spec.key}]" for spec in required),
        f"        if {' and '.join(tests)}:",
        "            message = new(Message)",
        *(f"            message.{spec.attribute} = {_taken(spec, names)}" for spec in required),
    ]
    if len(required) == len(kind.fields):
        lines.append(f"            if pack({_literal(required)}) == body:")
    else:
        lines += _decode_optional(kind, names)
        lines.append("            if pack(values) == body:")
    lines += [
        "                return message",
        "    except failures:",
        "        pass",
        "    return careful_decode(body, many)\n",
    ]
    return "\n".join(lines)


def _decode_optional(kind: KindSpec, names: Namespace) -> list[str]:
    lines = ["            values = {}"]
    for spec in kind.fields:
        if spec.presence is Presence.ALWAYS:
            lines.append(f"            values[{spec.key}] = v{spec.key}")
            continue
        value = f"v{spec.key}"
        unexamined = spec.presence is Presence.UNICAST
        taken = f"None if many else {_taken(spec, names)}" if unexamined else _taken(spec, names)
        lines += [
            f"            {value} = found.get({spec.key})",
            f"            if {value} is None:",
            *(
                ["                if not many:", "                    return careful_decode(body, many)"]
                * unexamined
            ),
            f"                message.{spec.attribute} = {spec.default!r}",
            f"            elif {field_test(spec, value, names)}:",
            f"                message.{spec.attribute} = {taken}",
            f"                values[{spec.key}] = {value}",
            "            else:",
            "                return careful_decode(body, many)",
        ]
    return lines


def _taken(spec: FieldSpec, names: Namespace) -> str:
    """Return the expression for what a message holds of the value as unpacked."""
    if spec.record is None:
        return f"v{spec.key}"
    names[f"rows_{spec.attribute}"] = names["records"][spec.record.name]._make
    return f"tuple(map(rows_{spec.attribute}, v{spec.key}))"


def _literal(fields: Sequence[FieldSpec]) -> str:
    return "{" + ", ".join(f"{spec.key}: v{spec.key}" for spec in fields) + "}"
