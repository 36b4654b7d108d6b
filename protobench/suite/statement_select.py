"""Choosing cases by the conformance statement, and saying by which of its items one was left out."""

from __future__ import annotations

from collections.abc import Collection, Mapping

from protobench.contract import Contract, parse_condition
from protobench.judge import NotApplicable
from protobench.suite.case import CaseInfo
from protobench.suite.statement import Statement

# The items of the form from which an item of a condition follows (capabilities.toml says how).
FOLLOWS_FROM: Mapping[str, tuple[str, ...]] = {
    "bonds": ("module.faces", "motions"),
    "ballistic": ("motion.*.no_return_ms",),
    "stoppable": ("motion.*.no_return_ms", "motion.*.typical_ms"),
    "holding": ("motion.*.halt_category",),
    "travel": ("motions",),
    "restart": ("capabilities",),
}


def why_not(
    info: CaseInfo, items: Collection[str], statement: Statement | None, contract: Contract
) -> str | None:
    """Why a case is not applicable to a module with these items, None when it is.

    Beside a statement the reason names the items of the form that say so.
    """
    condition = parse_condition(info.needs) if info.needs else None
    missing = condition.why_not(items) if condition is not None else None
    if statement is None:
        return missing
    if condition is None or missing is None:
        return _denied(info, statement)
    parts = [("needs", name) for name in condition.wanted if name not in items]
    parts += [("only without", name) for name in condition.unwanted if name in items]
    return "; ".join(f"{word} {name} ({_source(name, statement, contract)})" for word, name in parts)


def with_item(why: NotApplicable, statement: Statement | None) -> str:
    """Why a case found nothing to judge, with the item of the statement that says so, where one does."""
    if statement is None or why.item is None or not _stated(why.item, statement):
        return str(why)
    return f"{why} ({statement.file}: {why.item})"


def _denied(info: CaseInfo, statement: Statement) -> str | None:
    """A recommended case is left out where the supplier says that its clause is not kept."""
    denied = [clause for clause in info.clauses if clause in statement.not_kept]
    if info.level != "recommended" or not denied:
        return None
    return f"{', '.join(denied)} not kept ({statement.file}: clauses.not_kept)"


def _source(name: str, statement: Statement, contract: Contract) -> str:
    """Where it comes from that a module has, or has not, an item."""
    means = statement.testing.restart if statement.testing is not None else None
    if name == "restart" and means is not None:
        why = (
            "names an operator, whom the bench does not ask"
            if means.operator
            else "is used with --restart only"
        )
        return f"{statement.file}: testing.restart {why}"
    if name in {capability.name for capability in contract.capabilities}:
        fields = ["capabilities"] if statement.capabilities is not None else []
    elif name in FOLLOWS_FROM:
        fields = [field for field in FOLLOWS_FROM[name] if _stated(field, statement)]
    else:
        return "a matter of the link"
    if fields:
        return f"{statement.file}: {', '.join(fields)}"
    return f"by the module's description, {statement.file} does not say"


def _stated(field: str, statement: Statement) -> bool:
    table, _, name = field.partition(".")
    if not name:
        return statement.said.get(table) is not None
    if table == "motion":
        return any(name.removeprefix("*.") in stated for stated in statement.table(table).values())
    return name in statement.table(table)
