"""How a sound module judges a unicast command in one possible state: the refusal stages in the contract's order."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import Any

from protobench.contract import Contract
from protobench.suite.facts import BONDING, Facts
from protobench.suite.model.course import MS, Course
from protobench.suite.model.request import Request
from protobench.suite.model.world import DOOMED, QUEUED, SCHEDULED, Expect, Holder, Motion, World, swap

Judged = Iterator[tuple[Expect, World]]
ACCEPTED = frozenset({("result", "accepted")})
STATE_INPUTS = {  # kinds whose judging by state the table has under their own name
    "take-lease", "renew-lease", "release-lease", "energize", "de-energize", "move", "cancel", "assign-address",
}  # fmt: skip
CLAUSES = {  # whose clause a wrong answer breaks, where it is not ACK-05
    "stale-epoch": "SEQ-14", "stale-lease": "SEQ-15", "not-holder": "LSE-03", "lease-held": "LSE-02",
    "unsupported-version": "VER-01", "unknown-kind": "VER-03", "unsupported": "DSC-04", "out-of-range": "BDY-13",
    "malformed": "BDY-08", "not-understood": "BDY-10", "newer-halt": "HLT-12", "no-such-motion": "MOT-09",
    "busy": "MOT-07", "outcomes-full": "ACK-13", "late": "MOT-12", "too-far": "MOT-12", "last-bond": "MOT-17",
    "conflict": "SEQ-04", "late-unseen": "SEQ-05", "answer-expired": "SEQ-06", "halted": "MOT-01",
    "fault-latched": "MOT-01", "not-energized": "MOT-01", "moving": "STA-01", "energized": "ADR-12",
}  # fmt: skip


class Verdicts:
    """Judges commands; ``clock`` gives the module's clock at an instant with its uncertainty, both in us, or None."""

    def __init__(
        self,
        contract: Contract,
        facts: Facts,
        course: Course,
        clock: Callable[[int], tuple[int, int] | None],
    ) -> None:
        self.contract = contract
        self.facts = facts
        self.course = course
        self.clock = clock
        self.epoch = 0
        self._rows = {row.name: row.carries for row in contract.refusals}
        low, high = contract.limit("start_lead").min, contract.limit("start_lead").max
        self._lead_us = (low * 1000, high * 1000)

    # ------------------------------------------------------------ receipts

    def refusal(self, reason: str, key: int | None, world: World) -> Expect:
        """The refused receipt with what the reason carries."""
        fields: dict[str, Any] = {"result": "refused", "reason": reason}
        if key is not None:
            fields["key"] = key
        told = {
            "epoch": self.epoch,
            "lease": world.lease,
            "holder": world.holder.source if world.holder else 0,
            "holder_session": world.holder.session if world.holder else 0,
            "halt_count": world.halt_count,
            "majors": tuple(self.facts.description.get("majors", (1,))),
        }
        fields |= {name: told[name] for name in self._rows[reason] if name in told}
        return Expect("receipt", frozenset(fields.items()), CLAUSES.get(reason, "ACK-05"))

    # ------------------------------------------------------------ the stages

    def command(self, request: Request, world: World, now: int) -> Judged:
        """Every answer that is allowed in this world, with the world after it."""
        refused = self._before_state(request, world)
        if refused is not None:
            yield self.refusal(*refused, world), world
            return
        yield from self._by_state(request, world, now)

    def _before_state(self, request: Request, world: World) -> tuple[str, int | None] | None:
        for stage in (self._form, self._fence, self._capability, self._range):
            found = stage(request, world)
            if found is not None:
                return found
        return None

    def _form(self, request: Request, world: World) -> tuple[str, int | None] | None:  # noqa: ARG002
        return request.form

    def _fence(self, request: Request, world: World) -> tuple[str, int | None] | None:
        values, frame = request.values, request.frame
        if values.get("epoch") != self.epoch:
            return "stale-epoch", None
        if request.name == "assist":
            return None
        if values.get("lease") != world.lease:
            return "stale-lease", None
        if request.name == "take-lease":
            return ("lease-held", None) if world.holder is not None else None
        return None if world.holds(frame.source, frame.session) else ("not-holder", None)

    def _capability(self, request: Request, world: World) -> tuple[str, int | None] | None:  # noqa: ARG002
        return self.capability(request)

    def capability(self, request: Request) -> tuple[str, int | None] | None:
        assert request.kind is not None
        if request.kind.needs is not None and not self.facts.has(request.kind.needs):
            return "unsupported", None
        name = self._motion(request)
        if name is not None and name not in self.facts.motions:
            return "unsupported", request.kind.field("motion").key
        if (
            request.name == "move"
            and request.values["start_at"] is not None
            and not self.facts.has("schedule")
        ):
            return "unsupported", request.kind.field("start_at").key
        return None

    def _motion(self, request: Request) -> str | None:
        """The motion named, None where none is or there is no such one."""
        number = request.values.get("motion")
        return self.contract.enum_names("motion").get(number) if number is not None else None

    def _range(self, request: Request, world: World) -> tuple[str, int | None] | None:  # noqa: ARG002
        keys = set(request.outside)
        values = request.values
        name = self._motion(request)
        if request.name == "move" and name is not None:
            facts = self.facts.motions[name]
            low, high = (0, 0) if name in BONDING else (facts.magnitude_min, facts.magnitude_max)
            faces = self.facts.description["faces"] if name in BONDING else 1
            keys |= {3} if not low <= values["magnitude"] <= high else set()
            keys |= {4} if not 0 <= values["face"] < faces else set()
        if request.name == "set-groups" and len(values["groups"]) > self.facts.description["groups"]:
            keys.add(2)
        if (
            request.name == "assign-address"
            and values["hardware_id"] != self.facts.description["hardware_id"]
        ):
            keys.add(2)
        return ("out-of-range", min(keys)) if keys else None

    # ------------------------------------------------------------ the state and what follows

    def _by_state(self, request: Request, world: World, now: int) -> Judged:
        name = request.name
        if name == "clear-faults":
            yield from self._clear_faults(request, world, now)
            return
        input_name = name if name in STATE_INPUTS else "other-command"
        if name == "reset":
            input_name = "reset" if request.values["halt_count"] == world.halt_count else "reset-older"
        answer, state = self.course.step(world.state, input_name)
        if answer != "accepted":
            yield self.refusal(answer, None, world), world
            return
        action = _ACTIONS.get(name)
        if action is not None:
            yield from action(self, request, world._replace(state=state), now)
        else:
            yield self.accept(request, world._replace(state=state), now)

    def accept(self, request: Request, world: World, now: int, **told: Any) -> tuple[Expect, World]:
        """The accepted receipt; the holder's lease is extended."""
        holder = world.holder
        if holder is not None and request.name not in ("take-lease", "assist"):
            end = now + holder.duration
            world = world._replace(holder=holder._replace(low=end, high=end))
        return Expect("receipt", ACCEPTED | frozenset(told.items()), "STA-01"), world

    def _take_lease(self, request: Request, world: World, now: int) -> Judged:
        duration = request.values["duration"] * MS
        holder = Holder(request.frame.source, request.frame.session, now + duration, now + duration, duration)
        world = world._replace(lease=(world.lease + 1) % (1 << 32), holder=holder)
        yield self.accept(request, world, now, lease=world.lease)

    def _renew_lease(self, request: Request, world: World, now: int) -> Judged:
        assert world.holder is not None
        yield self.accept(
            request,
            world._replace(holder=world.holder._replace(duration=request.values["duration"] * MS)),
            now,
        )

    def _release_lease(self, request: Request, world: World, now: int) -> Judged:
        held = world._replace(state=world.state._replace(lease="held"))
        for after in self.course.stop(held, "release-lease", "lease-end", now):
            yield self.accept(request, after, now)

    def _de_energize(self, request: Request, world: World, now: int) -> Judged:
        before = world._replace(state=world.state._replace(activity="energized"))
        for after in self.course.stop(before, "de-energize", "de-energized", now):
            yield self.accept(request, after, now)

    def _set_groups(self, request: Request, world: World, now: int) -> Judged:
        yield self.accept(request, world._replace(groups=frozenset(request.values["groups"])), now)

    def _clear_faults(self, request: Request, world: World, now: int) -> Judged:
        """Which occurrences are latched is not followed: what the named ones allow is left open."""
        for input_name in ("clear-faults", "clear-faults-standing"):
            answer, state = self.course.step(world.state, input_name)
            if answer != "accepted":
                yield self.refusal(answer, None, world), world
                continue
            for after in (state, world.state):
                yield self.accept(request, world._replace(state=after), now)
        if world.state.fault and world.state.activity != "moving":
            yield self.refusal("no-such-fault", None, world), world

    # ------------------------------------------------------------ cancel

    def _cancel(self, request: Request, world: World, now: int) -> Judged:
        wanted = request.values["number"]
        if wanted is None:
            for after in self.course.stop(world, "cancel", "cancel", now):
                yield self.accept(request, after, now)
            return
        key = (request.frame.source, request.frame.session, wanted)
        motion = next((motion for motion in world.motions if motion.key == key), None)
        if motion is None or motion.phase == DOOMED:
            yield self.refusal("no-such-motion", None, world), world
            if motion is None:
                return
        if motion.phase == DOOMED:
            yield self.accept(request, world, now)
        elif motion is world.running:
            for stopped in self.course.stopped(motion, "cancel", now):
                yield self.accept(request, world._replace(motions=swap(world.motions, motion, stopped)), now)
        else:
            yield self.accept(request, self.course.cancelled(world, motion, now), now)

    # ------------------------------------------------------------ move

    def _move(self, request: Request, world: World, now: int) -> Judged:
        values, name = request.values, self._motion(request)
        assert name is not None
        if name == "unbond" and not values["allow_last_bond"]:
            yield self.refusal("last-bond", 65, world), world  # which faces are bonded is not followed
        for reason, low, high in self._start(values["start_at"], now):
            if reason:
                yield self.refusal(reason, 64, world), world
                continue
            is_scheduled = values["start_at"] is not None
            may_wait, must_wait = self._room(world, is_scheduled)
            if may_wait:
                yield self.refusal("busy", None, world), world
            if must_wait:
                continue
            places = len(world.motions) + len(world.owed) + len(world.kept)
            if places >= self.facts.description["outcomes"]:
                yield self.refusal("outcomes-full", None, world), world
                continue
            phase = SCHEDULED if is_scheduled else QUEUED
            motion = Motion(request.key, name, phase, low, high)
            yield self.accept(request, world._replace(motions=(*world.motions, motion)), now)

    def _room(self, world: World, is_scheduled: bool) -> tuple[bool, bool]:
        """Whether a move may be refused busy, and whether it must be."""
        if is_scheduled:
            return bool(world.waiting(SCHEDULED)), False
        places = self.facts.description["queue"]
        waiting = len(world.waiting(QUEUED)) + len(world.waiting(DOOMED))
        if world.running is not None:
            return waiting >= places, waiting >= places
        return waiting > 0 and waiting >= places, waiting > places

    def _start(self, start_at: int | None, now: int) -> Iterator[tuple[str, int, int]]:
        """Refusal or none, and between which instants the motion begins."""
        receipt_ns = self.facts.receipt_ms * MS
        if start_at is None:
            yield "", now, now + 2 * receipt_ns
            return
        reading = self.clock(now)
        least, most = self._lead_us
        if reading is None:
            yield from (("late", 0, 0), ("too-far", 0, 0), ("", now, now + most * 1010 + receipt_ns))
            return
        clock, doubt = reading
        lead = (start_at - clock + (1 << 31)) % (1 << 32) - (1 << 31)
        if lead - doubt < least:
            yield "late", 0, 0
        if lead + doubt > most:
            yield "too-far", 0, 0
        if lead + doubt >= least and lead - doubt <= most:
            drift = lead // 100 + doubt + 1000
            yield "", now + (lead - drift) * 1000, now + (lead + drift) * 1000 + receipt_ns


_ACTIONS: dict[str, Callable[[Verdicts, Request, World, int], Judged]] = {
    "take-lease": Verdicts._take_lease,
    "renew-lease": Verdicts._renew_lease,
    "release-lease": Verdicts._release_lease,
    "de-energize": Verdicts._de_energize,
    "set-groups": Verdicts._set_groups,
    "cancel": Verdicts._cancel,
    "move": Verdicts._move,
}
