"""A run in words: what failed and how to see it again, then the count by area."""

from __future__ import annotations

from collections import Counter

from rich.console import Console
from rich.table import Table
from rich.text import Text

from protobench.contract import Contract
from protobench.judge import KNOWN_DEVIATION, CaseRecord, DeviationRecord, RunRecord

WORDS = ("pass", "fail", "inconc", "error", "not_applicable", KNOWN_DEVIATION)
SHOWN = ("fail", "error", "inconc")


def print_summary(console: Console, record: RunRecord, contract: Contract) -> None:
    """Every case that is neither passed nor out of question, then a table by area, then one line."""
    for word in SHOWN:
        for case in record.cases:
            if case.verdict == word:
                _print_case(console, case, contract)
    for entry in record.deviations or ():
        _print_deviation(console, entry)
    console.print(_table(record, contract))
    described = record.iut
    console.print(
        f"module {described.get('address')} ({described.get('nature')}, hardware id {described.get('hardware_id')}, "
        f"build {described.get('build')}) over {record.environment.get('link')}, "
        f"{record.environment.get('time')} time, {record.contract}, seed {record.seed}",
        highlight=False,
        soft_wrap=True,
    )
    counts = ", ".join(
        f"{record.count(word)} {word.replace('_', ' ')}" for word in WORDS if record.count(word)
    )
    console.print(counts or "nothing was judged", style="bold", highlight=False)
    if record.stopped:
        console.print(f"stopped {record.stopped}", highlight=False, soft_wrap=True)


def _print_case(console: Console, case: CaseRecord, contract: Contract) -> None:
    console.print(Text(f"{case.verdict.upper()} {case.id}", style="bold"), Text(f"- {case.purpose}"))
    console.print(Text(f"  {case.reason}"), soft_wrap=True)
    for clause_id in case.clauses:
        if clause_id in case.reason:
            console.print(Text(f"  {clause_id} says: {contract.clause(clause_id).text}"), soft_wrap=True)
    console.print(Text("  what passed, in ms from the start of the case (-> to the module, <- from it):"))
    for line in case.detail.splitlines():
        console.print(Text(f"  {line}"), soft_wrap=True)
    console.print(Text(f"  again: {case.replay}"), soft_wrap=True)
    console.print()


def _print_deviation(console: Console, entry: DeviationRecord) -> None:
    """One entry of the list: what came of it, and who answers for it."""
    title = f"{'WRONG IN THE LIST' if entry.stale else entry.state.replace('_', ' ').upper()} {entry.case}"
    console.print(Text(title, style="bold"), Text(f"- {entry.message}"), soft_wrap=True)
    console.print(Text(f"  listed by {entry.owner} until {entry.expires}: {entry.reason}"), soft_wrap=True)
    console.print()


def _table(record: RunRecord, contract: Contract) -> Table:
    table = Table(box=None, pad_edge=False)
    table.add_column("area")
    words = WORDS if record.deviations is not None else WORDS[:-1]
    for word in words:
        table.add_column(word.replace("_", " "), justify="right")
    counts = Counter((case.id.partition(".")[0], case.verdict) for case in record.cases)
    for area in contract.areas:
        row = [counts[area.code, word] for word in words]
        if any(row):
            table.add_row(f"{area.code} {area.title}", *(str(count) if count else "." for count in row))
    return table
