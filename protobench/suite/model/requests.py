"""What the module may make of a frame that was sent to it."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from typing import TYPE_CHECKING

from protobench.suite.model.course import MS
from protobench.suite.model.history import CONFLICT, COPY, EXPIRED, FRESH, UNKNOWN, UNSEEN
from protobench.suite.model.request import Request
from protobench.suite.model.world import Expect, World

if TYPE_CHECKING:
    from protobench.suite.model.model import Model

NO_ROOM_FROM = 4  # so many answers waiting, and a request may be dropped for want of room
REFUSED_BY_HISTORY = {CONFLICT, UNSEEN, EXPIRED}
WINDOW_MAX_MS = 2000
Judged = Iterable[tuple[Expect | None, World]]


class Requests:
    """Makes the worlds after each frame sent."""

    def __init__(self, model: Model) -> None:
        self.model = model
        self.contract = model.contract

    def sent(self, data: bytes) -> None:
        """A frame was sent at the model's instant."""
        model = self.model
        request = model.reader.read(data)
        for pending in model.pending:
            pending.alone = False
        if request is None:
            return
        model.asking.add(request.key[:2])
        if model.worlds is None:
            self._unjudged(request)
            return
        if request.class_ in ("private", "command_private"):
            model.lose()
            return
        included = self._included(request)
        if included is None:
            self._only_for_some(request)
        elif included:
            self._taken(request)

    def _unjudged(self, request: Request) -> None:
        """Nothing is known: the history is, and what a request asked may answer."""
        if request.class_ == "command" and request.name != "halt" and not request.bad_length:
            self.model.history.judge(request)
        self.model.unjudged.add(request.key)

    # ------------------------------------------------------------ addresses

    def _included(self, request: Request) -> bool | None:
        """Whether the destination includes the module; None when that depends on groups that are not known."""
        destination = request.frame.destination
        if destination in (self.model.address, self.contract.addresses.broadcast):
            return True
        if not request.many:
            return False
        assert self.model.worlds is not None
        members = {world.groups is not None and destination in world.groups for world in self.model.worlds}
        unknown = any(world.groups is None for world in self.model.worlds)
        return None if unknown or len(members) > 1 else members.pop()

    def _only_for_some(self, request: Request) -> None:
        if request.name in ("halt", "renew-lease", "telemetry-off", "assign-address", "probe"):
            self.model.lose()

    def _is_nobody(self, source: int) -> bool:
        first, last = self.contract.addresses.unicast_first, self.contract.addresses.unicast_last
        return not first <= source <= last

    # ------------------------------------------------------------ by class

    def _taken(self, request: Request) -> None:
        source = request.frame.source
        is_own, is_nobody = source == self.model.address, self._is_nobody(source)
        if request.name == "halt":
            self._halt(request, answered=not (is_own or is_nobody))
            return
        if is_own:
            self._conflict_of_addresses()
            return
        if is_nobody or request.class_ not in ("read", "command", "notice"):
            return
        if request.class_ == "notice":
            if request.name == "confirm" and request.frame.version == 1 and not request.bad_length:
                self._confirm(request)
            return
        if request.frame.version != 1:
            if not request.many:
                self._judge(request, lambda world: self._refused("unsupported-version", None, world))
            return
        if not request.bad_length:
            (self._to_many if request.many else self._unicast)(request)

    def _unicast(self, request: Request) -> None:
        if request.class_ == "read":
            self._judge(request, lambda world: self._read(request, world))
            return
        fate = self.model.history.judge(request)
        if fate == UNKNOWN:
            self.model.lose()
        elif fate == COPY:
            self._judge(request, lambda world: [(Expect("receipt", None, "SEQ-03"), world)], copied=True)
        elif fate in REFUSED_BY_HISTORY:
            self._judge(request, lambda world: self._refused(fate, None, world))
        elif request.name == "assist":
            self.model.lose()  # it changes what is not followed here
        else:
            verdicts, now = self.model.verdicts, self.model.now
            self._judge(request, lambda world: verdicts.command(request, world, now))
            if request.name == "telemetry-on" and request.form is None:
                self.model.telemetry[request.key] = now + request.values["duration"] * MS

    def _refused(self, reason: str, key: int | None, world: World) -> Judged:
        return [(self.model.verdicts.refusal(reason, key, world), world)]

    def _read(self, request: Request, world: World) -> Judged:
        if request.form is not None:
            return self._refused(*request.form, world)
        refused = self.model.verdicts.capability(request)
        if refused is not None:
            return self._refused(*refused, world)
        if request.outside:
            return self._refused("out-of-range", min(request.outside), world)
        assert request.kind is not None
        return [(Expect(request.kind.answer or "receipt", None, "ACK-01"), world)]

    # ------------------------------------------------------------ halt, conflict, confirm

    def _halt(self, request: Request, *, answered: bool) -> None:
        is_asked = answered and not request.many

        def after(world: World) -> Iterator[tuple[Expect | None, World]]:
            for stopped in self.model.course.stop(world, "halt", "halt", self.model.now):
                halted = stopped._replace(halt_count=(world.halt_count + 1) % (1 << 32))
                found = world.running and halted.running
                disposition = "at-rest" if not found else "past-no-return" if found.landing else "stopping"
                told = {
                    "disposition": disposition,
                    "halt_count": halted.halt_count,
                    "epoch": self.model.verdicts.epoch,
                }
                yield (
                    (Expect("halt-receipt", frozenset(told.items()), "HLT-05") if is_asked else None),
                    halted,
                )

        self._judge(request, after, ordered=False)
        if answered and request.many:
            self._await_many(request)

    def _conflict_of_addresses(self) -> None:
        def after(world: World) -> Iterator[tuple[None, World]]:
            if world.state.fault:
                yield None, world
            for stopped in self.model.course.stop(world, "fault", "fault", self.model.now):
                yield None, stopped

        self._judge(None, after)

    def _confirm(self, request: Request) -> None:
        values = request.values
        key = self.model.events.get(values.get("event", -1))
        if request.form or request.many or values.get("epoch") != self.model.verdicts.epoch or key is None:
            return
        who = request.key[:2]

        def after(world: World) -> Iterator[tuple[None, World]]:
            allowed = who == key[:2] or world.holds(*who)
            yield None, world._replace(kept=world.kept - {key}) if allowed else world

        if who == key[:2]:
            self.model.confirmed.setdefault(values["event"], self.model.now)
        self._judge(None, after)

    # ------------------------------------------------------------ to many

    def _to_many(self, request: Request) -> None:
        kind = request.kind
        if kind is None or not kind.many:
            return
        if request.class_ == "read":
            if request.form is None and not request.outside:
                self._await_many(request)
            return
        if self.model.history.judge(request) != FRESH or request.form is not None or request.outside:
            return
        if kind.needs is not None and not self.model.facts.has(kind.needs):
            return
        if kind.name == "renew-lease":
            self._renew_many(request)
        elif kind.name == "assign-address":
            own = request.values["hardware_id"] == self.model.facts.description["hardware_id"]
            if own and request.values["epoch"] == self.model.verdicts.epoch:
                self.model.lose()
        self._await_many(request)

    def _renew_many(self, request: Request) -> None:
        duration = request.values["duration"] * MS
        end = self.model.now + duration

        def after(world: World) -> Iterator[tuple[None, World]]:
            holder = world.holder
            if holder is not None and world.holds(*request.key[:2]):
                world = world._replace(holder=holder._replace(low=end, high=end, duration=duration))
            yield None, world

        self._judge(None, after)

    def _await_many(self, request: Request) -> None:
        assert request.kind is not None
        window_ms = request.values.get("answer_window")
        if not isinstance(window_ms, int) or not 0 < window_ms <= WINDOW_MAX_MS:
            return
        self.model.many[request.key] = (request.kind.answer or "", self.model.now + window_ms * MS)

    # ------------------------------------------------------------ the worlds after

    def _judge(
        self,
        request: Request | None,
        judge: Callable[[World], Judged],
        *,
        ordered: bool = True,
        copied: bool = False,
    ) -> None:
        """Make the worlds after; with a request that is answered, each remembers the answer it gives."""
        model = self.model
        assert model.worlds is not None
        may_drop = request is not None and len(model.pending) >= NO_ROOM_FROM
        place = model.places
        after: set[World] = set()
        is_asked = False
        for world in model.worlds:
            if may_drop:
                after.add(world)
            for expect, then in judge(world):
                is_asked |= expect is not None
                after.add(then if expect is None else then._replace(asked=(*then.asked, (place, expect))))
        model.worlds = after
        if request is not None and is_asked:
            self._pend(request, ordered=ordered, copied=copied, optional=may_drop)

    def _pend(
        self, request: Request, *, ordered: bool = True, copied: bool = False, optional: bool = False
    ) -> None:
        from protobench.suite.model.model import Pending  # noqa: PLC0415 - it holds these

        model = self.model
        model.pending.append(
            Pending(model.places, request, model.now, ordered=ordered, copied=copied, optional=optional)
        )
        model.places += 1
