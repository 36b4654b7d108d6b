"""The report of a run as JSON values: what was judged, by which cases, and what that says of each clause."""

from __future__ import annotations

from dataclasses import asdict
from typing import Any

from protobench.contract import Contract
from protobench.judge import KNOWN_DEVIATION, NOT_APPLICABLE, CaseRecord, RunRecord, Verdict

SUMMARY = ("pass", "fail", "inconc", "error", NOT_APPLICABLE)


def build_report(record: RunRecord, contract: Contract) -> dict[str, Any]:
    """The report: contract, seed, iut, environment, summary, cases, clauses; ``stopped`` too when a run was broken off.

    A clause's verdict is the worst of the applicable cases that cover it, ``none`` when no case judged it. A known
    deviation is a fail to its clauses. Beside a list of them there is ``deviations``, with what came of each entry.
    """
    summary = SUMMARY if record.deviations is None else (*SUMMARY, KNOWN_DEVIATION)
    report: dict[str, Any] = {
        "contract": record.contract,
        "seed": record.seed,
        "iut": record.iut,
        "environment": record.environment,
        "summary": {word: record.count(word) for word in summary},
        "cases": [_case(case) for case in record.cases],
        "clauses": _clauses(record, contract),
    }
    if record.deviations is not None:
        report["deviations"] = [asdict(entry) for entry in record.deviations]
    return report if record.stopped is None else {**report, "stopped": record.stopped}


def _case(case: CaseRecord) -> dict[str, Any]:
    entry: dict[str, Any] = {
        "id": case.id,
        "level": case.level,
        "class": case.case_class,
        "purpose": case.purpose,
        "clauses": list(case.clauses),
        "verdict": case.verdict,
        "reason": case.reason,
        "duration_s": case.duration_s,
    }
    if case.broken:
        entry["broken"] = list(case.broken)
    if case.replay:
        entry |= {"detail": case.detail.splitlines(), "replay": case.replay}
    return entry


def _clauses(record: RunRecord, contract: Contract) -> list[dict[str, Any]]:
    covering: dict[str, list[CaseRecord]] = {}
    for case in record.cases:
        for clause_id in case.clauses:
            covering.setdefault(clause_id, []).append(case)
    entries = []
    for clause in contract.clauses:
        cases = covering.get(clause.id, [])
        judged = [_worth(case.verdict) for case in cases if case.verdict != NOT_APPLICABLE]
        worst = max(judged, default=Verdict.NONE)
        entries.append(
            {
                "id": clause.id,
                "level": clause.level,
                "verdict": worst.word,
                "cases": [case.id for case in cases],
            }
        )
    return entries


def _worth(verdict: str) -> Verdict:
    return Verdict.FAIL if verdict == KNOWN_DEVIATION else Verdict[verdict.upper()]
