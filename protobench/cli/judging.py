"""What ``protobench check`` does once its options are read."""

from __future__ import annotations

import json
from collections.abc import Mapping
from contextlib import ExitStack
from datetime import datetime
from pathlib import Path
from typing import Any

import typer
from rich.console import Console

from protobench.cli import check
from protobench.cli.cautions import CAUTIONS
from protobench.cli.page import NAME as PAGE
from protobench.cli.page import write_page
from protobench.cli.progress import RunProgress
from protobench.cli.summary import print_summary
from protobench.contract import load_contract
from protobench.evidence import ConformanceLog, build_report, junit_xml
from protobench.judge import KNOWN_DEVIATION, Failed, RunRecord
from protobench.links import BadAddress, LinkError, NoVirtualTime
from protobench.suite import run
from protobench.suite.bench import NoModule
from protobench.suite.deviations import Deviation, apply_deviations, load_deviations
from protobench.suite.files import FileError
from protobench.suite.options import RunOptions
from protobench.suite.statement import Statement, load_statement


def check_expression(level: str, only: str | None) -> None:
    """Refuse an expression that cannot be read, or that selects nothing."""
    try:
        found = run.list_cases(level, only)
    except ValueError as error:
        raise typer.BadParameter(str(error), param_hint="--only") from None
    if not found:
        raise typer.BadParameter(f"{only!r} selects no case; see --list", param_hint="--only")


def list_cases(level: str, only: str | None, *, as_json: bool) -> None:
    """Print the cases, one a line, or as JSON."""
    cases = run.list_cases(level, only)
    if as_json:
        rows = [
            {
                "id": info.id,
                "level": info.level,
                "class": info.case_class,
                "purpose": info.purpose,
                "clauses": list(info.clauses),
                "needs": info.needs,
            }
            for info in cases
        ]
        typer.echo(json.dumps(rows, indent=2))
        return
    width = max(len(info.id) for info in cases)
    for info in cases:
        needs = f" [{info.needs}]" if info.needs else ""
        typer.echo(f"{info.id:<{width}}  {info.level:<11} {info.case_class:<11} {info.purpose}{needs}")


def make_options(*, ics: Path | None, virtual: bool, **options: Any) -> RunOptions:
    """Options of the run; a statement that cannot be read ends the command."""
    statement = read_statement(ics, "--ics") if ics is not None else None
    if options["restart"] and statement is None:
        raise typer.BadParameter("--restart needs --ics with a table testing.restart", param_hint="--restart")
    return RunOptions(statement=statement, virtual=virtual or None, **options)


def read_statement(path: Path, option: str) -> Statement:
    """A conformance statement; one that cannot be read ends the command."""
    try:
        return load_statement(path, load_contract())
    except FileError as error:
        raise refused(option, error) from None


def read_deviations(path: Path | None) -> tuple[Deviation, ...] | None:
    """The list of known deviations, None without one; a list that cannot be used ends the command."""
    if path is None:
        return None
    try:
        return load_deviations(path, load_contract(), [info.id for info in run.list_cases()])
    except FileError as error:
        raise refused("--deviations", error) from None


def refused(option: str, error: FileError) -> typer.Exit:
    """Say every problem of a file that cannot be used, a line each; what is returned ends the command."""
    for problem in error.problems:
        typer.echo(f"{option}: {problem}", err=True)
    return typer.Exit(check.WRONG_USE)


def beside(record: RunRecord, deviations: tuple[Deviation, ...] | None) -> RunRecord:
    """The run beside the list of known deviations, as of today."""
    if deviations is None:
        return record
    return apply_deviations(record, deviations, datetime.now().astimezone().date())


def judge(options: RunOptions, stack: ExitStack, console: Console) -> RunRecord:
    """Run the suite; what keeps it from beginning ends the command with a message and the right status.

    A run that is interrupted comes back with what it has.
    """
    if options.attended:
        console.print(CAUTIONS, highlight=False)
    if options.restart and options.statement is not None:
        console.print(
            f"restart of the module, as {options.statement.file} says: {options.statement.restart_words}",
            highlight=False,
            soft_wrap=True,
            markup=False,
        )
    log = _open_log(options, stack)
    progress = stack.enter_context(RunProgress(console, log))
    try:
        return run.run_suite(options, progress, log)
    except (run.NeedsAttendance, run.NoRestart, BadAddress, NoVirtualTime) as error:
        message, status = str(error), check.WRONG_USE
    except (run.StatementDiffers, Failed) as error:
        message, status = str(error), check.FAILED
    except (NoModule, LinkError) as error:
        message, status = str(error), check.BENCH_FAILED
    except run.Interrupted as interrupted:
        return interrupted.record
    except KeyboardInterrupt:
        message, status = "interrupted before the first case; nothing was judged", check.INTERRUPTED
    stack.close()
    console.print(message, highlight=False, soft_wrap=True, markup=False)
    raise typer.Exit(status)


def _open_log(options: RunOptions, stack: ExitStack) -> ConformanceLog | None:
    if options.out is None:
        return None
    try:
        options.out.mkdir(parents=True, exist_ok=True)
        stream = stack.enter_context((options.out / "conformance.log").open("w", encoding="utf-8"))
    except OSError as error:
        raise typer.BadParameter(f"{options.out}: {error.strerror}", param_hint="--out") from None
    log = ConformanceLog(stream)
    contract = load_contract()
    log.header(
        contract=f"{contract.name} {contract.version}", seed=options.seed, link=options.link or "embedded"
    )
    log.header(
        times="seconds from the first frame; in real time of this machine's monotonic clock, as taken by the bench"
    )
    return log


def write_report(record: RunRecord, options: RunOptions, files: Mapping[str, Path | None]) -> dict[str, Any]:
    """Make the report and, with a folder, write it, the page and the JUnit file.

    ``files``: what the run was given, by purpose.
    """
    report = build_report(record, load_contract())
    if (out := options.out) is not None:
        (out / "report.json").write_text(json.dumps(report, indent=2) + "\n", encoding="utf-8")
        (out / "junit.xml").write_bytes(junit_xml(record))
        write_page(record, report, options, files)
    return report


def summarize(record: RunRecord, out: Path | None) -> None:
    """Print the run in words to standard output."""
    console = Console()
    print_summary(console, record, load_contract())
    if out is not None:
        console.print(
            f"report: {out}/{PAGE}, {out}/report.json, {out}/junit.xml, {out}/conformance.log",
            highlight=False,
            soft_wrap=True,
        )


def say_interrupted(record: RunRecord, out: Path | None, console: Console) -> None:
    """What an interrupted run has done and left, on standard error; its results are no results of a run."""
    report = (
        f"; partial report: {out}/{PAGE}, {out}/report.json, {out}/junit.xml, {out}/conformance.log"
        if out
        else ""
    )
    console.print(
        f"interrupted after {len(record.cases)} cases; the module has been sent a halt{report}",
        highlight=False,
        soft_wrap=True,
        markup=False,
    )


def exit_status(record: RunRecord) -> int:
    """0 to 4 or 130, as ``protobench check --help`` says."""
    if record.stopped == run.INTERRUPTED:
        return check.INTERRUPTED
    if record.count("fail") or any(entry.stale for entry in record.deviations or ()):
        return check.FAILED
    judged = record.count("pass") + record.count("inconc") + record.count(KNOWN_DEVIATION)
    if record.count("error") or record.stopped or not judged:
        return check.BENCH_FAILED
    return check.INCONCLUSIVE if record.count("inconc") else check.PASSED
