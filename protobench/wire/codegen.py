"""Straight-line functions for one kind, written out as source and compiled once.

What they accept is exactly what :mod:`protobench.wire.examine` finds no fault with, unknown keys aside;
anything else they hand over to the careful way, which says why.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from protobench.wire.specs import FieldSpec, KindSpec, Presence

Namespace = dict[str, Any]


def build(source: str, names: Namespace, wanted: str, origin: str) -> Any:
    """Compile ``source`` with ``names`` in view and return what it calls ``wanted``."""
    exec(compile(source, origin, "exec"), names)  # noqa: S102  # our own templates, filled from the checked contract
    return names[wanted]


def init_source(fields: Sequence[FieldSpec]) -> str:
    """Return the source of ``__init__``: keyword arguments only, what may be absent has its default."""
    if not fields:
        return "def __init__(self):\n    pass\n"
    arguments = [
        spec.attribute if spec.presence is Presence.ALWAYS else f"{spec.attribute}={spec.default!r}"
        for spec in fields
    ]
    lines = [f"    self.{spec.attribute} = {spec.attribute}" for spec in fields]
    return "\n".join([f"def __init__(self, *, {', '.join(arguments)}):", *lines, ""])


def to_body_source(kind: KindSpec) -> str:
    """Return the source of ``to_body(message)`` → body.

    Needs ``pack``, ``match``, ``failures`` and ``careful_body`` in view.
    """
    lines = ["def to_body(message):", *_body_lines(kind), "            return body", *_failure_lines()]
    return "\n".join([*lines, "    return careful_body(message)\n"])


def to_frame_source(kind: KindSpec, version: int) -> str:
    """Return the source of ``to_frame(message, source, destination, session, number)`` → bare frame.

    Needs what ``to_body`` needs, ``pack_header``, ``pack_check``, ``crc`` and ``careful_frame``.
    """
    header = f"{version}, {kind.code}, 0, len(body), source, destination, session, number"
    lines = [
        "def to_frame(message, source, destination, session, number):",
        *_body_lines(kind),
        f"            data = pack_header({header}) + body",
        "            return data + pack_check(crc(data))",
        *_failure_lines(),
        "    return careful_frame(message, source, destination, session, number)\n",
    ]
    return "\n".join(lines)


def _body_lines(kind: KindSpec) -> list[str]:
    first, rest = _split(kind)
    literal = ", ".join(f"{spec.key}: message.{spec.attribute}" for spec in first)
    lines = ["    try:", f"        values = {{{literal}}}"]
    for spec in rest:
        if spec.presence is Presence.ALWAYS:
            lines.append(f"        values[{spec.key}] = message.{spec.attribute}")
            continue
        differs = f" and value != {spec.default!r}" * (spec.default is not None)
        lines += [
            f"        value = message.{spec.attribute}",
            f"        if value is not None{differs}:",
            f"            values[{spec.key}] = value",
        ]
    return [*lines, "        body = pack(values)", "        if match(body):"]


def _failure_lines() -> list[str]:
    return ["    except failures:", "        pass"]


def decode_source(kind: KindSpec) -> str:
    """Return the source of ``decode(body, many=False)`` → message.

    Needs ``unpack``, ``match``, ``new``, ``Message``, ``failures``, ``careful_decode`` in view, and for each
    field of records ``rows_<field>``, which makes the record of one row.
    """
    lines = [
        "def decode(body, many=False):",
        "    try:",
        "        if match(body):",
        "            found = unpack(body, strict_map_key=False, use_list=False)",
        "            message = new(Message)",
        *(_decode_field(spec) for spec in kind.fields),
    ]
    return "\n".join(
        [*lines, "            return message", *_failure_lines(), "    return careful_decode(body, many)\n"]
    )


def _decode_field(spec: FieldSpec) -> str:
    target = f"            message.{spec.attribute} ="
    if spec.record is not None:
        return f"{target} tuple(map(rows_{spec.attribute}, found[{spec.key}]))"
    if spec.presence is Presence.ALWAYS:
        return f"{target} found[{spec.key}]"
    if spec.presence is Presence.OPTIONAL:
        return f"{target} found.get({spec.key}, {spec.default!r})"
    return f"{target} None if many else found[{spec.key}]"


def _split(kind: KindSpec) -> tuple[Sequence[FieldSpec], Sequence[FieldSpec]]:
    """Return the fields before the first that may be absent, which one literal can hold, and the others."""
    for place, spec in enumerate(kind.fields):
        if spec.presence is not Presence.ALWAYS:
            return kind.fields[:place], kind.fields[place:]
    return kind.fields, ()
