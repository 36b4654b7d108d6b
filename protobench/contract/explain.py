"""Everything the contract says about one name or id, as data for whoever prints it."""

from __future__ import annotations

import difflib
import functools
import re
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass

from protobench.contract.kinds import Field, Shape
from protobench.contract.model import REFUSAL_ENUM, Contract
from protobench.contract.tables import Clause


@dataclass(frozen=True, slots=True)
class Entry:
    """One meaning of a name.

    ``what``: clause, message kind, refusal, ...; ``facts``: label and text, in order; ``related``: ids of the
    clauses that name it.
    """

    what: str
    name: str
    text: str
    facts: tuple[tuple[str, str], ...]
    related: tuple[str, ...] = ()

    def lines(self) -> list[str]:
        """The entry as plain text, a line for each fact."""
        lines = [f"{self.what} {self.name}", f"  {' '.join(self.text.split())}"]
        lines += [f"  {label}: {' '.join(text.split())}" for label, text in self.facts]
        if self.related:
            lines.append(f"  clauses: {', '.join(self.related)}")
        return lines


class UnknownName(KeyError):  # noqa: N818 - says what it is
    """The contract has nothing of this name. ``near``: names that look like it."""

    def __init__(self, name: str, near: list[str]) -> None:
        hint = f"; there is {', '.join(near)}" if near else ""
        super().__init__(f"the contract has nothing called {name!r}{hint}")
        self.name = name
        self.near = near

    def __str__(self) -> str:
        return str(self.args[0])


def explain(contract: Contract, name: str) -> tuple[Entry, ...]:
    """Return every meaning of a name: clause id, area, kind, field, refusal, drop reason, fault, limit, capability,
    item, input, enumeration. Raises UnknownName, a KeyError, that tells the names nearest to it.
    """
    entries = _entries(contract)
    if name in entries:
        return entries[name]
    raise UnknownName(name, difflib.get_close_matches(name, list(entries), n=3))


def all_names(contract: Contract) -> list[str]:
    """Return every name that ``explain`` takes, once each, sorted."""
    return sorted(_entries(contract))


@functools.lru_cache(maxsize=4)
def _entries(contract: Contract) -> Mapping[str, tuple[Entry, ...]]:
    found: dict[str, tuple[Entry, ...]] = {}
    for section in _SECTIONS:
        for entry in section(contract):
            found[entry.name] = (*found.get(entry.name, ()), entry)
    return found


# ---------------------------------------------------------------- sections


def _clauses(contract: Contract) -> Iterator[Entry]:
    titles = {area.code: area.title for area in contract.areas}
    for clause in contract.clauses:
        facts = [
            ("area", f"{clause.area}, {titles[clause.area]}"),
            ("level", clause.level),
            ("binds", f"the {clause.subject}"),
            ("observable", "yes" if clause.observable else "no, so it has no case"),
        ]
        if clause.needs:
            facts.append(("applies with", clause.needs))
        if clause.reason:
            facts.append(("reason", clause.reason))
        yield Entry("clause", clause.id, clause.text, tuple(facts))


def _areas(contract: Contract) -> Iterator[Entry]:
    for area in contract.areas:
        clauses = [clause for clause in contract.clauses if clause.area == area.code]
        yield Entry("area", area.code, area.title, (), tuple(clause.id for clause in clauses))


def _kinds(contract: Contract) -> Iterator[Entry]:
    for kind in contract.kinds:
        facts = [("code", f"0x{kind.code:02X}"), ("class", kind.class_)]
        if kind.is_request:
            facts += [("answer", kind.answer or ""), ("to many", "yes" if kind.many else "no")]
        if kind.fence:
            facts.append(("fence", kind.fence))
        if kind.needs:
            facts.append(("needs", kind.needs))
        facts += [(f"key {field.key}", f"{field.name}: {describe_field(contract, field)}") for field in kind.fields]
        yield Entry("message kind", kind.name, kind.text, tuple(facts), _naming(contract, kind.name))


def _fields(contract: Contract) -> Iterator[Entry]:
    for kind in contract.kinds:
        for field in kind.fields:
            facts = (("key", str(field.key)), ("type", describe_field(contract, field)))
            yield Entry(f"field of {kind.name}", field.name, field.text, facts)


def _refusals(contract: Contract) -> Iterator[Entry]:
    for place, row in enumerate(contract.refusals, 1):
        facts = [
            ("number", str(row.number)),
            ("judged", f"row {place} of {len(contract.refusals)}, stage {row.stage}"),
            ("aloud", "no, counted in silent_refusals" if row.silent else "yes"),
        ]
        if row.carries:
            facts.append(("carries", ", ".join(row.carries)))
        what = f"refusal ({row.row})" if row.row else "refusal"
        yield Entry(what, row.name, row.text, tuple(facts), _naming(contract, row.name))


def _drops(contract: Contract) -> Iterator[Entry]:
    for place, drop in enumerate(contract.drops, 1):
        facts = (
            ("number", str(drop.number)),
            ("checked", f"row {place} of {len(contract.drops)}, stage {drop.stage}"),
        )
        yield Entry("drop reason", drop.name, drop.text, facts, _naming(contract, drop.name))


def _faults(contract: Contract) -> Iterator[Entry]:
    for fault in contract.faults:
        facts = (
            ("code", str(fault.code)),
            ("class", fault.class_),
            ("severity", fault.severity),
            ("unit of its value", fault.value_unit),
        )
        yield Entry("fault", fault.name, fault.text, facts, _naming(contract, fault.name))


def _limits(contract: Contract) -> Iterator[Entry]:
    for limit in contract.limits.values():
        value = str(limit.value) if limit.is_fixed else f"{limit.min}..{limit.max}"
        facts = (("value", value if limit.unit == "1" else f"{value} {limit.unit}"), ("reason", limit.reason))
        yield Entry("limit", limit.name, limit.text, facts, _naming(contract, limit.name))


def _capabilities(contract: Contract) -> Iterator[Entry]:
    needing = [(kind.needs, kind.name) for kind in contract.kinds]
    for capability in contract.capabilities:
        kinds = [name for needs, name in needing if needs == capability.name]
        facts = [("bit", str(capability.number))]
        if kinds:
            facts.append(("kinds that need it", ", ".join(kinds)))
        yield Entry("capability", capability.name, capability.text, tuple(facts), _needing(contract, capability.name))
    for item in contract.items:
        yield Entry("item", item.name, item.text, (), _needing(contract, item.name))


def _inputs(contract: Contract) -> Iterator[Entry]:
    for item in contract.states.inputs:
        answers: dict[str, int] = {}
        for state in contract.states.states:
            answer = contract.states.cell(state, item.name).answer
            answers[answer] = answers.get(answer, 0) + 1
        told = [f"{answer} in {count} states" for answer, count in answers.items()]
        facts = (("class", item.class_), ("answers", "; ".join(told)))
        yield Entry("input of the state table", item.name, item.text, facts)


def _enumerations(contract: Contract) -> Iterator[Entry]:
    for name, enum in contract.enums.items():
        facts = tuple((str(number), value) for value, number in enum.values.items())
        yield Entry("enumeration", name, enum.text, facts)


def _values(contract: Contract) -> Iterator[Entry]:
    for name, enum in contract.enums.items():
        if name == REFUSAL_ENUM:
            continue
        for value, number in enum.values.items():
            yield Entry(f"value of {name}", value, enum.text, (("number", str(number)),))


_SECTIONS: tuple[Callable[[Contract], Iterator[Entry]], ...] = (
    _clauses,
    _areas,
    _kinds,
    _refusals,
    _drops,
    _faults,
    _limits,
    _capabilities,
    _inputs,
    _enumerations,
    _values,
    _fields,
)

# ---------------------------------------------------------------- words


def describe_shape(contract: Contract, shape: Shape) -> str:
    """Return type and range of a record's place in words."""
    if shape.enum is not None:
        names = [f"{name} {number}" for name, number in contract.enum_values(shape.enum).items()]
        return f"one of {', '.join(names)}" if len(names) <= 8 else f"one of {shape.enum}"
    if shape.min is None or shape.max is None:
        return shape.type
    unit = "" if shape.unit in (None, "1") else f" {shape.unit}"
    return f"{shape.type} {shape.min}..{shape.max}{unit}"


def describe_field(contract: Contract, field: Field) -> str:
    """Return type, range and presence of a field in words."""
    return f"{_type(contract, field)}, {_presence(field)}"


def _type(contract: Contract, field: Field) -> str:
    if field.type == "bytes":
        return f"{field.size} bytes"
    if field.type == "text":
        return f"text of at most {field.size_max} characters"
    if field.type == "bool":
        return "boolean"
    if field.type == "list":
        return f"list of {field.items_min} to {field.items_max} integers {field.min}..{field.max}"
    if field.record is not None:
        places = ", ".join(place.name for place in contract.records[field.record].fields)
        return f"list of at most {field.items_max} {field.record} records ({places})"
    return describe_shape(contract, field)


def _presence(field: Field) -> str:
    if field.required == "always":
        return "required"
    if field.required == "unicast":
        return "required when unicast, not examined to many"
    return "optional" if field.default is None else f"optional, default {str(field.default).lower()}"


def _naming(contract: Contract, name: str) -> tuple[str, ...]:
    """Clauses that use a name as a word of its own."""
    pattern = re.compile(rf"(?<![\w-]){re.escape(name)}(?![\w-])")
    return tuple(clause.id for clause in contract.clauses if pattern.search(clause.text))


def _needing(contract: Contract, name: str) -> tuple[str, ...]:
    return tuple(clause.id for clause in contract.clauses if name in _words(clause))


def _words(clause: Clause) -> list[str]:
    return (clause.needs or "").split()
