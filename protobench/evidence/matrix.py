"""Clauses and areas of a run, as rows of tables."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from protobench.contract import Contract
from protobench.judge import NOT_APPLICABLE, CaseRecord, RunRecord

ANCHORED = ("fail", "error", "inconc", "known_deviation")


@dataclass(frozen=True, slots=True)
class AreaRow:
    """Counts of the cases of an area, by verdict, and of its clauses: judged, of how many."""

    code: str
    title: str
    counts: Mapping[str, int]
    judged: int
    clauses: int


@dataclass(frozen=True, slots=True)
class CaseMark:
    """A case in the row of a clause; ``anchor`` is empty where the page says no more of it."""

    id: str
    verdict: str
    anchor: str
    assisted: bool


@dataclass(frozen=True, slots=True)
class ClauseRow:
    """A clause; ``why`` says why no case judged it, and is empty where one did."""

    id: str
    area: str
    level: str
    binds: str
    text: str
    verdict: str
    why: str
    cases: tuple[CaseMark, ...]


def anchor(case: CaseRecord) -> str:
    """Where the page tells of a case, or empty."""
    if case.verdict in ANCHORED:
        return f"case-{case.id}"
    return "left-out" if case.verdict == NOT_APPLICABLE else ""


def clauses(
    record: RunRecord, report: Mapping[str, Any], contract: Contract, assisted: frozenset[str]
) -> list[ClauseRow]:
    """Every clause of the contract, in its order."""
    known = {case.id: case for case in record.cases}
    verdicts = {entry["id"]: (entry["verdict"], entry["cases"]) for entry in report["clauses"]}
    rows = []
    for clause in contract.clauses:
        verdict, ids = verdicts.get(clause.id, ("none", []))
        cases = [known[ident] for ident in ids if ident in known]
        marks = tuple(CaseMark(case.id, case.verdict, anchor(case), case.id in assisted) for case in cases)
        why = _why_not(clause.observable, cases) if verdict == "none" else ""
        rows.append(
            ClauseRow(clause.id, clause.area, clause.level, clause.subject, clause.text, verdict, why, marks)
        )
    return rows


def _why_not(observable: bool, cases: list[CaseRecord]) -> str:
    if cases:
        return "its cases do not apply to this module or link"
    return "no case of this run" if observable else "cannot be observed on a link"


def areas(record: RunRecord, contract: Contract) -> list[AreaRow]:
    """Areas that have a case in this run."""
    counts: dict[str, Counter[str]] = {}
    for case in record.cases:
        counts.setdefault(case.id.partition(".")[0], Counter())[case.verdict] += 1
    judged = {clause for case in record.cases if case.verdict != NOT_APPLICABLE for clause in case.clauses}
    rows = []
    for area in contract.areas:
        own = [clause.id for clause in contract.clauses if clause.area == area.code]
        if area.code in counts:
            found = sum(clause in judged for clause in own)
            rows.append(AreaRow(area.code, area.title, counts[area.code], found, len(own)))
    return rows
