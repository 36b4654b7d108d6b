"""Known deviations: failures that a team expects, each with an owner and a date, in TOML.

[[deviation]]
case = "HLT.not-included"    # the case that fails
clause = "ADR-01"            # the clause that its failure names; without it any failure of the case is meant
reason = "Group table is cleared too late; fixed in the next build."
owner = "firmware team"
expires = 2027-01-31         # the last day on which the failure is expected
"""

from __future__ import annotations

import dataclasses
from collections.abc import Collection, Sequence
from datetime import date
from pathlib import Path

from protobench.contract import Contract
from protobench.contract.base import Model, Text
from protobench.contract.problems import Problem
from protobench.judge import KNOWN_DEVIATION, NOT_APPLICABLE, CaseRecord, DeviationRecord, RunRecord
from protobench.suite.files import FileError, near, read_toml

FIELD = "deviation"


class Deviation(Model):
    """One expected failure."""

    case: Text
    clause: Text | None = None
    reason: Text
    owner: Text
    expires: date


class DeviationsFile(Model):
    """A file of them."""

    deviation: tuple[Deviation, ...]


def load_deviations(path: Path, contract: Contract, cases: Collection[str]) -> tuple[Deviation, ...]:
    """Read a list of known deviations; ``cases`` are all ids. Raises FileError with all that is wrong."""
    deviations = read_toml(path, DeviationsFile).deviation
    problems = []
    for index, entry in enumerate(deviations):
        if entry.case not in cases:
            rule = (
                f"{entry.case!r} is no case{near(entry.case, cases, '; protobench check --list names all')}"
            )
            problems.append(Problem(str(path), (FIELD, index, "case"), rule))
        first = next(place for place, other in enumerate(deviations) if other.case == entry.case)
        if first != index:
            rule = f"{entry.case!r} is listed already, in {FIELD}[{first}]; a case is listed once"
            problems.append(Problem(str(path), (FIELD, index, "case"), rule))
        clauses = [clause.id for clause in contract.clauses]
        if entry.clause is not None and entry.clause not in clauses:
            hint = near(entry.clause, clauses, "; protobench contract show has all")
            rule = f"{entry.clause!r} is no clause of the contract{hint}"
            problems.append(Problem(str(path), (FIELD, index, "clause"), rule))
    if problems:
        raise FileError(problems)
    return deviations


def apply_deviations(record: RunRecord, deviations: Sequence[Deviation], today: date) -> RunRecord:
    """The run as it stands beside the list; the record that came in is left as it is.

    A case that fails as listed, on a day that is not past the entry's, gets the verdict ``known_deviation``. Every
    entry becomes a DeviationRecord, which says what came of it.
    """
    cases = {case.id: case for case in record.cases}
    judged = [_judge(entry, cases.get(entry.case), today) for entry in deviations]
    known = {entry.case for entry in judged if entry.state == "known"}
    return dataclasses.replace(
        record,
        cases=[
            dataclasses.replace(case, verdict=KNOWN_DEVIATION) if case.id in known else case
            for case in record.cases
        ],
        deviations=judged,
    )


def _judge(entry: Deviation, case: CaseRecord | None, today: date) -> DeviationRecord:
    state, message = _state(entry, case, today)
    return DeviationRecord(
        case=entry.case,
        clause=entry.clause,
        reason=entry.reason,
        owner=entry.owner,
        expires=entry.expires.isoformat(),
        state=state,
        message=message,
    )


def _state(entry: Deviation, case: CaseRecord | None, today: date) -> tuple[str, str]:
    if case is None:
        return "not_judged", "the case was not judged in this run"
    if today > entry.expires:
        now = "still fails" if case.verdict == "fail" else f"is now {case.verdict.replace('_', ' ')}"
        return (
            "expired",
            f"expired on {entry.expires}; the case {now}; mend the module, or agree on a new date",
        )
    if case.verdict == "pass":
        return "passed", "the case passes; take the entry out of the list"
    if case.verdict == NOT_APPLICABLE:
        return NOT_APPLICABLE, f"the case is not applicable ({case.reason}); take the entry out of the list"
    if case.verdict != "fail":
        return "unclear", f"the case is {case.verdict}: {case.reason}"
    others = sorted({clause or "no clause" for clause in case.broken} - {entry.clause})
    if entry.clause is None or (case.broken and not others):
        return "known", case.reason
    if entry.clause in case.broken:
        return (
            "other",
            f"the case fails by {entry.clause}, as listed, and by {', '.join(others)}, which is not",
        )
    return "other", f"the case fails by {', '.join(others)}, the list says {entry.clause}: {case.reason}"
