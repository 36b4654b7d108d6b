"""Runs beside a replay: keeps what passed, and what the module told last."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any, SupportsIndex

from protobench.suite.language import Language, Reading
from protobench.suite.port import Beside
from protobench.suite.replay.steps import MODULUS
from protobench.suite.tester import Tester

FRAMES_MAX = 20_000
EVENT_PATIENCE_NS = 300_000_000


@dataclass(frozen=True, slots=True)
class Passed:
    """A sound frame: ``time_ns`` of the link's clock, whether it was sent, its bytes, and what it says."""

    time_ns: int
    is_sent: bool
    data: bytes
    reading: Reading


class Wrapping(int):
    """A number of 32 bits: what is added to it goes round."""

    def __add__(self, other: SupportsIndex) -> Wrapping:
        return Wrapping((int(self) + int(other)) % MODULUS)

    def __sub__(self, other: SupportsIndex) -> Wrapping:
        return self + -int(other)


@dataclass(slots=True)
class Now:
    """What the module told last.

    ``now_ns`` gives the time of the link's clock; ``await_event`` lets time pass until something comes, and says
    whether there is time left for that.
    """

    now_ns: Callable[[], int]
    await_event: Callable[[int], bool]
    epoch: Wrapping = field(default_factory=Wrapping)
    lease: Wrapping = field(default_factory=Wrapping)
    halt_count: Wrapping = field(default_factory=Wrapping)
    _clock: tuple[int, int] = (0, 0)
    _events: dict[tuple[Any, ...], int] = field(default_factory=dict)
    _occurrences: dict[int, int] = field(default_factory=dict)

    @property
    def clock(self) -> Wrapping:
        """The module's clock in us, by its last report and the time since."""
        told_us, at_ns = self._clock
        return Wrapping((told_us + (self.now_ns() - at_ns) // 1000) % MODULUS)

    def event(self, *of: Any) -> Wrapping:
        """The number of the last event of a kind: ``"outcome", tester, number`` or ``"fault", code``; 0 for none.

        One that has not come yet is waited for.
        """
        if len(of) == 3 and isinstance(of[1], Tester):
            of = (of[0], (of[1].address, of[1].session), of[2])
        deadline_ns = self.now_ns() + EVENT_PATIENCE_NS
        while of not in self._events and self.await_event(deadline_ns):
            pass
        return Wrapping(self._events.get(of, 0))

    def occurrence(self, code: int) -> int:
        """The last occurrence of a fault that was told; 0 for none."""
        return self._occurrences.get(code, 0)

    def learn(self, reading: Reading, time_ns: int) -> None:
        """A frame of the module came."""
        fields, frame = reading.fields, reading.frame
        if fields is None or frame is None:
            return
        for name in ("epoch", "lease", "halt_count"):
            if name in fields:
                setattr(self, name, Wrapping(fields[name]))
        clock = fields.get("t3", fields.get("clock"))
        if clock is not None:
            self._clock = (clock, time_ns)
        if reading.kind == "outcome":
            self._events["outcome", (frame.destination, frame.session), frame.number] = fields["event"]
        elif reading.kind == "fault":
            self._events["fault", fields["code"]] = fields["event"]
            self._occurrences[fields["code"]] = fields["occurrence"]
        elif reading.kind == "fault-page":
            for entry in reversed(fields["entries"]):
                self._occurrences[entry.code] = entry.occurrence
        elif reading.kind == "motion-page":
            for entry in reversed(fields["entries"]):
                self._events["outcome", (entry.source, entry.session), entry.number] = entry.event


class Recorder:
    """Keeps every sound frame, keeps testers up to date, and passes frames on to who judges ``beside``."""

    def __init__(self, language: Language, now: Now, beside: Beside | None = None) -> None:
        self.language = language
        self.frames: list[Passed] = []
        self.now = now
        self.testers: list[Tester] = []
        self._beside = beside

    def sent(self, data: bytes, time_ns: int) -> None:
        self._keep(Passed(time_ns, True, data, self.language.read(data)))
        if self._beside is not None:
            self._beside.sent(data, time_ns)

    def received(self, data: bytes, time_ns: int) -> None:
        reading = self.language.read(data)
        self._keep(Passed(time_ns, False, data, reading))
        self.now.learn(reading, time_ns)
        for tester in self.testers:
            tester.epoch, tester.lease = int(self.now.epoch), int(self.now.lease)
        if self._beside is not None:
            self._beside.received(data, time_ns)

    def _keep(self, passed: Passed) -> None:
        if len(self.frames) < FRAMES_MAX:
            self.frames.append(passed)
