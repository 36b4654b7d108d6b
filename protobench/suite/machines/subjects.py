"""The machines a module can be run against, each with what drives the module through it."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from protobench.judge import Exchange, Failed, Inconclusive
from protobench.suite.bench import Bench
from protobench.suite.machines import product
from protobench.suite.machines.compare import RESET, Tape, compare
from protobench.suite.machines.derive import derive
from protobench.suite.machines.driver import ModuleDriver
from protobench.suite.machines.mealy import Mealy, Subject
from protobench.suite.machines.product import contract_machine
from protobench.suite.machines.window import INPUTS, clause_of, window_machine
from protobench.suite.machines.window_driver import WindowDriver

WITHOUT_RESTART = (
    "without assist it is not restarted; what the postamble does not bring back, such as epoch, history and "
    "fault list, may hide a difference or carry one over from an earlier sequence"
)


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


def _window(bench: Bench, inputs: Sequence[str] = tuple(INPUTS)) -> Prepared:
    return Prepared(
        name="window",
        machine=window_machine(inputs),
        subject=WindowDriver(bench),
        clause=clause_of,
        read="read",
        start="a session that the module has never heard of, the lease given back",
        weaker="",
        outside="more than two stored receipts, several sessions at once, restarts, the numbers of moves",
    )


def _state(bench: Bench, inputs: Sequence[str] | None = None) -> Prepared:
    assist = bench.facts.has("assist")
    return Prepared(
        name="state",
        machine=contract_machine(bench.contract, bench.facts, inputs),
        subject=ModuleDriver(bench),
        clause=product.clause_of,
        read="A.status",
        start="a restart by assist" if assist else "re-initialised by the postamble",
        weaker="" if assist else WITHOUT_RESTART,
        outside="queued and stated motions, bonds, two faults at once, confirmations, starting, settings, telemetry",
    )


MACHINES: dict[str, Callable[..., Prepared]] = {"state": _state, "window": _window}


def prepare(bench: Bench, name: str, inputs: Sequence[str] | None = None) -> Prepared:
    """The machine of this name for the module behind the bench, which has begun; with these of its inputs alone.

    KeyError for another name.
    """
    return MACHINES[name](bench) if inputs is None else MACHINES[name](bench, inputs)


def expect_follows(bench: Bench, name: str, inputs: Sequence[str] | None = None) -> None:
    """Judge in a case: Failed where a derived sequence differs, Inconclusive where one does not repeat.

    The sequences find every module with at most as many states as the machine that differs from it.
    """
    prepared = prepare(bench, name, inputs)
    words = sorted(derive(prepared.machine, "HSI", 0), key=len)
    done = compare(prepared.machine, prepared.subject, words, lambda _: True)
    if done.difference is not None:
        word, found = done.difference.word, done.difference.found
        before = ", ".join(word[: max(found.at, 0)]) or "the start"
        symbol = word[found.at] if found.at != RESET else "the way back to the start"
        raise Failed(
            f"after {before}: {symbol} must bring {found.expected}; it brought {found.got}",
            clause=found.clause or prepared.clause(found.expected),
        )
    if done.unrepeated:
        raise Inconclusive(f"a difference after {', '.join(done.unrepeated[0])} did not come again")
