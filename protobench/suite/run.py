"""Run the suite without pytest: for the command line and for programs."""

from __future__ import annotations

import importlib
import pkgutil

import protobench.suite as package
from protobench.contract import load_contract
from protobench.judge import RunRecord
from protobench.suite.case import LEVELS, CaseInfo, registered
from protobench.suite.options import Observer, RunOptions
from protobench.suite.port import Log
from protobench.suite.restart import NoRestart
from protobench.suite.selection import select
from protobench.suite.session import NeedsAttendance, Session, StatementDiffers

__all__ = [
    "INTERRUPTED",
    "Interrupted",
    "NeedsAttendance",
    "NoRestart",
    "StatementDiffers",
    "list_cases",
    "run_suite",
]

INTERRUPTED = "interrupted"


class Interrupted(KeyboardInterrupt):
    """Someone ended the run. ``record`` holds the cases that were judged before; the module was sent a halt."""

    def __init__(self, record: RunRecord) -> None:
        super().__init__(INTERRUPTED)
        self.record = record


def list_cases(level: str = "recommended", only: str | None = None) -> list[CaseInfo]:
    """The suite's cases in their order; ``required`` leaves the recommended ones out.

    Raises ValueError for an unknown level or an expression that cannot be read.
    """
    if level not in LEVELS:
        raise ValueError(f"level {level!r}: one of {', '.join(LEVELS)}")
    for module in pkgutil.iter_modules(package.__path__):
        if module.name.startswith("test_"):
            importlib.import_module(f"{package.__name__}.{module.name}")
    areas = [area.code for area in load_contract().areas]
    cases = sorted(registered().values(), key=lambda info: areas.index(info.area))
    return select([info for info in cases if level == "recommended" or info.level == "required"], only)


def run_suite(options: RunOptions, observer: Observer | None = None, log: Log | None = None) -> RunRecord:
    """Judge a module by the selected cases.

    Raises NeedsAttendance, NoRestart, StatementDiffers, NoModule, LinkError, ContractError before the first case. A
    run that cannot go on keeps what it has and says why in ``stopped``. When it is interrupted the module is sent a
    halt, and Interrupted is raised with what it has.
    """
    selected = list_cases(options.level, options.only)
    with Session(options, log) as session:
        record = session.record()
        try:
            _judge(session, selected, record, observer)
        except KeyboardInterrupt:
            record.stopped = INTERRUPTED
            raise Interrupted(record) from None
    return record


def _judge(session: Session, selected: list[CaseInfo], record: RunRecord, observer: Observer | None) -> None:
    if observer is not None:
        observer.selected(len(selected))
    for index, info in enumerate(selected):
        if observer is not None:
            observer.case_begins(info.id, index)
        try:
            judged = session.judge(info)
        except Exception as error:  # noqa: BLE001 - the far end cannot be opened again; its kind does not matter
            record.stopped = f"after {index} cases, in {info.id}: {error}"
            break
        record.cases.append(judged)
        if observer is not None:
            observer.case_ends(judged)
