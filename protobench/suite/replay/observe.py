"""What a module did in an exchange, without what may differ from one sound module to the next.

Two modules that keep the contract, asked the same, give equal observations: the numbers that a module chooses
(epoch, lease number, event numbers, clock) are told by how they changed, controllers by their place, times roughly.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Callable, Iterable
from collections.abc import Sequence as Listed
from itertools import pairwise
from typing import Any, NamedTuple

from protobench.suite.bench import Bench
from protobench.suite.facts import Facts
from protobench.suite.replay.recorder import Passed
from protobench.suite.replay.steps import MODULUS

MS = 1_000_000
SETTLED_NS = 100 * MS  # after the last thing that was asked or happened
IDLE = (
    "describe",
    "status",
    "probe",
    "read-counters",
    "read-faults",
    "read-motions",
    "time-exchange",
    "read-groups",
    "read-truth",
    "describe-motion",
    "confirm",
)
UP_MOST = 64
OPEN = "open"  # an answer that may come or not
GAPS_SEEN = 4
Place = tuple[Any, ...]
Fields = dict[str, Any]


class About(NamedTuple):
    """A measured value: others within ``more`` of it are the same."""

    value: float
    more: float

    def __str__(self) -> str:
        return f"about {self.value:g}"


class Repeats(NamedTuple):
    """When an event was sent again: gaps in ms, and for how long it was not after the last sending."""

    gaps: tuple[float, ...]
    silent_ms: float

    def __str__(self) -> str:
        return f"again after {', '.join(f'{gap:g}' for gap in self.gaps)} ms" if self.gaps else "once"

    def agrees(self, other: Repeats) -> bool:
        """Whether both came again as often and at like times, as far as anybody waited."""
        for place in range(GAPS_SEEN):
            ours = self.gaps[place] if place < len(self.gaps) else None
            theirs = other.gaps[place] if place < len(other.gaps) else None
            if ours is not None and theirs is not None:
                if abs(ours - theirs) > _slack_ms(ours):
                    return False
            elif ours is not None:
                return other.silent_ms <= ours + _slack_ms(ours)
            elif theirs is not None:
                return self.silent_ms <= theirs + _slack_ms(theirs)
        return True


def _slack_ms(gap_ms: float) -> float:
    return max(12.0, 0.25 * gap_ms)


class Later(NamedTuple):
    """A value that a module may show a little earlier or later than another; ``rests``: nothing was under way."""

    value: Any
    rests: bool

    def __str__(self) -> str:
        return str(self.value)


class Shown(NamedTuple):
    """The state that a module displays, and of what."""

    of: tuple[object, ...]
    state: str

    def __str__(self) -> str:
        return f"{self.state} with activity, halt latch, fault latch {self.of}"


class Seen(NamedTuple):
    """One thing observed: ``about`` what, its fields, how many frames had been sent by then, and when.

    ``ms``: since the first frame; of an answer that did not come, until when one had to.
    """

    about: str
    fields: Fields
    at: int
    ms: float = 0.0


def _controller_of(passed: Passed) -> tuple[int, int]:
    frame = passed.reading.frame
    assert frame is not None
    return frame.source, frame.session


def relation(one: object, other: object) -> tuple[str, str]:
    """Two values that differ, in words that stay the same when numbers do not."""
    if isinstance(one, Later) and isinstance(other, Later):
        one, other = one.value, other.value
    if isinstance(one, Repeats) and isinstance(other, Repeats):
        count = len(one.gaps) - len(other.gaps)
        return ("at other times", "") if not count else ("more", "less") if count > 0 else ("less", "more")
    if isinstance(one, About) and isinstance(other, About):
        one, other = one.value, other.value
    if isinstance(one, int | float) and isinstance(other, int | float) and not isinstance(one, bool):
        return ("more", "less") if one > other else ("less", "more")
    return str(one), str(other)


def same(one: object, other: object) -> bool:
    """Whether two observed values agree."""
    if isinstance(one, About) and isinstance(other, About):
        return abs(one.value - other.value) <= max(one.more, other.more)
    if isinstance(one, Repeats) and isinstance(other, Repeats):
        return one.agrees(other)
    if isinstance(one, Later) and isinstance(other, Later):
        return not (one.rests and other.rests) or same(one.value, other.value)
    if isinstance(one, Shown) and isinstance(other, Shown):
        return one.of != other.of or one.state == other.state
    if isinstance(one, tuple) and isinstance(other, tuple) and not isinstance(one, About):
        return len(one) == len(other) and all(map(same, one, other))
    return bool(one == other)


class Observer:
    """Observes frames in order.

    ``facts``: what the module declares, for its limits; ``answers``: codes of the kinds that answer; ``drops``: names
    of the drop counters.
    """

    def __init__(self, facts: Facts, answers: tuple[int, int], drops: Listed[str]) -> None:
        self.facts = facts
        self._drops = drops
        self._begin_ns = 0
        self.seen: dict[Place, Seen] = {}
        self._answers = answers
        self._base: Fields = {}
        self._waiting: dict[Place, list[int]] = defaultdict(list)
        self._asked: list[Passed] = []
        self._controllers: dict[tuple[int, int], str] = {}
        self._first: dict[str, Fields] = {}
        self._events: dict[Place, list[int]] = defaultdict(list)
        self._numbers: dict[int, list[Place]] = defaultdict(list)
        self._confirmed: dict[Place, int] = {}
        self._change: int | None = None
        self._clock: tuple[int, int] | None = None
        self._starts = 0
        self._busy_ns = 0
        self._moved = False
        self._lease: tuple[int, int, int] | None = None

    def observe(
        self, before: Iterable[Passed], frames: Iterable[Passed], end_ns: int
    ) -> tuple[dict[Place, Seen], float]:
        """All that is seen in ``frames`` up to ``end_ns``, and that in ms; those ``before`` only tell what was."""
        for passed in before:
            if not passed.is_sent:
                self._learn(passed)
        for number, passed in enumerate(frames):
            if not number:
                self._begin_ns = passed.time_ns
            if passed.reading.frame is not None:
                (self._sent if passed.is_sent else self._received)(passed)
        for place, times in self._events.items():
            gaps = tuple(round((later - earlier) / MS, 1) for earlier, later in pairwise(times))
            until_ns = min(self._confirmed.get(place, end_ns), end_ns)
            fields = self.seen[place].fields
            if place[0] == "telemetry":
                fields["sent"] = About(len(times), max(1.0, 0.3 * len(times)))
            elif place[0] in ("outcome", "fault"):
                fields["repeats"] = Repeats(gaps[:GAPS_SEEN], max(0.0, (until_ns - times[-1]) / MS))
        self._leave_open()
        return self.seen, self._ms(end_ns)

    def _leave_open(self) -> None:
        """An answer that was not there before its controller asked for more may have made room for the next."""
        for number, asked in enumerate(self._asked):
            seen = self.seen["answer", number]
            window_ms = (asked.reading.fields or {}).get("answer_window", 0)
            if seen.fields["answer"] == "none" and window_ms:
                until_ns = asked.time_ns + (window_ms + self.facts.receipt_ms) * MS
                later = [other for other in self._asked[number + 1 :] if other.time_ns < until_ns]
                if any(_controller_of(other) == _controller_of(asked) for other in later):
                    seen.fields["answer"] = OPEN

    def _ms(self, time_ns: int) -> float:
        return (time_ns - self._begin_ns) / MS

    def _learn(self, passed: Passed) -> None:
        fields = passed.reading.fields or {}
        for name in ("epoch", "lease", "halt_count"):
            if name in fields:
                self._base[name] = fields[name]
        if passed.reading.kind == "status-report":
            self._change = fields["change"]
        if passed.reading.kind == "counters":
            self._first["counters"] = dict(fields)
        self._told_clock(fields, passed.time_ns)

    # ------------------------------------------------------------ sent

    def _sent(self, passed: Passed) -> None:
        frame = passed.reading.frame
        assert frame is not None
        self._controllers.setdefault((frame.source, frame.session), f"c{len(self._controllers)}")
        number = len(self._asked)
        self._asked.append(passed)
        self._waiting[frame.source, frame.session, frame.number].append(number)
        told = passed.reading.fields or {}
        due_ms = self._ms(passed.time_ns) + told.get("answer_window", 0) + self.facts.receipt_ms + 1
        self.seen["answer", number] = Seen(passed.reading.kind, {"answer": "none"}, number + 1, due_ms)
        if passed.reading.kind == "confirm":
            for place in self._numbers.get(told.get("event", 0), ()):
                self._confirmed.setdefault(place, passed.time_ns)
        self._moved |= passed.reading.kind == "move"
        if passed.reading.kind not in IDLE:
            self._busy_ns = max(self._busy_ns, passed.time_ns)

    # ------------------------------------------------------------ received

    def _received(self, passed: Passed) -> None:
        frame, kind = passed.reading.frame, passed.reading.kind
        assert frame is not None
        low, high = self._answers
        at = len(self._asked)
        if passed.reading.fields is None:
            self.seen["unsound", len(self.seen)] = Seen("frame", {"problem": passed.reading.problem[:40]}, at)
        elif low <= frame.kind <= high:
            self._answer(at, passed)
        elif kind in _EVENTS:
            self._event(at, passed)

    def _answer(self, at: int, passed: Passed) -> None:
        frame = passed.reading.frame
        assert frame is not None
        waiting = self._waiting.get((frame.destination, frame.session, frame.number), [])
        fields = {"answer": passed.reading.kind, **self._fields(passed)}
        if not waiting:
            self.seen["stray", len(self.seen)] = Seen(passed.reading.kind, fields, at)
            return
        number = waiting.pop(0)
        asked = self._asked[number]
        window_ms = (asked.reading.fields or {}).get("answer_window", 0)
        late_ms = (passed.time_ns - asked.time_ns) / MS - window_ms - self.facts.receipt_ms
        fields["late"] = late_ms > 1
        duration = (asked.reading.fields or {}).get("duration")
        if asked.reading.kind in ("take-lease", "renew-lease") and fields.get("result") == "accepted":
            self._lease = (duration or 0, asked.time_ns, passed.time_ns)
        self.seen["answer", number] = Seen(
            asked.reading.kind, fields, number + 1, self._ms(asked.time_ns) + window_ms
        )

    def _event(self, at: int, passed: Passed) -> None:
        frame, kind = passed.reading.frame, passed.reading.kind
        assert frame is not None
        told = passed.reading.fields or {}
        to = self._controllers.get((frame.destination, frame.session), "another")
        match kind:
            case "outcome":
                place: Place = ("outcome", to, frame.number, self._starts)
            case "fault":
                place = ("fault", told["code"], self._starts, to)
            case "started":
                self._starts += 1
                self._moved = False
                place = ("started", self._starts)
            case _:
                place = (kind, to)
        self._events[place].append(passed.time_ns)
        self._busy_ns = max(self._busy_ns, passed.time_ns)
        if place not in self.seen:
            self.seen[place] = Seen(kind, self._fields(passed), at, self._ms(passed.time_ns))
            if "event" in told:
                self._numbers[told["event"]].append(place)

    # ------------------------------------------------------------ fields

    def _fields(self, passed: Passed) -> Fields:
        told = passed.reading.fields or {}
        found: Fields = {}
        table = _KINDS.get(passed.reading.kind, {})
        for name, value in told.items():
            how = table.get(name, _COMMON.get(name, Observer._as_is))
            shown = how(self, name, value, passed)
            if isinstance(shown, dict):
                found |= shown
            elif shown is not None:
                found[name] = shown
        self._told_clock(told, passed.time_ns)
        return found

    def _as_is(self, name: str, value: Any, passed: Passed) -> Any:  # noqa: ARG002 - one shape for all
        return value

    def _nothing(self, name: str, value: Any, passed: Passed) -> None:  # noqa: ARG002
        return None

    def _changed(self, name: str, value: Any, passed: Passed) -> Any:  # noqa: ARG002
        """By how much a number that the module chooses has gone up since the start."""
        base = self._base.setdefault(name, value)
        up = (value - base) % MODULUS
        return f"{up} up" if up <= UP_MOST else "far from the start"

    def _since_first(self, name: str, value: Any, passed: Passed) -> Any:
        """By how much a count went up since it was first told."""
        first = self._first.setdefault(passed.reading.kind, {}).setdefault(name, value)
        if isinstance(value, tuple | list):
            ups = zip(self._drops, value, first, strict=False)
            return {f"{name} for {drop}": now - then for drop, now, then in ups}
        return value - first

    def _controller(self, name: str, value: Any, passed: Passed) -> Any:  # noqa: ARG002
        if not value:
            return value
        for (source, session), called in self._controllers.items():
            if value == (source if name == "holder" else session):
                return called if name == "holder_session" else value
        return "another"

    def _change_number(self, name: str, value: Any, passed: Passed) -> Any:
        before, self._change = self._change, value
        if before is None or passed.reading.kind != "status-report":
            return None
        return self._later(name, "as before" if value == before else "changed", passed)

    def _state(self, name: str, value: Any, passed: Passed) -> Any:
        told = passed.reading.fields or {}
        of = tuple(told.get(word) for word in ("activity", "halt_latch", "fault_latch"))
        return {name: self._later(name, value, passed), "display": Shown(of, value)}

    def _later(self, name: str, value: Any, passed: Passed) -> Any:  # noqa: ARG002
        moving = (passed.reading.fields or {}).get("activity") in ("moving", "starting")
        return Later(value, not moving and passed.time_ns - self._busy_ns > SETTLED_NS)

    def _remaining(self, name: str, value: Any, passed: Passed) -> Any:
        if not value or self._lease is None:
            return self._later(name, "none" if not value else "some", passed)
        duration, low_ns, high_ns = self._lease
        least = duration - (passed.time_ns - low_ns) / MS - 10
        most = duration - (passed.time_ns - high_ns) / MS + 10
        return "on time" if least - 0.02 * duration <= value <= most + 0.02 * duration else "off"

    def _turn(self, name: str, value: Any, passed: Passed) -> Any:  # noqa: ARG002
        """How long a time answer says that it was in the module."""
        turned_us = (value - (passed.reading.fields or {}).get("t2", 0)) % MODULUS
        return "soon after t2" if turned_us <= 1000 * self.facts.receipt_ms else "long after t2, or before"

    def _position(self, name: str, value: Any, passed: Passed) -> Any:  # noqa: ARG002
        """A position is the module's affair, but for the one that it has before anything has moved."""
        return None if self._moved else value

    def _known(self, name: str, value: Any, passed: Passed) -> Any:
        return self._later(name, value, passed) if self._moved else value

    def _on_time(self, name: str, value: Any, passed: Passed) -> Any:  # noqa: ARG002
        if self._clock is None:
            return None
        told_us, at_ns = self._clock
        run_us, passed_us = (value - told_us) % MODULUS, (passed.time_ns - at_ns) / 1000
        off = min(abs(run_us - passed_us), abs(run_us - MODULUS - passed_us))
        return "on time" if off <= 5000 + 0.02 * passed_us else "off"

    def _told_clock(self, told: Fields, time_ns: int) -> None:
        clock = told.get("t3", told.get("clock"))
        if isinstance(clock, int):
            self._clock = (clock, time_ns)

    def _way(self, name: str, value: Any, passed: Passed) -> Any:  # noqa: ARG002
        """How far a motion went: not at all, as far as was asked, or part of it."""
        frame = passed.reading.frame
        asked = [
            sent.reading.fields.get("magnitude", 0)
            for sent in self._asked
            if sent.reading.kind == "move" and sent.reading.fields and frame is not None
            and sent.reading.frame is not None and sent.reading.frame.number == frame.number
        ]  # fmt: skip
        if not value:
            return "none"
        return "all" if value in asked else "part"

    def _duration(self, name: str, value: Any, passed: Passed) -> Any:  # noqa: ARG002
        return About(value, max(25.0, 0.2 * value))

    def _motions(self, name: str, value: Any, passed: Passed) -> Any:  # noqa: ARG002
        return tuple(
            (
                self._controllers.get((entry.source, entry.session), "another"),
                entry.number if (entry.source, entry.session) in self._controllers else None,
                entry.motion,
                entry.outcome,
                entry.cause,
                entry.confirmed,
            )
            for entry in value
        )

    def _faults(self, name: str, value: Any, passed: Passed) -> Any:  # noqa: ARG002
        return tuple(
            (entry.code, entry.severity, entry.count, entry.standing, entry.latched, entry.told)
            for entry in value
        )

    def _truth(self, name: str, value: Any, passed: Passed) -> Any:  # noqa: ARG002
        return tuple(entry.event for entry in value)

    def _bonds(self, name: str, value: Any, passed: Passed) -> Any:  # noqa: ARG002
        return tuple(entry.bonded for entry in value)


How = Callable[[Observer, str, Any, Passed], Any]
_SKIP, _UP = Observer._nothing, Observer._changed
_COMMON: dict[str, How] = {
    "epoch": _UP,
    "lease": _UP,
    "halt_count": _UP,
    "holder": Observer._controller,
    "holder_session": Observer._controller,
    "change": Observer._change_number,
    "clock": Observer._on_time,
    "lease_remaining": Observer._remaining,
    "position": Observer._position,
    "supply": _SKIP,
    "battery": _SKIP,
    "temperatures": _SKIP,
    "event": _SKIP,
    "occurrence": _SKIP,
    "time": _SKIP,
    "value": _SKIP,
    "energy_mj": _SKIP,
}
_KINDS: dict[str, dict[str, How]] = {
    "status-report": {
        "faces": Observer._bonds, "queued": Observer._later, "scheduled": Observer._later,
        "unconfirmed": Observer._later, "activity": Observer._later, "state": Observer._state,
        "position_known": Observer._known,
    },
    "counters": {"drops": Observer._since_first, "silent_refusals": Observer._since_first},
    "fault-page": {"entries": Observer._faults},
    "motion-page": {"entries": Observer._motions},
    "time-answer": {"t2": Observer._on_time, "t3": Observer._turn},
    "truth-page": {
        "entries": Observer._truth, "motion_starts": Observer._since_first, "total": Observer._since_first,
    },
    "outcome": {"displacement": Observer._way, "duration_ms": Observer._duration},
    "telemetry": {"sequence": _SKIP, "state": _SKIP},
    "log": {"text": _SKIP},
}  # fmt: skip
_EVENTS = ("outcome", "fault", "started", "telemetry")


def observer(bench: Bench) -> Observer:
    """One for the module of a bench."""
    contract = bench.contract
    drops = [drop.name for drop in sorted(contract.drops, key=lambda drop: drop.number)]
    return Observer(bench.facts, contract.kind_range("answer"), drops)
