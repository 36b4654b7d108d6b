"""Rules for a contract that loads: what a good contract keeps, though a program could live without it."""

from __future__ import annotations

import itertools
import re
from collections.abc import Callable, Iterator, Sequence
from pathlib import Path
from typing import get_args

from protobench.contract.kinds import Field
from protobench.contract.load import load_contract, spec_root
from protobench.contract.model import Contract
from protobench.contract.problems import ContractError, Problem
from protobench.contract.problems import Path as ItemPath
from protobench.contract.sizes import longest_body
from protobench.contract.tables import DropStage, Limit, RefusalStage
from protobench.contract.versions import compare

QUOTED = re.compile(r"`([^`]*)`")
# A field whose range is that of a limit of another name: kind, field, limit.
BOUND_BY_LIMIT = (
    ("take-lease", "duration", "lease_duration"),
    ("renew-lease", "duration", "lease_duration"),
    ("telemetry-on", "period", "telemetry_period"),
    ("telemetry-on", "duration", "telemetry_duration"),
    ("identify", "duration", "identify_duration"),
)
BODY_LISTS = ("list", "records")


def lint(version: str = "1.0", root: Path | None = None) -> list[Problem]:
    """Return every finding about a version of the contract, what keeps it from loading included."""
    try:
        contract = load_contract(version, root)
    except ContractError as error:
        return list(error.problems)
    findings = [problem for check in _CHECKS for problem in check(contract)]
    return findings + list(_reused(contract, (root or spec_root()).resolve()))


def _fields(contract: Contract) -> Iterator[Problem]:
    body = contract.frame.body
    for index, kind in enumerate(contract.kinds):
        keys = [field.key for field in kind.fields]
        for place, (low, high) in enumerate(itertools.pairwise(keys)):
            if low > high:
                rule = f"{kind.name}: key {high} stands after key {low}"
                yield Problem("kinds.toml", ("kind", index, "fields", place + 1, "key"), rule)
        for place, key in enumerate(keys):
            if not body.key_first <= key < body.private_first:
                rule = f"{kind.name}: key {key} lies outside {body.key_first}..{body.private_first - 1}"
                yield Problem("kinds.toml", ("kind", index, "fields", place, "key"), rule)
        if kind.many and any(field.name == "epoch" and field.required == "always" for field in kind.fields):
            yield from _needs_clause(contract, index, kind.name)


def _needs_clause(contract: Contract, index: int, name: str) -> Iterator[Problem]:
    """A kind to many that still names the epoch is an exception that a clause must state."""
    if not any(name in clause.text and "epoch" in clause.text for clause in contract.clauses):
        rule = f"{name} to many needs the epoch; no clause says so"
        yield Problem("kinds.toml", ("kind", index, "fields"), rule)


def _bodies(contract: Contract) -> Iterator[Problem]:
    body, size_max = contract.frame.body, contract.frame.layout.body_size_max
    for index, kind in enumerate(contract.kinds):
        longest = longest_body(contract, kind)
        if longest > size_max:
            rule = f"{kind.name}: its longest body has {longest} bytes, at most {size_max} are allowed"
            yield Problem("kinds.toml", ("kind", index), rule)
        if len(kind.fields) > body.pairs_max:
            rule = f"{kind.name}: {len(kind.fields)} fields, at most {body.pairs_max} are allowed"
            yield Problem("kinds.toml", ("kind", index), rule)
        for place, field in enumerate(kind.fields):
            yield from _bounds(contract, field, ("kind", index, "fields", place))


def _bounds(contract: Contract, field: Field, path: ItemPath) -> Iterator[Problem]:
    body = contract.frame.body
    bounds = (
        ("size", field.size, body.binary_size_max),
        ("size_max", field.size_max, body.string_size_max),
        ("items_max", field.items_max, body.items_max),
    )
    for name, value, bound in bounds:
        if value is not None and value > bound:
            yield Problem("kinds.toml", (*path, name), f"{field.name}: {name} {value} is above the body's {bound}")
    if field.type in BODY_LISTS:
        depth = 3 if field.record else 2
        if depth > body.depth_max:
            rule = f"{field.name}: nests {depth} deep, at most {body.depth_max} is allowed"
            yield Problem("kinds.toml", path, rule)
    if field.record and len(contract.records[field.record].fields) > body.items_max:
        rule = f"{field.name}: record {field.record} has more than {body.items_max} places"
        yield Problem("kinds.toml", (*path, "record"), rule)


def _field(contract: Contract, kind_name: str, field_name: str) -> tuple[ItemPath, Field] | Problem:
    """Return path and field, or the problem that there is none."""
    for index, kind in enumerate(contract.kinds):
        if kind.name != kind_name:
            continue
        for place, field in enumerate(kind.fields):
            if field.name == field_name:
                return ("kind", index, "fields", place), field
        return Problem("kinds.toml", ("kind", index, "fields"), f"{kind_name} has no field {field_name!r}")
    return Problem("kinds.toml", ("kind",), f"there is no kind {kind_name!r}")


def _limits(contract: Contract) -> Iterator[Problem]:
    named = [(kind.name, field.name) for kind in contract.kinds for field in kind.fields]
    bound = [*BOUND_BY_LIMIT, *((kind, field, field) for kind, field in named if field in contract.limits)]
    for kind_name, field_name, limit_name in bound:
        found = _field(contract, kind_name, field_name)
        limit = contract.limits.get(limit_name)
        if isinstance(found, Problem):
            yield found
        elif limit is None:
            yield Problem("limits.toml", ("limit",), f"there is no limit {limit_name!r}, for {kind_name}.{field_name}")
        elif (found[1].min, found[1].max) != (limit.min, limit.max):
            rule = f"{field_name} is {found[1].min}..{found[1].max}, limit {limit_name} {limit.min}..{limit.max}"
            yield Problem("kinds.toml", found[0], f"{kind_name}: {rule}")


def _orders(contract: Contract) -> Iterator[Problem]:
    """Rows stand in the order of their stages."""
    drops = [(row.name, row.stage) for row in contract.drops]
    refusals = [(row.name, row.stage) for row in contract.refusals]
    yield from _order("drop", drops, get_args(DropStage))
    yield from _order("refusal", refusals, get_args(RefusalStage))


def _order(table: str, rows: Sequence[tuple[str, str]], stages: Sequence[str]) -> Iterator[Problem]:
    for index, ((name, stage), (next_name, next_stage)) in enumerate(itertools.pairwise(rows)):
        if stages.index(stage) > stages.index(next_stage):
            rule = f"{next_name} (stage {next_stage}) stands after {name} (stage {stage})"
            yield Problem("reasons.toml", (table, index + 1, "stage"), rule)


def _counters(contract: Contract) -> Iterator[Problem]:
    found = _field(contract, "counters", "drops")
    last = max(drop.number for drop in contract.drops)
    if isinstance(found, Problem):
        yield found
    elif found[1].items_min != last:
        rule = f"counters.drops has at least {found[1].items_min} items, the last drop reason is number {last}"
        yield Problem("kinds.toml", found[0], rule)


def _clauses(contract: Contract) -> Iterator[Problem]:
    known = known_names(contract)
    for index, clause in enumerate(contract.clauses):
        for name in QUOTED.findall(clause.text):
            if name not in known:
                yield Problem("clauses.toml", ("clause", index, "text"), f"{clause.id}: `{name}` is no known name")
    for index, (before, after) in enumerate(itertools.pairwise(contract.clauses)):
        if before.area == after.area and before.id > after.id:
            yield Problem("clauses.toml", ("clause", index + 1, "id"), f"{after.id} stands after {before.id}")
    used = {clause.area for clause in contract.clauses}
    for index, area in enumerate(contract.areas):
        if area.code not in used:
            yield Problem("clauses.toml", ("area", index), f"area {area.code} has no clause")


def _named(contract: Contract) -> Iterator[Problem]:
    """Every drop reason, refusal and limit is asked for by a clause.

    A silent refusal has no name on the wire, and a clause asks for the answers of the state table as a whole.
    """
    texts = [clause.text for clause in contract.clauses]
    quoted = {name for text in texts for name in QUOTED.findall(text)}
    for index, drop in enumerate(contract.drops):
        if drop.name not in quoted:
            yield Problem("reasons.toml", ("drop", index), f"no clause names the drop reason {drop.name}")
    quoted |= {cell.answer for cell in contract.states.cells.values()}
    for index, row in enumerate(contract.refusals):
        if row.name not in quoted and not row.silent:
            yield Problem("reasons.toml", ("refusal", index), f"no clause names the refusal {row.name}")
    words = "\n".join(texts)
    for index, limit in enumerate(contract.limits.values()):
        if not _is_named(limit, words):
            rule = f"no clause states the limit {limit.name}, {limit.min}..{limit.max} {limit.unit}"
            yield Problem("limits.toml", ("limit", index), rule)


def _is_named(limit: Limit, words: str) -> bool:
    """Whether the limit's greatest value stands in the clauses, in its own unit, in seconds or as a power."""
    value = limit.max
    forms = [str(value)]
    if value % 1000 == 0:
        forms.append(f"{value // 1000} s")
    if value.bit_count() == 1:
        forms.append(f"2^{value.bit_length() - 1}")
    return limit.name in words or any(re.search(rf"(?<![\w.]){re.escape(form)}(?!\w)", words) for form in forms)


def _states(contract: Contract) -> Iterator[Problem]:
    for state in contract.states.unreachable:
        yield Problem("states.toml", ("transition",), f"no sequence of inputs leads to {state}")


def _errors(contract: Contract) -> Iterator[Problem]:
    used = {measure for error in contract.errors.error for measure in error.answered_by}
    for index, measure in enumerate(contract.errors.measures):
        if measure not in used:
            yield Problem("errors.toml", ("measures", index), f"{measure} answers no error")


def _reused(contract: Contract, root: Path) -> Iterator[Problem]:
    """No number, key or id of an earlier version means something else in this one."""
    own = (contract.major, contract.minor)
    for folder in sorted(root.iterdir()):
        match = re.fullmatch(r"([0-9]+)\.([0-9]+)", folder.name)
        if match is None or (int(match[1]), int(match[2])) >= own:
            continue
        try:
            earlier = load_contract(folder.name, root)
        except ContractError as error:
            yield Problem(f"../{folder.name}", (), f"cannot be loaded: {error.problems[0]}")
            continue
        for change in compare(earlier, contract).changes:
            if change.reuse:
                yield Problem(change.file, (change.item,), f"{change.what} since {earlier.version}: {change.why}")


_CHECKS: tuple[Callable[[Contract], Iterator[Problem]], ...] = (
    _fields,
    _bodies,
    _limits,
    _orders,
    _counters,
    _clauses,
    _named,
    _states,
    _errors,
)


def known_names(contract: Contract) -> frozenset[str]:
    """Every name that the contract's tables define."""
    names = set(contract.limits) | set(contract.enums) | set(contract.records) | set(contract.condition_names)
    names |= {kind.name for kind in contract.kinds} | {drop.name for drop in contract.drops}
    names |= {fault.name for fault in contract.faults} | {item.name for item in contract.states.inputs}
    names |= {error.name for error in contract.errors.error} | {size.name for size in contract.sizes}
    names |= {name for enum in contract.enums.values() for name in enum.values}
    names |= {field.name for kind in contract.kinds for field in kind.fields}
    names |= {field.name for record in contract.records.values() for field in record.fields}
    return frozenset(names)
