"""The machines a module can be run against, each with what drives the module through it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from protobench.judge import Exchange
from protobench.suite.bench import Bench
from protobench.suite.machines.compare import Tape
from protobench.suite.machines.mealy import Mealy, Subject
from protobench.suite.machines.window import clause_of, window_machine
from protobench.suite.machines.window_driver import WindowDriver


@dataclass(frozen=True, slots=True)
class Prepared:
    """A machine and a module that is to follow it.

    ``clause``: the clause that predicts an output; ``read``: an input that moves nothing; ``start``: how the module
    comes back to its start; ``weaker``: what a pass says less for it, empty for nothing; ``outside``: what the machine
    leaves out.
    """

    name: str
    machine: Mealy
    subject: Subject
    clause: Callable[[str], str]
    read: str
    start: str
    weaker: str
    outside: str


class PortTape(Tape):
    """Keeps what passed since a sequence began. The port forgets the one before, so that no run outgrows the memory."""

    def __init__(self, bench: Bench) -> None:
        self._port = bench.port

    def begin(self) -> None:
        self._port.wait_ms(0)
        self._port.begin_case()

    def taken(self) -> tuple[Exchange, ...]:
        return tuple(self._port.exchange())


def _window(bench: Bench) -> Prepared:
    return Prepared(
        name="window",
        machine=window_machine(),
        subject=WindowDriver(bench),
        clause=clause_of,
        read="read",
        start="a session that the module has never heard of, the lease given back",
        weaker="",
        outside="more than two stored receipts, several sessions at once, restarts, the numbers of moves",
    )


MACHINES: dict[str, Callable[[Bench], Prepared]] = {"window": _window}


def prepare(bench: Bench, name: str) -> Prepared:
    """The machine of this name for the module behind the bench; the bench has begun. KeyError for another name."""
    return MACHINES[name](bench)
