"""Writing the form of a conformance statement: empty, or filled with what a module describes."""

from __future__ import annotations

import textwrap
import typing
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import asdict
from typing import Any

from protobench.contract import Contract
from protobench.contract.base import Model
from protobench.suite.facts import Facts
from protobench.suite.statement import Clauses, Identification, Restart, Testing
from protobench.suite.statement_items import Item, item_tables, requests

WIDTH = 110
HEAD = """\
Conformance statement for {contract} {version} (ICS in the sense of ISO/IEC 9646-7).
{origin}
Every item may be left out, by a # before it; what is left out says nothing. "protobench ics review FILE"
reviews the statement, with --link also against the module; "protobench check --ics FILE" judges by it."""
EMPTY = "Take the # away from each line that you fill in."
FILLED = (
    "Filled with what the module described. It is a statement once the supplier has checked every line of it."
)
EXAMPLES: Mapping[str, str] = {"enum": '""', "bytes": '""', "list": "[]"}
EXAMPLE_OF: Mapping[type, str] = {bool: "true", int: "0", tuple: "[]"}


def write_form(contract: Contract, address: int | None = None, facts: Facts | None = None) -> str:
    """The form as TOML; with ``facts`` and ``address`` what is described is filled in, the rest is commented out."""
    return "\n".join(_lines(contract, address, facts)) + "\n"


def _lines(contract: Contract, address: int | None, facts: Facts | None) -> Iterator[str]:
    tables = item_tables(contract)
    told: dict[str, Any] = {} if facts is None else {**facts.description, "address": address}
    head = HEAD.format(
        contract=contract.name, version=contract.version, origin=EMPTY if facts is None else FILLED
    )
    yield from (f"# {line}" for line in head.splitlines())
    yield ""
    yield f'contract = "{contract.version}"'
    profile = contract.files.capabilities.profile
    yield from _entry("profile", f"{profile.name}: {profile.text}", None, f'"{profile.name}"')
    capabilities = [row.name for row in contract.capabilities]
    has = None if facts is None else [name for name in capabilities if facts.has(name)]
    yield from _entry("capabilities", f"Every capability, of: {', '.join(capabilities)}.", has, "[]")
    motions = contract.enum_values("motion")
    moves = None if facts is None else [m for m, bit in motions.items() if told["motions"] >> bit & 1]
    yield from _entry("motions", f"Every motion, of: {', '.join(motions)}.", moves, "[]")
    yield from ("", "[identification]")
    yield from _model_entries(Identification, {})
    for table in ("module", "sizes", "times"):
        yield from ("", f"[{table}]")
        yield from _item_entries(tables[table], told)
    yield from _motion_tables(contract, tables["motion"], moves, facts)
    yield from ("", "[requests]")
    yield from _request_entries(contract, has)
    yield from ("", "[clauses]")
    yield from _model_entries(Clauses, {})
    yield from ("", "# Extra information for testing (IXIT).", "[testing]")
    yield from _model_entries(Testing, {} if has is None else {"assist": "assist" in has})
    yield from ("", "# How the module is restarted from outside: one of command, line, operator.")
    yield from ("#[testing.restart]", *_model_entries(Restart, {}))


def _motion_tables(
    contract: Contract, items: tuple[Item, ...], moves: list[str] | None, facts: Facts | None
) -> Iterator[str]:
    units = [f"# {line}" for line in textwrap.wrap(contract.enums["motion"].text, WIDTH - 2)]
    if facts is None or moves is None:
        yield from ("", "# A table like this for each motion.", *units)
        yield from (f"#[motion.{next(iter(contract.enum_values('motion')))}]", *_item_entries(items, {}))
        return
    yield from ("", *units)
    for number, name in enumerate(moves):
        yield from ([""] if number else [])
        yield f"[motion.{name}]"
        if name not in facts.motions:
            yield "# The module declares this motion and did not describe it."
            continue
        yield from _item_entries(items, asdict(facts.motions[name]), comments=not number)


def _item_entries(items: Iterable[Item], told: Mapping[str, Any], *, comments: bool = True) -> Iterator[str]:
    for item in items:
        text = f"{item.text} {item.range_words[0].upper()}{item.range_words[1:]}." if comments else ""
        value = told.get(item.name) if item.described else None
        yield from _entry(item.name, text, value, EXAMPLES.get(item.type, str(max(item.low or 0, 0))))


def _model_entries(model: type[Model], told: Mapping[str, Any]) -> Iterator[str]:
    for name, field in model.model_fields.items():
        if field.description is not None:
            yield from _entry(name, field.description, told.get(name), _example(field.annotation))


def _example(annotation: Any) -> str:
    kinds = {typing.get_origin(kind) or kind for kind in typing.get_args(annotation)}
    return next((text for kind, text in EXAMPLE_OF.items() if kind in kinds), '""')


def _request_entries(contract: Contract, has: list[str] | None) -> Iterator[str]:
    for kind in requests(contract):
        if kind.needs is None:
            text, value = "Required.", True
        else:
            text, value = f"Required with the capability {kind.needs}.", has is not None and kind.needs in has
        yield from _entry(kind.name, text, None if has is None else value, "true", same_line=True)


def _entry(name: str, text: str, value: Any, example: str, *, same_line: bool = False) -> Iterator[str]:
    line = f"#{name} = {example}" if value is None else f"{name} = {_toml(value)}"
    if same_line:
        yield f"{line}  # {text}"
        return
    yield from (f"# {part}" for part in textwrap.wrap(text, WIDTH - 2))
    yield line


def _toml(value: Any) -> str:
    """A value of an item; its text is a name of the contract or hexadecimal digits, so nothing needs quoting."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, bytes):
        return f'"{value.hex()}"'
    if isinstance(value, list | tuple):
        return f"[{', '.join(map(_toml, value))}]"
    return f'"{value}"' if isinstance(value, str) else str(value)
