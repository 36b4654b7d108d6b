"""What a run of the suite can be told, and who may watch it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Protocol

from protobench.judge import CaseRecord
from protobench.links import Link
from protobench.suite.statement import Statement

LinkOpener = Callable[[], Link]


@dataclass(slots=True)
class RunOptions:
    """Options of one run.

    ``link``: link address as text, or None for the embedded emulated module in virtual time.
    ``address``: the module's unicast address, or None to find it by a probe.
    ``only``: a pytest ``-k``-like expression over case ids and areas, or None for all.
    ``statement``: what the supplier says the module has; a module that describes itself otherwise is not judged, and
    one whose statement breaks the contract is sent nothing.
    ``level``: ``required`` or ``recommended`` (which includes the required ones).
    ``attended``: someone stands by, so what can move hardware may be sent.
    ``restart``: the statement's means of restarting the module may be used; it may run a program.
    ``reads_only``: the module is asked what it is and not judged, so a physical one needs nobody beside it.
    ``opener``: opens the link instead of ``link``; the text then only names it.
    """

    link: str | None = None
    address: int | None = None
    statement: Statement | None = None
    only: str | None = None
    level: str = "required"
    seed: int = 1
    out: Path | None = None
    attended: bool = False
    virtual: bool | None = None
    restart: bool = False
    reads_only: bool = False
    opener: LinkOpener | None = None


class Observer(Protocol):
    """Told of a run's progress as it happens."""

    def selected(self, count: int) -> None:
        """``count`` cases will be judged."""

    def case_begins(self, case_id: str, index: int) -> None:
        """Case number ``index``, from 0, begins."""

    def case_ends(self, record: CaseRecord) -> None:
        """A case has its verdict."""
