"""Progress on standard error: a live line on a terminal, plain lines elsewhere."""

from __future__ import annotations

from types import TracebackType
from typing import Self

from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TaskID, TextColumn, TimeElapsedColumn

from protobench.evidence import ConformanceLog
from protobench.judge import CaseRecord

QUIET = ("pass", "not_applicable")


class RunProgress:
    """Observes a run; writes begin and end of each case into the conformance log as well."""

    def __init__(self, console: Console, log: ConformanceLog | None) -> None:
        self._console = console
        self._log = log
        self._total = 0
        self._task: TaskID | None = None
        self._live = Progress(
            TextColumn("{task.description:<28}"),
            BarColumn(),
            MofNCompleteColumn(),
            TimeElapsedColumn(),
            console=console,
            transient=True,
            disable=not console.is_terminal,
        )

    def __enter__(self) -> Self:
        self._live.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._live.stop()

    def selected(self, count: int) -> None:
        self._total = count
        self._task = self._live.add_task("", total=count)
        if not self._console.is_terminal:
            self._console.print(f"{count} case{'s' if count > 1 else ''}", highlight=False)

    def case_begins(self, case_id: str, index: int) -> None:
        if self._task is not None:
            self._live.update(self._task, description=case_id, completed=index)
        if self._log is not None:
            self._log.case_begins(case_id)

    def case_ends(self, record: CaseRecord) -> None:
        if self._task is not None:
            self._live.advance(self._task)
        if self._log is not None:
            self._log.case_ends(record.id, record.verdict, record.reason)
        if record.verdict not in QUIET:
            self._console.print(f"{record.verdict:<7} {record.id}", highlight=False)
