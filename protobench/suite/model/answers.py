"""What a frame of the module leaves of the worlds; a violation when that is nothing."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

from protobench.suite.language import Reading
from protobench.suite.model.course import MS
from protobench.suite.model.world import DOOMED, Expect, Owed, World

if TYPE_CHECKING:
    from protobench.suite.model.model import Model, Pending

CONFIRM_RACE_NS = 50 * MS  # an outcome may be on its way when its confirm is sent


class Answers:
    """Judges frames of the module."""

    def __init__(self, model: Model) -> None:
        self.model = model

    def received(self, data: bytes) -> None:
        """A frame of the module came at the model's instant."""
        model = self.model
        reading = model.language.read(data)
        if reading.frame is None or reading.fields is None:
            return  # for the watch
        event = _EVENTS.get(reading.kind)
        if event is not None:
            event(self, reading, data)
            return
        frame = reading.frame
        key = (frame.destination, frame.session, frame.number)
        pending = next((pending for pending in model.pending if self._fits(pending, key, reading)), None)
        if pending is not None:
            self._answer(pending, reading, data)
        elif not model.lost:
            self._stray(key, reading)
        elif reading.kind == "status-report":
            model.begin_from(reading.fields)

    def _fits(self, pending: Pending, key: tuple[int, int, int], reading: Reading) -> bool:
        """Whether this is the answer to a request, not to a later one of the same number."""
        if pending.request.key != key:
            return False
        kind = pending.request.kind
        return reading.kind == "receipt" or (kind is not None and kind.answer == reading.kind)

    def _stray(self, key: tuple[int, int, int], reading: Reading) -> None:
        waiting = self.model.many.get(key)
        if key in self.model.unjudged or key[:2] not in self.model.asking:
            return  # asked for before the model began
        if waiting is None:
            self.model.violate("ACK-01", f"an answer that nothing asked for: {reading.words}")
        elif waiting[0] != reading.kind or (reading.fields or {}).get("result") == "refused":
            self.model.violate("ADR-06", f"an answer to many that must not be: {reading.words}")
        else:
            del self.model.many[key]

    # ------------------------------------------------------------ answers

    def _answer(self, pending: Pending, reading: Reading, data: bytes) -> None:
        model = self.model
        assert model.worlds is not None
        earlier = [other for other in model.pending if other.place < pending.place and other.ordered]
        for other in earlier if pending.ordered else ():
            if not other.optional:
                model.violate("ACK-16", f"answered before {other.request.name} was: {reading.words}")
                return
            model.pending.remove(other)
        model.pending.remove(pending)
        if model.now > pending.time_ns + model.facts.receipt_ms * MS + model.late_ns:
            late_ms = (model.now - pending.time_ns) / MS
            model.violate("ACK-03", f"answered after {late_ms:.1f} ms: {reading.words}")
            return
        left: set[World] = set()
        wanted: set[Expect] = set()
        for world in model.worlds:
            for place, expect in world.asked:
                if place == pending.place:
                    wanted.add(expect)
                    if _agrees(expect, reading):
                        left.add(
                            world._replace(asked=tuple(item for item in world.asked if item[0] != place))
                        )
        if not left:
            model.violate(_clause(wanted), f"{reading.words}; allowed: {_words(wanted)}")
            return
        model.worlds = left
        self._stored(pending, reading, data)
        check = _CHECKS.get(reading.kind)
        if check is not None and model.worlds is not None:
            check(self, pending, reading)

    def _stored(self, pending: Pending, reading: Reading, data: bytes) -> None:
        model = self.model
        request = pending.request
        stored = model.history.stored(request)
        fields = reading.fields or {}
        if reading.kind != "receipt" or stored is None:
            return
        if pending.copied:
            if stored.receipt is not None and stored.receipt != data:
                model.violate("SEQ-03", f"the receipt of a copy differs from the first: {reading.words}")
            return
        if fields.get("reason") not in ("conflict", "late-unseen", "answer-expired", "unsupported-version"):
            stored.receipt = data
        if request.name == "move" and fields.get("result") == "accepted" and model.worlds is not None:
            model.worlds = {_told(world, request.key) for world in model.worlds}

    def _status_report(self, pending: Pending, reading: Reading) -> None:
        model, fields = self.model, reading.fields
        assert fields is not None
        assert model.worlds is not None
        model.set_clock(fields["clock"], pending.time_ns)
        if not pending.alone:
            return
        found = {world: self._contradicts(world, fields) for world in model.worlds}
        left = {world for world, names in found.items() if not names}
        if left:
            model.worlds = left
            return
        names = min(found.values(), key=len)
        known = next(world for world in found if found[world] == names)
        model.violate(
            "DSC-03", f"status tells otherwise in {', '.join(names)}: {reading.words}; known: {known}"
        )

    def _contradicts(self, world: World, fields: dict[str, Any]) -> list[str]:
        """The fields of a report that cannot be so in this world."""
        model, state, holder = self.model, world.state, world.holder
        wanted = {
            "epoch": model.verdicts.epoch,
            "state": model.course.table.displayed(state),
            "activity": state.activity,
            "halt_latch": state.halt,
            "fault_latch": state.fault,
            "halt_count": world.halt_count,
            "lease": world.lease,
            "holder": holder.source if holder else 0,
            "holder_session": holder.session if holder else 0,
        }
        wrong = [name for name, value in wanted.items() if fields[name] != value]
        formed, doomed = len(world.kept) + len(world.owed), len(world.waiting(DOOMED))
        if not len(world.kept) <= fields["unconfirmed"] <= formed + doomed:
            wrong.append("unconfirmed")
        left_ns = max(0, holder.high - model.now) if holder is not None else 0
        if fields["lease_remaining"] * MS > left_ns + model.late_ns + ROUNDED_NS:
            wrong.append("lease_remaining")
        return wrong

    def _time_answer(self, pending: Pending, reading: Reading) -> None:
        assert reading.fields is not None
        if reading.fields["t1"] != pending.request.values["t1"]:
            self.model.violate("TIM-01", f"t1 is not what was sent: {reading.words}")
        else:
            self.model.set_clock(reading.fields["t3"], pending.time_ns)

    def _group_list(self, pending: Pending, reading: Reading) -> None:
        model = self.model
        assert reading.fields is not None
        assert model.worlds is not None
        groups = frozenset(reading.fields["groups"])
        left = {world._replace(groups=groups) for world in model.worlds if world.groups in (None, groups)}
        if left:
            model.worlds = left
        elif pending.alone:
            model.violate("ADR-13", f"other groups than were set: {reading.words}")

    def _description(self, pending: Pending, reading: Reading) -> None:
        assert reading.fields is not None
        facts = self.model.facts.description
        changed = [
            name
            for name, value in reading.fields.items()
            if name not in ("epoch", "lease") and facts.get(name) != value
        ]
        if changed:
            self.model.violate(
                "DSC-01", f"the description has changed in {', '.join(changed)}: {reading.words}"
            )
        assert self.model.worlds is not None or changed
        leases = {world.lease for world in self.model.worlds or ()}
        if pending.alone and not changed and reading.fields["lease"] not in leases:
            self.model.violate("DSC-01", f"not the last lease number: {reading.words}")

    # ------------------------------------------------------------ events

    def _outcome(self, reading: Reading, data: bytes) -> None:  # noqa: ARG002 - one shape for all events
        model, frame, fields = self.model, reading.frame, reading.fields
        if model.worlds is None:
            return
        assert frame is not None
        assert fields is not None
        if fields["epoch"] != model.verdicts.epoch:
            model.violate("ACK-17", f"an outcome of another start: {reading.words}")
            return
        key = (frame.destination, frame.session, frame.number)
        if model.events.get(fields["event"]) == key:
            confirmed = model.confirmed.get(fields["event"])
            if confirmed is not None and model.now > confirmed + CONFIRM_RACE_NS + model.late_ns:
                model.violate("ACK-11", f"a confirmed outcome is sent again: {reading.words}")
            return
        left, open_somewhere = set(), False
        for world in model.worlds:
            owed = next((owed for owed in world.owed if owed.key == key), None)
            open_somewhere |= owed is not None or any(motion.key == key for motion in world.motions)
            if owed is not None and _ends(owed, fields):
                rest = tuple(other for other in world.owed if other is not owed)
                left.add(world._replace(owed=rest, kept=world.kept | {key}))
        if left:
            model.worlds = left
            model.events[fields["event"]] = key
        else:
            clause = "ACK-08" if open_somewhere else "ACK-07"
            model.violate(clause, f"an outcome that cannot be: {reading.words}")

    def _fault(self, reading: Reading, data: bytes) -> None:  # noqa: ARG002
        """A fault that none of the worlds has is the module's own, or its telling crossed its clearing."""
        fields = reading.fields or {}
        worlds = self.model.worlds
        if worlds and fields.get("severity") == "latching" and not any(world.state.fault for world in worlds):
            self.model.lose()

    def _started(self, reading: Reading, data: bytes) -> None:  # noqa: ARG002
        if not self.model.restart_asked:
            self.model.violate("LOD-02", f"the module started again by itself: {reading.words}")
        self.model.lose()

    def _telemetry(self, reading: Reading, data: bytes) -> None:  # noqa: ARG002
        model, frame = self.model, reading.frame
        assert frame is not None
        if model.worlds is None:
            return
        until = model.telemetry.get((frame.destination, frame.session, frame.number))
        if until is None and not model.history.knows(frame.destination, frame.session):
            return  # asked for before the model began
        if until is None:
            model.violate("TIM-04", f"telemetry that nothing asked for: {reading.words}")
        elif model.now > until + until // 100 + model.facts.receipt_ms * MS + model.late_ns:
            model.violate("TIM-04", f"telemetry after its duration: {reading.words}")


ROUNDED_NS = 2 * MS  # lease_remaining is rounded up, and the answer was formed before it came

_EVENTS: dict[str, Callable[[Answers, Reading, bytes], None]] = {
    "outcome": Answers._outcome,
    "fault": Answers._fault,
    "started": Answers._started,
    "telemetry": Answers._telemetry,
    "log": lambda *_: None,
}
_CHECKS: dict[str, Callable[[Answers, Pending, Reading], None]] = {
    "status-report": Answers._status_report,
    "time-answer": Answers._time_answer,
    "group-list": Answers._group_list,
    "description": Answers._description,
}


def _agrees(expect: Expect, reading: Reading) -> bool:
    assert reading.fields is not None
    if expect.kind != reading.kind:
        return False
    return expect.fields is None or frozenset(reading.fields.items()) == expect.fields


def _ends(owed: Owed, fields: dict[str, Any]) -> bool:
    """Whether an outcome tells an ending that is allowed."""
    told = (fields["outcome"], fields["cause"], fields.get("interrupted", "none"))
    fits = any(
        told[0] == outcome and cause in ("*", told[1]) and told[2] == interrupted
        for outcome, cause, interrupted in owed.endings
    )
    begun = owed.begun or (fields["displacement"] == 0 and fields["duration_ms"] == 0)
    return fits and begun and fields["motion"] == owed.name


def _told(world: World, key: tuple[int, int, int]) -> World:
    """The world in which a move's receipt has been seen."""
    motions = tuple(motion._replace(told=True) if motion.key == key else motion for motion in world.motions)
    return world._replace(motions=motions)


def _clause(wanted: set[Expect]) -> str:
    return min((expect.clause for expect in wanted), default="ACK-01")


def _words(wanted: set[Expect]) -> str:
    shown = []
    for expect in sorted(wanted, key=str):
        fields = "" if expect.fields is None else str(dict(sorted(expect.fields, key=str)))
        shown.append(f"{expect.kind} {fields}".strip())
    return "; ".join(shown) or "none"
