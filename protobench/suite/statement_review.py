"""Reviewing a conformance statement: by itself against the contract, and against what the module tells of itself.

The first is the static review of ISO/IEC 9646, done before anything is sent; the second the dynamic one.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import asdict, dataclass
from typing import Any

from protobench.contract import Contract, parse_condition
from protobench.contract.tables import Clause
from protobench.suite.facts import BONDING, Facts
from protobench.suite.statement import Statement
from protobench.suite.statement_items import MOTION_CLAUSE, TRUE_CLAUSE, Item, item_tables, requests

CAPABILITY_SIZES = {"queue": "queue", "schedule": "scheduled", "groups": "groups"}
UNSUPPORTED_CLAUSE = "DSC-04"


@dataclass(frozen=True, slots=True)
class Finding:
    """One thing that is wrong. ``field``: path in the file; ``value``: what stands there; ``clause`` may be empty."""

    field: str
    value: Any
    rule: str
    clause: str

    def __str__(self) -> str:
        value = "" if self.value is None else f" = {_shown(self.value)}"
        return f"{self.field}{value}: {self.rule}" + (f" ({self.clause})" if self.clause else "")

    def json(self) -> dict[str, Any]:
        """As JSON values."""
        return asdict(self)


def review(statement: Statement, contract: Contract) -> list[Finding]:
    """Static review: everything in the statement that the contract, or another item, does not allow."""
    return [finding for rule in _RULES for finding in rule(statement, contract)]


def compare(statement: Statement, contract: Contract, address: int, facts: Facts) -> list[Finding]:
    """Dynamic review: every stated item that the module describes otherwise."""
    description = facts.description
    numbers = {capability.name: capability.number for capability in contract.capabilities}
    motions = dict(contract.enum_values("motion"))
    found = [
        *_listed("capabilities", "capability", statement.capabilities, _names(numbers, description["capabilities"])),
        *_listed("motions", "motion", statement.motions, _names(motions, description["motions"])),
    ]  # fmt: skip
    if statement.testing is not None and statement.testing.assist not in (None, facts.has("assist")):
        told = "described" if facts.has("assist") else "not described"
        found.append(
            Finding(
                "testing.assist", statement.testing.assist, f"the capability assist is {told}", TRUE_CLAUSE
            )
        )
    tables = item_tables(contract)
    told_of_module = {**description, "address": address}
    for table in ("module", "sizes", "times"):
        found += _differ(table, tables[table], statement.table(table), told_of_module)
    for name, stated in statement.table("motion").items():
        if name not in _names(motions, description["motions"]):
            if statement.motions is None:
                found.append(
                    Finding(f"motion.{name}", None, "the module describes no such motion", TRUE_CLAUSE)
                )
        elif name not in facts.motions:
            found.append(
                Finding(
                    f"motion.{name}", None, "the module declares it and does not describe it", MOTION_CLAUSE
                )
            )
        else:
            found += _differ(f"motion.{name}", tables["motion"], stated, asdict(facts.motions[name]))
    return found


def _names(numbers: Mapping[str, int], bits: int) -> set[str]:
    return {name for name, number in numbers.items() if bits >> number & 1}


def _listed(field: str, what: str, stated: tuple[str, ...] | None, told: set[str]) -> Iterator[Finding]:
    if stated is None:
        return
    for name in sorted(set(stated) - told):
        yield Finding(field, None, f"{what} {name} is stated and not described", TRUE_CLAUSE)
    for name in sorted(told - set(stated)):
        yield Finding(field, None, f"{what} {name} is described and not stated", TRUE_CLAUSE)


def _differ(
    table: str, items: Iterable[Item], stated: Mapping[str, Any], told: Mapping[str, Any]
) -> Iterator[Finding]:
    for item in items:
        if item.described and item.name in stated:
            value, described = stated[item.name], told[item.name]
            if _plain(value) != _plain(described):
                rule = f"the module describes {_shown(_plain(described))}"
                yield Finding(f"{table}.{item.name}", value, rule, item.clause)


def _plain(value: Any) -> Any:
    """A value as it can be compared: hexadecimal digits for bytes and for text, lists for tuples."""
    if isinstance(value, bytes):
        return value.hex()
    return list(value) if isinstance(value, tuple) else value.lower() if isinstance(value, str) else value


def _shown(value: Any) -> str:
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, str):
        return f'"{value}"'
    return str(list(value)) if isinstance(value, tuple) else str(value)


# ------------------------------------------------------------ rules of the static review


def _version(statement: Statement, contract: Contract) -> Iterator[Finding]:
    stated = statement.said.get("contract")
    if stated not in (None, contract.version):
        yield Finding("contract", stated, f"this is a bench for version {contract.version}", "")


def _profile(statement: Statement, contract: Contract) -> Iterator[Finding]:
    profile, stated = contract.files.capabilities.profile, statement.said.get("profile")
    if stated is None:
        return
    if stated != profile.name:
        yield Finding("profile", stated, f"the contract has the profile {profile.name!r} only", "")
        return
    for name in sorted(set(statement.capabilities or ()) - set(profile.capabilities)):
        yield Finding("profile", stated, f"contradicts capabilities, which has {name}: {profile.text}", "")


def _lists(statement: Statement, contract: Contract) -> Iterator[Finding]:  # noqa: ARG001 - all rules are called alike
    for field in ("capabilities", "motions"):
        names = statement.said.get(field) or ()
        for name in sorted({name for name in names if names.count(name) > 1}):
            yield Finding(field, None, f"{name} is named twice", "")
    if statement.motions == ():
        yield Finding("motions", (), "a module has at least one motion", TRUE_CLAUSE)
    if statement.motions is not None:
        for name in statement.table("motion"):
            if name not in statement.motions:
                yield Finding(
                    f"motion.{name}", None, f"contradicts motions, which has no {name}", TRUE_CLAUSE
                )


def _ranges(statement: Statement, contract: Contract) -> Iterator[Finding]:
    tables = item_tables(contract)
    places = [(table, table, statement.table(table)) for table in ("module", "sizes", "times")]
    places += [("motion", f"motion.{name}", stated) for name, stated in statement.table("motion").items()]
    for table, place, stated in places:
        for item in tables[table]:
            if item.name in stated and not _in_range(item, stated[item.name]):
                limit = f", the limit {item.limit}" if item.limit else ""
                rule = f"must be {item.range_words}{limit}"
                yield Finding(f"{place}.{item.name}", stated[item.name], rule, item.clause)


def _in_range(item: Item, value: Any) -> bool:
    if item.type == "enum":
        return value in item.values
    if item.type == "bytes":
        return re.fullmatch(f"[0-9A-Fa-f]{{{2 * (item.size or 0)}}}", value) is not None
    if item.type == "list":
        return len(value) <= (item.size or 0) and all(_between(item, number) for number in value)
    return _between(item, value)


def _between(item: Item, number: int) -> bool:
    return (item.low is None or item.low <= number) and (item.high is None or number <= item.high)


def _identity(statement: Statement, contract: Contract) -> Iterator[Finding]:
    module = statement.table("module")
    majors, minor, hardware_id = (module.get(name) for name in ("majors", "minor", "hardware_id"))
    if majors is not None:
        if contract.major not in majors:
            yield Finding("module.majors", majors, f"major {contract.major} is required", TRUE_CLAUSE)
        if list(majors) != sorted(set(majors)):
            yield Finding("module.majors", majors, "must ascend", TRUE_CLAUSE)
    if minor not in (None, contract.minor):
        yield Finding("module.minor", minor, f"this contract is {contract.version}", TRUE_CLAUSE)
    if hardware_id is not None and not hardware_id.strip("0"):
        yield Finding("module.hardware_id", hardware_id, "zeros are not unique", TRUE_CLAUSE)


def _sizes(statement: Statement, contract: Contract) -> Iterator[Finding]:  # noqa: ARG001
    if statement.capabilities is None:
        return
    for capability, name in CAPABILITY_SIZES.items():
        size = statement.table("sizes").get(name)
        if size is not None and bool(size) != (capability in statement.capabilities):
            has = "has" if capability in statement.capabilities else "does not have"
            rule = f"contradicts capabilities, which {has} {capability}"
            yield Finding(f"sizes.{name}", size, rule, TRUE_CLAUSE)


def _times(statement: Statement, contract: Contract) -> Iterator[Finding]:  # noqa: ARG001
    turnaround_us, receipt_ms = (
        statement.table("times").get(name) for name in ("turnaround_us", "receipt_ms")
    )
    if turnaround_us is not None and receipt_ms is not None and turnaround_us > 1000 * receipt_ms:
        rule = f"contradicts receipt_ms = {receipt_ms}: no answer can come in time"
        yield Finding("times.turnaround_us", turnaround_us, rule, TRUE_CLAUSE)


def _motions(statement: Statement, contract: Contract) -> Iterator[Finding]:  # noqa: ARG001
    for name, stated in statement.table("motion").items():
        for low, high in (
            ("magnitude_min", "magnitude_max"), ("typical_ms", "longest_ms"), ("no_return_ms", "longest_ms"),
        ):  # fmt: skip
            if low in stated and high in stated and stated[low] > stated[high]:
                rule = f"contradicts {high} = {stated[high]}: it is more"
                yield Finding(f"motion.{name}.{low}", stated[low], rule, MOTION_CLAUSE)
        for end in ("magnitude_min", "magnitude_max"):
            if name in BONDING and stated.get(end):
                rule = f"{name} has no magnitude; it must be 0"
                yield Finding(f"motion.{name}.{end}", stated[end], rule, MOTION_CLAUSE)


def _denied(statement: Statement, contract: Contract) -> Iterator[Finding]:
    capabilities = statement.capabilities
    for kind in requests(contract):
        stated = statement.table("requests").get(kind.name)
        if stated is None:
            continue
        if kind.needs is None:
            if not stated:
                yield Finding(f"requests.{kind.name}", stated, "is required of every module", "")
        elif capabilities is not None and stated != (kind.needs in capabilities):
            has = "has" if kind.needs in capabilities else "does not have"
            rule = f"contradicts capabilities, which {has} {kind.needs}"
            yield Finding(f"requests.{kind.name}", stated, rule, UNSUPPORTED_CLAUSE)
    for clause_id in statement.not_kept:
        clause = contract.clause(clause_id)
        if (
            clause.level == "required"
            and clause.subject == "module"
            and _applies(clause, contract, capabilities)
        ):
            yield Finding("clauses.not_kept", None, f"{clause_id} is required: {clause.text}", clause_id)


def _applies(clause: Clause, contract: Contract, stated: tuple[str, ...] | None) -> bool:
    """Whether a clause may apply: no stated capability, or missing one, keeps it from applying."""
    if clause.needs is None or stated is None:
        return True
    condition = parse_condition(clause.needs)
    missing = {capability.name for capability in contract.capabilities} - set(stated)
    return not missing & set(condition.wanted) and not set(stated) & set(condition.unwanted)


def _assist(statement: Statement, contract: Contract) -> Iterator[Finding]:  # noqa: ARG001
    built_in = statement.testing.assist if statement.testing is not None else None
    if None not in (built_in, statement.capabilities) and built_in != (
        "assist" in (statement.capabilities or ())
    ):
        has = "does not have" if built_in else "has"
        yield Finding(
            "testing.assist", built_in, f"contradicts capabilities, which {has} assist", TRUE_CLAUSE
        )


_RULES: tuple[Callable[[Statement, Contract], Iterator[Finding]], ...] = (
    _version, _profile, _lists, _ranges, _identity, _sizes, _times, _motions, _denied, _assist,
)  # fmt: skip
