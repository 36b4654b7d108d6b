"""Checks across the files of a version: what one names, another defines, and nothing is defined twice."""

from __future__ import annotations

from collections.abc import Callable, Collection, Iterable, Iterator, Sequence
from typing import Any

from protobench.contract.condition import ConditionError, parse_condition
from protobench.contract.kinds import Field, Kind, Shape
from protobench.contract.model import REFUSAL_ENUM, Files
from protobench.contract.problems import Path, Problem
from protobench.contract.states import StateTable
from protobench.contract.tables import Chart, Step

PLAIN_ANSWERS = ("accepted", "answered", "none")


def reference_problems(files: Files) -> list[Problem]:
    """Return everything in which the files do not fit together."""
    return [problem for check in _CHECKS for problem in check(files)]


def _index(files: Files) -> Iterator[Problem]:
    wanted = {f"{name}.toml" for name in Files.__dataclass_fields__} - {"contract.toml"}
    listed = [entry.name for entry in files.contract.file]
    for index, name in enumerate(listed):
        if name not in wanted:
            yield Problem("contract.toml", ("file", index, "name"), f"{name!r} is not a file of a contract")
    for name in sorted(wanted - set(listed)):
        yield Problem("contract.toml", ("file",), f"{name} is not listed")
    about = files.contract.contract
    if about.major != files.frame.layout.version:
        rule = f"version {files.frame.layout.version} is not the contract's major {about.major}"
        yield Problem("frame.toml", ("layout", "version"), rule)
    if about.major not in about.majors_supported:
        rule = f"lacks the contract's own major {about.major}"
        yield Problem("contract.toml", ("contract", "majors_supported"), rule)


def _duplicates(files: Files) -> Iterator[Problem]:
    tables: list[tuple[str, str, Sequence[Any], tuple[str, ...]]] = [
        ("contract.toml", "file", files.contract.file, ("name",)),
        ("frame.toml", "binding", files.frame.binding, ("name",)),
        ("limits.toml", "limit", files.limits.limit, ("name",)),
        ("kinds.toml", "kind", files.kinds.kind, ("name", "code")),
        ("reasons.toml", "drop", files.reasons.drop, ("name", "number")),
        ("states.toml", "input", files.states.input, ("name",)),
        ("faults.toml", "fault", files.faults.fault, ("name", "code")),
        ("capabilities.toml", "capability", files.capabilities.capability, ("name", "number")),
        ("capabilities.toml", "item", files.capabilities.item, ("name",)),
        ("capabilities.toml", "size", files.capabilities.size, ("name",)),
        ("clauses.toml", "area", files.clauses.area, ("code",)),
        ("clauses.toml", "clause", files.clauses.clause, ("id",)),
        ("errors.toml", "error", files.errors.error, ("name",)),
        ("notes.toml", "note", files.notes.note, ("id",)),
    ]
    for file, table, rows, attributes in tables:
        for attribute in attributes:
            seen: dict[object, int] = {}
            for index, row in enumerate(rows):
                value = getattr(row, attribute)
                first = seen.setdefault(value, index)
                if first != index:
                    rule = f"{value!r} is used already, by {table}[{first}]"
                    yield Problem(file, (table, index, attribute), rule)


def _kinds(files: Files) -> Iterator[Problem]:
    capabilities = {row.name for row in files.capabilities.capability}
    kinds = {kind.name: kind for kind in files.kinds.kind}
    for index, kind in enumerate(files.kinds.kind):
        path: Path = ("kind", index)
        if kind.needs is not None and kind.needs not in capabilities:
            yield Problem("kinds.toml", (*path, "needs"), f"there is no capability {kind.needs!r}")
        if kind.answer is not None and (kind.answer not in kinds or kinds[kind.answer].class_ != "answer"):
            yield Problem("kinds.toml", (*path, "answer"), f"there is no answer {kind.answer!r}")
        found = files.frame.kind_ranges.of(kind.code)
        if found != kind.class_:
            rule = f"code 0x{kind.code:02X} lies in the range {found!r}, the kind is a {kind.class_}"
            yield Problem("kinds.toml", (*path, "code"), rule)
        for place, field in enumerate(kind.fields):
            yield from _shape(files, field, (*path, "fields", place))
    for name, record in files.kinds.record.items():
        for place, part in enumerate(record.fields):
            yield from _shape(files, part, ("record", name, "fields", place))
    if REFUSAL_ENUM in files.kinds.enum:
        rule = "the refusals of reasons.toml are this enumeration"
        yield Problem("kinds.toml", ("enum", REFUSAL_ENUM), rule)


def _shape(files: Files, shape: Shape, path: Path) -> Iterator[Problem]:
    enum = files.kinds.enum.get(shape.enum) if shape.enum else None
    if shape.enum is not None and enum is None and shape.enum != REFUSAL_ENUM:
        yield Problem("kinds.toml", (*path, "enum"), f"there is no enumeration {shape.enum!r}")
    if not isinstance(shape, Field):
        return
    if shape.record is not None and shape.record not in files.kinds.record:
        yield Problem("kinds.toml", (*path, "record"), f"there is no record {shape.record!r}")
    if enum is not None and shape.default is not None and shape.default not in enum.values.values():
        yield Problem("kinds.toml", (*path, "default"), f"{shape.enum} has no value {shape.default}")


def _reasons(files: Files) -> Iterator[Problem]:
    receipt = {field.name for kind in files.kinds.kind if kind.name == "receipt" for field in kind.fields}
    numbers: dict[str, int] = {}
    owners: dict[int, str] = {}
    rows: set[tuple[str, str | None]] = set()
    for index, row in enumerate(files.reasons.refusal):
        path: Path = ("refusal", index)
        if numbers.setdefault(row.name, row.number) != row.number:
            rule = f"{row.name} has the number {row.number} here and {numbers[row.name]} before"
            yield Problem("reasons.toml", (*path, "number"), rule)
        elif owners.setdefault(row.number, row.name) != row.name:
            rule = f"{row.number} is used already, by {owners[row.number]}"
            yield Problem("reasons.toml", (*path, "number"), rule)
        if (row.name, row.row) in rows:
            yield Problem("reasons.toml", path, f"{row.name} has a row {row.row!r} already")
        rows.add((row.name, row.row))
        for place, name in enumerate(row.carries):
            if name not in receipt:
                yield Problem("reasons.toml", (*path, "carries", place), f"a receipt has no field {name!r}")


def _faults(files: Files) -> Iterator[Problem]:
    for index, fault in enumerate(files.faults.fault):
        named = (("class", "fault_class", fault.class_), ("severity", "severity", fault.severity))
        for key, enum, value in named:
            table = files.kinds.enum.get(enum)
            if table is None or value not in table.values:
                yield Problem("faults.toml", ("fault", index, key), f"{enum} has no value {value!r}")


def _capabilities(files: Files) -> Iterator[Problem]:
    capabilities = {row.name for row in files.capabilities.capability}
    for index, item in enumerate(files.capabilities.item):
        if item.name in capabilities:
            rule = f"{item.name!r} is a capability already"
            yield Problem("capabilities.toml", ("item", index, "name"), rule)
    for index, name in enumerate(files.capabilities.profile.capabilities):
        if name not in capabilities:
            rule = f"there is no capability {name!r}"
            yield Problem("capabilities.toml", ("profile", "capabilities", index), rule)


def _clauses(files: Files) -> Iterator[Problem]:
    areas = {area.code for area in files.clauses.area}
    capabilities = files.capabilities
    known = {row.name for row in capabilities.capability} | {row.name for row in capabilities.item}
    for index, clause in enumerate(files.clauses.clause):
        path: Path = ("clause", index)
        if clause.area not in areas:
            yield Problem("clauses.toml", (*path, "area"), f"there is no area {clause.area!r}")
        if not clause.id.startswith(f"{clause.area}-"):
            rule = f"{clause.id} does not begin with its area {clause.area}"
            yield Problem("clauses.toml", (*path, "id"), rule)
        if clause.needs is not None:
            try:
                parse_condition(clause.needs, known)
            except ConditionError as error:
                yield Problem("clauses.toml", (*path, "needs"), str(error))


def _errors(files: Files) -> Iterator[Problem]:
    areas = {area.code for area in files.clauses.area}
    for index, error in enumerate(files.errors.error):
        path: Path = ("error", index, "answered_by")
        if not error.answered_by and error.open is None:
            yield Problem("errors.toml", path, f"{error.name} is neither answered nor said to be open")
        for measure, cell in error.answered_by.items():
            if measure not in files.errors.measures:
                yield Problem("errors.toml", (*path, measure), f"there is no measure {measure!r}")
            for place, area in enumerate(cell):
                if area not in areas:
                    yield Problem("errors.toml", (*path, measure, place), f"there is no area {area!r}")


def _states(files: Files) -> Iterator[Problem]:
    yield from StateTable(files.states).problems()
    displayed = _enum(files, "state")
    for index, row in enumerate(files.states.displayed):
        if row.state not in displayed:
            rule = f"there is no displayed state {row.state!r}"
            yield Problem("states.toml", ("displayed", index, "state"), rule)
    activities = _enum(files, "activity")
    for index, name in enumerate(files.states.factors.activity):
        if name not in activities:
            rule = f"the enumeration activity has no value {name!r}"
            yield Problem("states.toml", ("factors", "activity", index), rule)
    answers = {kind.name for kind in files.kinds.kind if kind.class_ == "answer"}
    answers |= {row.name for row in files.reasons.refusal} | set(PLAIN_ANSWERS)
    for index, transition in enumerate(files.states.transition):
        if transition.answer not in answers:
            rule = f"{transition.answer!r} is neither a refusal nor an answer"
            yield Problem("states.toml", ("transition", index, "answer"), rule)


def _charts(files: Files) -> Iterator[Problem]:
    kinds = {kind.name: kind for kind in files.kinds.kind}
    for index, chart in enumerate(files.notes.chart):
        for place, step in enumerate(chart.step):
            yield from _step(kinds.get(step.kind), step, chart, ("chart", index, "step", place))


def _step(kind: Kind | None, step: Step, chart: Chart, path: Path) -> Iterator[Problem]:
    if kind is None:
        yield Problem("notes.toml", (*path, "kind"), f"{chart.title}: there is no kind {step.kind!r}")
        return
    sender = "module" if kind.class_ in ("answer", "event") else "controller"
    if step.from_ != sender:
        yield Problem("notes.toml", (*path, "from"), f"{chart.title}: a {kind.name} comes from a {sender}")
    names = {field.name for field in kind.fields}
    for name in step.fields:
        if name not in names:
            rule = f"{chart.title}: {kind.name} has no field {name!r}"
            yield Problem("notes.toml", (*path, "fields", name), rule)
    needed = [field.name for field in kind.fields if field.required != "optional"]
    missing = [name for name in needed if name not in step.fields]
    if missing:
        yield Problem("notes.toml", (*path, "fields"), f"{chart.title}: {kind.name} needs {_listed(missing)}")


def _enum(files: Files, name: str) -> Collection[str]:
    table = files.kinds.enum.get(name)
    return table.values if table is not None else ()


def _listed(names: Iterable[str]) -> str:
    return ", ".join(names)


_CHECKS: tuple[Callable[[Files], Iterator[Problem]], ...] = (
    _index,
    _duplicates,
    _kinds,
    _reasons,
    _faults,
    _capabilities,
    _clauses,
    _errors,
    _states,
    _charts,
)
