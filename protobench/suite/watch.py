"""Rules that hold in every exchange, checked on every frame of every case, whatever the case itself looks at."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, ClassVar

from protobench.contract import Contract
from protobench.wire import Dropped, Frame

if TYPE_CHECKING:
    from protobench.suite.language import Reading

Key = tuple[int, int, int]  # source, session, number of a request
STATUS_COVERED_LAST_KEY = 18


@dataclass(slots=True)
class Violation:
    """A clause broken outside what a case asks: a frame that nobody asked for, a report that contradicts another."""

    clause: str
    reason: str


class _Asked:
    """What was sent under one (source, session, number), and what came back."""

    __slots__ = ("accepted", "answer_kinds", "answers", "frames", "moved", "refused")

    def __init__(self) -> None:
        self.frames = 0
        self.answers = 0
        self.answer_kinds: set[str] = set()
        self.moved = False
        self.accepted = False
        self.refused = False


class Watch:
    """Keeps what a frame of the module must agree with, for one case at a time.

    ``spacing_slack_ns``: how much an interval may seem shorter than it was, by the bench's own doing.
    ``own_addresses``: addresses the module may answer from.
    """

    def __init__(self, contract: Contract) -> None:
        self._contract = contract
        self._requests = {kind.name: kind for kind in contract.kinds if kind.class_ in ("read", "command")}
        self._private = [contract.kind_range(name) for name in ("private", "command_private")]
        status = contract.kind("status-report")
        self._covered = [field.name for field in status.fields if field.key <= STATUS_COVERED_LAST_KEY]
        self._spacing_ns = contract.limit("fault_event_spacing").value * 1_000_000
        self.spacing_slack_ns = 0
        self.own_addresses: set[int] = set()
        self.violations: list[Violation] = []
        self.begin_case()

    def begin_case(self) -> None:
        """Forget everything but the module's addresses."""
        self.violations.clear()
        self._asked: dict[Key, _Asked] = {}
        self._outcomes: dict[tuple[Key, int], bytes] = {}
        self._status: dict[tuple[int, int], dict[str, Any]] = {}
        self._last_faults: dict[int, list[int]] = {}

    def restarted(self) -> None:
        """The module was made to restart: its counts begin anew."""
        self._status.clear()

    def forget_reports(self) -> None:
        """The change number was preset: earlier reports say nothing about later ones."""
        self._status.clear()

    # ------------------------------------------------------------ out

    def sent(self, data: bytes, reading: Reading, time_ns: int) -> None:  # noqa: ARG002 - one shape for both ways
        """A frame left the bench."""
        frame = reading.frame
        if frame is None:
            return
        asked = self._asked.setdefault((frame.source, frame.session, frame.number), _Asked())
        asked.frames += 1
        kind = self._requests.get(reading.kind)
        asked.answer_kinds.add("receipt")
        if kind is not None:
            asked.answer_kinds.add(kind.answer or "receipt")
            asked.moved |= kind.name == "move"

    # ------------------------------------------------------------ in

    def noise(self, dropped: Dropped) -> None:
        """Bytes of the module that are no sound frame."""
        self._violate("FRM-16", f"the module sent what is no sound frame: {dropped.reason}, {dropped.detail}")

    def received(self, data: bytes, reading: Reading, time_ns: int) -> None:
        """A frame of the module arrived."""
        frame = reading.frame
        if frame is None:
            self._violate("FRM-16", f"the module sent what is no sound frame: {reading.problem}")
            return
        if frame.version != 1 or frame.flags:
            self._violate("FRM-16", f"version {frame.version}, flags 0x{frame.flags:02x} in {reading.words}")
        if any(low <= frame.kind <= high for low, high in self._private):
            return  # outside the verdict
        if reading.fields is None:
            self._violate("FRM-16", f"the module sent a frame that breaks the contract: {reading.problem}")
            return
        if self.own_addresses and frame.source not in self.own_addresses:
            self._violate(
                "ACK-02", f"source 0x{frame.source:x} is not the module's address in {reading.words}"
            )
        check = self._CHECKS.get(reading.kind, Watch._answer)
        check(self, data, frame, reading, time_ns)

    def _answer(self, data: bytes, frame: Frame, reading: Reading, time_ns: int) -> None:  # noqa: ARG002
        low, high = self._contract.kind_range("answer")
        if not low <= frame.kind <= high:
            return
        asked = self._asked.get((frame.destination, frame.session, frame.number))
        if asked is None or reading.kind not in asked.answer_kinds:
            self._violate("ACK-01", f"an answer that nobody asked for: {reading.words}")
            return
        asked.answers += 1
        if asked.answers > asked.frames:
            self._violate("ACK-01", f"{asked.answers} answers to {asked.frames} requests: {reading.words}")

    def _receipt(self, data: bytes, frame: Frame, reading: Reading, time_ns: int) -> None:
        self._answer(data, frame, reading, time_ns)
        assert reading.fields is not None
        asked = self._asked.get((frame.destination, frame.session, frame.number))
        if asked is not None:
            accepted = reading.fields["result"] == "accepted"
            asked.accepted |= accepted
            asked.refused |= not accepted

    def _status_report(self, data: bytes, frame: Frame, reading: Reading, time_ns: int) -> None:
        self._answer(data, frame, reading, time_ns)
        assert reading.fields is not None
        covered = {name: reading.fields[name] for name in self._covered}
        key = (reading.fields["epoch"], reading.fields["change"])
        earlier = self._status.setdefault(key, covered)
        for name, value in covered.items():
            if earlier[name] != value:
                self._violate(
                    "STA-07",
                    f"two reports with change {key[1]} differ in {name}: {earlier[name]} and {value}",
                )

    def _outcome(self, data: bytes, frame: Frame, reading: Reading, time_ns: int) -> None:  # noqa: ARG002
        assert reading.fields is not None
        key = (frame.destination, frame.session, frame.number)
        asked = self._asked.get(key)
        if asked is not None:
            if not asked.moved:
                self._violate("ACK-08", f"an outcome of what was no move: {reading.words}")
            elif not asked.accepted:
                self._violate("ACK-04", f"an outcome without an accepted receipt before it: {reading.words}")
        if reading.fields["outcome"] == "lost":
            self._violate("ACK-17", f"no module sends outcome lost: {reading.words}")
        earlier = self._outcomes.setdefault((key, reading.fields["epoch"]), data)
        if earlier != data:
            self._violate("ACK-07", f"a second, different outcome of one motion: {reading.words}")

    def _fault(self, data: bytes, frame: Frame, reading: Reading, time_ns: int) -> None:  # noqa: ARG002
        assert reading.fields is not None
        epoch = reading.fields["epoch"]
        times = [*self._last_faults.get(epoch, ()), time_ns][-3:]
        self._last_faults = {epoch: times}
        # In real time one late stamp makes one interval look short; then two intervals are judged together.
        over = 2 if self.spacing_slack_ns else 1
        if (
            len(times) > over
            and times[-1] - times[-1 - over] < over * self._spacing_ns - self.spacing_slack_ns
        ):
            apart_ms = (times[-1] - times[-1 - over]) / 1e6
            self._violate("FLT-06", f"{over + 1} fault events within {apart_ms:.3f} ms")

    _CHECKS: ClassVar[dict[str, Callable[..., None]]] = {
        "receipt": _receipt,
        "status-report": _status_report,
        "outcome": _outcome,
        "fault": _fault,
    }

    def _violate(self, clause: str, reason: str) -> None:
        if len(self.violations) < VIOLATIONS_KEPT:
            self.violations.append(Violation(clause, reason))


VIOLATIONS_KEPT = 20
