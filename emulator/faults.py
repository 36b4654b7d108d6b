"""The fault list: occurrences latched and told, repeated without flooding, never lost unsaid."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass

from protobench.contract import Contract

MODULUS = 1 << 32
LOST_MAX = 65_535


@dataclass(slots=True)
class Occurrence:
    """One occurrence. ``sendings``: how often it was told; ``interval_ms``: until it is told again."""

    occurrence: int
    event: int
    code: int
    latching: bool
    count: int
    time: int
    value: int
    next_us: int
    interval_ms: int
    latched: bool
    told: bool = False
    sendings: int = 0
    change: int | None = None


class FaultTimes:
    """The contract's times for telling, in ms, and how often a notice is told."""

    def __init__(self, contract: Contract) -> None:
        self.first = int(contract.limit("fault_repeat_first").value or 0)
        self.slowest = int(contract.limit("fault_repeat_slowest").value or 0)
        self.spacing = int(contract.limit("fault_event_spacing").value or 0)
        self.notice_sendings = 1 + int(contract.limit("outcome_repeats").value or 0)


class FaultList:
    """Occurrences in order of their numbers; ``standing``: codes whose condition holds now."""

    def __init__(self, contract: Contract, capacity: int) -> None:
        self.times = FaultTimes(contract)
        self.occurrences: list[Occurrence] = []
        self.standing: set[int] = set()
        self.lost = 0
        self._severities = {fault.code: fault.severity == "latching" for fault in contract.faults}
        self._overflow = contract.fault("list-overflow").code
        self._capacity = capacity
        self._numbers = 0
        self._counts: Counter[int] = Counter()
        self._unrecorded: dict[int, tuple[int, int, int]] = {}
        self._last_sent_us: int | None = None

    def is_latching(self, code: int) -> bool:
        return self._severities[code]

    def knows(self, code: int) -> bool:
        return code in self._severities

    @property
    def latched(self) -> list[Occurrence]:
        return [entry for entry in self.occurrences if entry.latched]

    def find_latched(self, number: int) -> Occurrence | None:
        return next(
            (entry for entry in self.occurrences if entry.latched and entry.occurrence == number), None
        )

    # ------------------------------------------------------------ recording

    def occur(self, code: int, now_us: int, clock: int, value: int, next_event: int) -> bool:
        """Record a rising edge; whether it took the event number offered. Counts it in ``lost`` without a place."""
        self._counts[code] += 1
        if self._make_place(code):
            self._record(code, now_us, clock, value, next_event, self._counts[code])
            return True
        self.lost = min(LOST_MAX, self.lost + 1)
        self._unrecorded[code] = (clock, value, self._counts[code])
        if self._make_place(self._overflow):
            self._counts[self._overflow] += 1
            self._record(self._overflow, now_us, clock, 1, next_event, self._counts[self._overflow])
            return True
        return False

    def record_waiting(self, now_us: int, next_event: int) -> bool:
        """Record one standing condition that found no place before, if there is a place now."""
        for code, (clock, value, count) in list(self._unrecorded.items()):
            if code not in self.standing:
                del self._unrecorded[code]
            elif self._make_place(code):
                del self._unrecorded[code]
                self._record(code, now_us, clock, value, next_event, count)
                return True
        return False

    def _record(self, code: int, now_us: int, clock: int, value: int, event: int, count: int) -> None:
        self._numbers += 1
        latching = self._severities[code]
        self.occurrences.append(
            Occurrence(
                self._numbers, event, code, latching, count, clock, value, now_us, self.times.first, latching
            )
        )

    def _make_place(self, code: int) -> bool:
        """See that there is a place; list-overflow has one of its own."""
        own = code == self._overflow
        same = [entry for entry in self.occurrences if (entry.code == self._overflow) == own]
        if len(same) < (1 if own else self._capacity):
            return True
        for entry in same:
            if not self._must_stay(entry):
                self.occurrences.remove(entry)
                return True
        return False

    def _must_stay(self, entry: Occurrence) -> bool:
        if entry.latching:
            return entry.latched
        return entry.code in self.standing or (not entry.told and entry.sendings < self.times.notice_sendings)

    def clear(self, entry: Occurrence) -> None:
        """Clear one occurrence: nobody is told of it any more."""
        entry.latched = False
        entry.told = True

    # ------------------------------------------------------------ telling

    def announce(self, now_us: int) -> None:
        """A new holder is told of every latched occurrence."""
        for entry in self.latched:
            entry.told = False
            entry.sendings = 0
            entry.interval_ms = self.times.first
            entry.next_us = now_us

    def confirm(self, event: int, now_us: int, *, by_holder: bool) -> bool:
        """Take a confirm; whether it named something that is not told yet."""
        entry = next((one for one in self.occurrences if one.event == event and not one.told), None)
        if entry is None:
            return False
        if by_holder or not entry.latching:
            entry.told = True
        else:
            entry.interval_ms = self.times.slowest
            entry.next_us = now_us + 1000 * self.times.slowest
        return True

    def next_due_us(self) -> int | None:
        due_us = min((entry.next_us for entry in self.occurrences if self._wants(entry)), default=None)
        if due_us is None or self._last_sent_us is None:
            return due_us
        return max(due_us, self._last_sent_us + 1000 * self.times.spacing)

    def take_due(self, now_us: int) -> Occurrence | None:
        """The occurrence to tell now, if any: first tellings before repeats, each by number."""
        due_us = self.next_due_us()
        if due_us is None or due_us > now_us:
            return None
        waiting = [entry for entry in self.occurrences if self._wants(entry) and entry.next_us <= now_us]
        entry = min(waiting, key=lambda one: (one.sendings > 0, one.occurrence))
        entry.sendings += 1
        entry.next_us = now_us + 1000 * entry.interval_ms
        entry.interval_ms = min(2 * entry.interval_ms, self.times.slowest)
        self._last_sent_us = now_us
        return entry

    def _wants(self, entry: Occurrence) -> bool:
        if entry.told:
            return False
        return entry.latching or entry.sendings < self.times.notice_sendings
