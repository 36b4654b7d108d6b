"""The judge: every world that the frames so far leave possible, and what broke when none is left."""

from __future__ import annotations

from dataclasses import dataclass

from protobench.contract import Contract, State
from protobench.suite.facts import Facts
from protobench.suite.language import Language
from protobench.suite.model.answers import Answers
from protobench.suite.model.course import MS, Course
from protobench.suite.model.history import History
from protobench.suite.model.request import Reader, Request
from protobench.suite.model.requests import Requests
from protobench.suite.model.verdicts import Verdicts
from protobench.suite.model.world import World
from protobench.suite.watch import Violation
from protobench.wire import Codec, load_codec

WORLDS_MAX = 600
VIOLATIONS_KEPT = 20


@dataclass(slots=True)
class Pending:
    """A unicast request whose answer is still to come.

    ``place``: counts requests. ``alone``: nothing was sent after it. ``optional``: it may have been dropped.
    """

    place: int
    request: Request
    time_ns: int
    ordered: bool = True
    alone: bool = True
    copied: bool = False
    optional: bool = False


class Model:
    """Runs beside the module: give it every frame with its time, and read ``violations``.

    It begins to judge at the first status-report that shows a module at rest without a lease, and is ``lost`` where
    what follows is not modelled (a restart, a preset, a fault that arises by itself) until the next such report.
    ``late_ns``: how much later than it was something may seem to the bench.
    """

    def __init__(
        self, contract: Contract, facts: Facts, address: int, *, late_ns: int = 0, codec: Codec | None = None
    ) -> None:
        self.contract = contract
        self.facts = facts
        self.address = address
        self.late_ns = late_ns
        self.language = Language(contract, codec or load_codec(contract))
        self.reader = Reader(contract, self.language)
        self.course = Course(contract, facts, late_ns)
        self.verdicts = Verdicts(contract, facts, self.course, self.clock_at)
        self.violations: list[Violation] = []
        self._requests = Requests(self)
        self._answers = Answers(self)
        self.begin()

    def begin(self) -> None:
        """Forget what was; wait for a report to begin from."""
        description = self.facts.description
        window = self.contract.limit("number_window").max
        self.history = History(description.get("sessions", 4), description.get("numbers", 8), window)
        self.worlds: set[World] | None = None
        self.pending: list[Pending] = []
        self.many: dict[tuple[int, int, int], tuple[str, int]] = {}
        self.events: dict[int, tuple[int, int, int]] = {}
        self.confirmed: dict[int, int] = {}
        self.telemetry: dict[tuple[int, int, int], int] = {}
        self.restart_asked = True
        self.unjudged: set[tuple[int, int, int]] = set()
        self.asking: set[tuple[int, int]] = set()
        self.places = 0
        self.now = 0
        self._clock: tuple[int, int, int] | None = None

    @property
    def lost(self) -> bool:
        return self.worlds is None

    def lose(self) -> None:
        """Judge no more until the next report to begin from."""
        self.worlds = None
        self.unjudged |= {pending.request.key for pending in self.pending}
        self.pending.clear()
        self.restart_asked = True

    def violate(self, clause: str, reason: str) -> None:
        """Note a violation; after it nothing is known."""
        if len(self.violations) < VIOLATIONS_KEPT:
            self.violations.append(Violation(clause, reason))
        self.lose()

    def restarting(self) -> None:
        """A restart was asked for: what was known is gone."""
        self.begin()

    # ------------------------------------------------------------ frames

    def sent(self, data: bytes, time_ns: int) -> None:
        """A bare frame was sent; ``time_ns`` of its last byte."""
        self.advance(time_ns, ahead_ns=self.late_ns)  # more may happen before it arrives
        self._requests.sent(data)
        self._overdue()

    def received(self, data: bytes, time_ns: int) -> None:
        """A bare frame of the module came; ``time_ns`` of its first byte."""
        self.advance(time_ns)
        self._answers.received(data)

    def quiet(self, time_ns: int) -> None:
        """Nothing came up to this instant: all that was owed by now must be there."""
        self.advance(time_ns)
        self._overdue()

    # ------------------------------------------------------------ time

    def clock_at(self, now: int) -> tuple[int, int] | None:
        """The module's clock in us, and its uncertainty; None when unknown."""
        if self._clock is None:
            return None
        clock, time_ns, doubt = self._clock
        passed = (now - time_ns) // 1000
        return (clock + passed) % (1 << 32), doubt + passed // 100 + 1

    def set_clock(self, clock: int, sent_ns: int) -> None:
        """The module's clock was told between ``sent_ns`` and now."""
        self._clock = (clock, self.now, (self.now - sent_ns) // 1000 + self.late_ns // 1000 + 1)

    def advance(self, time_ns: int, ahead_ns: int = 0) -> None:
        """Let time pass: what can have happened by itself, up to so much later, may have."""
        since, self.now = self.now, max(self.now, time_ns)
        if self.worlds is not None:
            worlds = self.course.futures(self.worlds, since, self.now + ahead_ns, WORLDS_MAX)
            if len(worlds) > WORLDS_MAX:
                self.lose()
            else:
                self.worlds = worlds
        if self.worlds is not None:
            self._leave_out_overdue()

    def _leave_out_overdue(self) -> None:
        """Leave out the worlds in which something is overdue; when all are, the module is late."""
        assert self.worlds is not None
        found = {world: self.course.overdue(world, self.now) for world in self.worlds}
        left = {world for world, late in found.items() if late is None}
        if left:
            self.worlds = left
        else:
            late = min(late for late in found.values() if late is not None)
            self.violate(*late)

    def _overdue(self) -> None:
        limit_ns = self.facts.receipt_ms * MS + self.late_ns
        for pending in self.pending:
            if not pending.optional and self.now > pending.time_ns + limit_ns:
                request = pending.request
                self.violate("ACK-01", f"no answer to {request.name} #{request.frame.number} in its time")
                return
        self.many = {
            key: (kind, until) for key, (kind, until) in self.many.items() if until + limit_ns > self.now
        }

    def begin_from(self, report: dict[str, object]) -> None:
        """A status-report of a module at rest without a lease: the one world it leaves."""
        if report["activity"] not in ("idle", "energized") or report["holder_session"] or report["holder"]:
            return
        if report["queued"] or report["scheduled"] or report["unconfirmed"]:
            return
        state = State(
            str(report["activity"]), bool(report["halt_latch"]), bool(report["fault_latch"]), "free"
        )
        self.worlds = {World(state, int(str(report["halt_count"])), int(str(report["lease"])))}
        self.verdicts.epoch = int(str(report["epoch"]))
        self.restart_asked = False
        self.pending.clear()
        self.events.clear()
        self.confirmed.clear()
