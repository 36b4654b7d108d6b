"""What happens to a module without a request: leases end, motions begin and rest; and what stops them."""

from __future__ import annotations

from collections.abc import Iterator

from protobench.contract import Contract, State, StateTable
from protobench.suite.facts import BONDING, Facts
from protobench.suite.model.world import (
    DOOMED,
    QUEUED,
    RUNNING,
    SCHEDULED,
    Ending,
    Motion,
    Owed,
    World,
    swap,
)

MS = 1_000_000
RACE_NS = 2 * MS  # within which two instants that the bench cannot order may fall in either order
ENDINGS_BY_CAUSE = {
    "halt": ("halted", "halt"),
    "fault": ("failed", "fault"),
    "lease-end": ("cancelled", "lease-end"),
    "cancel": ("cancelled", "cancel"),
}
NEVER_BEGUN = {
    **ENDINGS_BY_CAUSE,
    "fault": ("cancelled", "fault"),
    "de-energized": ("cancelled", "de-energized"),
}


class Course:
    """Steps of worlds in time.

    ``slack_ns``: how much later than it was something may seem to the bench, besides the contract's limits.
    """

    def __init__(self, contract: Contract, facts: Facts, slack_ns: int) -> None:
        self.table: StateTable = contract.states
        self.facts = facts
        self.slack_ns = slack_ns
        self.outcome_ns = contract.limit("outcome_time").max * MS
        self.lease_late_ns = contract.limit("outcome_time").max * MS

    # ------------------------------------------------------------ inputs of the state table

    def settles(self, *causes: str) -> str:
        return self.facts.settles_for(*causes)

    def step(self, state: State, input_name: str) -> tuple[str, State]:
        return self.table.step(state, input_name, self.settles)

    # ------------------------------------------------------------ stops

    def stop(self, world: World, input_name: str, cause: str, now: int) -> Iterator[World]:
        """The worlds after ``input_name``, which stops every motion for ``cause``."""
        _, state = self.step(world.state, input_name)
        world = world._replace(state=state)
        if input_name in ("lease-end", "release-lease"):
            world = world._replace(holder=None)
        doomed = tuple(
            motion if motion.phase == RUNNING else motion._replace(phase=DOOMED).stopped(cause)
            for motion in world.motions
        )
        running = world.running
        if running is None:
            yield self._end_doomed(world._replace(motions=doomed), now)
            return
        for stopped in self.stopped(running, cause, now):
            yield world._replace(motions=swap(doomed, running, stopped))

    def stopped(self, running: Motion, cause: str, now: int) -> Iterator[Motion]:
        """The running motion after a stop: stopped, past its point of no return, or either where it is close."""
        if running.stop:
            yield running.stopped(cause)
            return
        facts = self.facts.motions[running.name]
        ways = [True, False]
        if facts.no_return_ms == 0:
            ways = [False]
        else:
            no_return_ns = facts.no_return_ms * MS
            if now + 2 * self.slack_ns < running.low + no_return_ns - RACE_NS:
                ways = [False]
            elif now > running.high + no_return_ns + RACE_NS + self.slack_ns:
                ways = [True]
        for landing in ways:
            rest = running.rest if landing else now + self.facts.stop_ms * MS
            yield running._replace(rest=rest, landing=landing).stopped(cause)

    def _end_doomed(self, world: World, now: int) -> World:
        """At rest: what was stopped before it began has ended."""
        ended = tuple(
            Owed(motion.key, motion.name, never_begun(motion), False, now + self.outcome_ns)
            for motion in world.motions
            if motion.phase == DOOMED
        )
        left = tuple(motion for motion in world.motions if motion.phase != DOOMED)
        return world._replace(motions=left, owed=world.owed + ended)

    def drop_queued(self, world: World, now: int, after: int = 0) -> World:
        """Queued motions end because one before them did not end done; those from place ``after`` on."""
        ended = tuple(
            Owed(
                motion.key,
                motion.name,
                frozenset({("cancelled", "predecessor", "none")}),
                False,
                now + self.outcome_ns,
            )
            for motion in world.motions[after:]
            if motion.phase == QUEUED
        )
        left = tuple(
            motion for place, motion in enumerate(world.motions) if place < after or motion.phase != QUEUED
        )
        return world._replace(motions=left, owed=world.owed + ended)

    def cancelled(self, world: World, motion: Motion, now: int) -> World:
        """A waiting motion ends by its number, and those queued behind it with it."""
        return self._never(world, motion, ("cancelled", "cancel", "none"), now)

    # ------------------------------------------------------------ time

    def futures(self, worlds: set[World], since: int, now: int, most: int) -> set[World]:
        """Every world that can hold at ``now``, when these could at ``since``; what is overdue is left in."""
        seen = set(worlds)
        waiting = list(worlds)
        while waiting and len(seen) <= most:
            for after in self._inner(waiting.pop(), since, now):
                if after not in seen:
                    seen.add(after)
                    waiting.append(after)
        return seen

    def _inner(self, world: World, since: int, now: int) -> Iterator[World]:
        """What can happen next by itself."""
        holder = world.holder
        if holder is not None and now >= holder.low:
            yield from self.stop(world, "lease-end", "lease-end", now)
        running = world.running
        if running is not None:
            if now >= running.low:
                yield from self._rest(world, running, now)
            yield from self._too_late(world, now)
            return
        for motion in [*world.waiting(QUEUED)[:1], *world.waiting(SCHEDULED)]:
            if motion.told and now >= motion.low:
                yield from self._begin(world, motion, since, now)

    def _begin(self, world: World, motion: Motion, since: int, now: int) -> Iterator[World]:
        _, state = self.step(world.state, "begin")
        if state.activity != RUNNING_ACTIVITY:
            return
        low, high = max(motion.low, since), min(max(motion.high, since), now)
        rest = high + self.facts.motions[motion.name].longest_ms * MS
        begun = motion._replace(phase=RUNNING, low=min(low, high), high=high, rest=rest)
        yield world._replace(state=state, motions=swap(world.motions, motion, begun))
        if motion.name == "unbond":  # the bond may have become the only one
            yield self._never(world, motion, ("failed", "last-bond", "none"), now)

    def _too_late(self, world: World, now: int) -> Iterator[World]:
        """A stated start that comes while another motion runs."""
        for motion in world.waiting(SCHEDULED):
            if now >= motion.low:
                yield self._never(world, motion, ("failed", "late", "none"), now, is_queued=False)

    def _never(
        self, world: World, motion: Motion, ending: Ending, now: int, *, is_queued: bool = True
    ) -> World:
        place = world.motions.index(motion)
        owed = Owed(motion.key, motion.name, frozenset({ending}), False, now + self.outcome_ns)
        left = world.motions[:place] + world.motions[place + 1 :]
        after = world._replace(motions=left, owed=(*world.owed, owed))
        return self.drop_queued(after, now, place) if is_queued and motion.phase == QUEUED else after

    def _rest(self, world: World, running: Motion, now: int) -> Iterator[World]:
        """The running motion comes to rest: done, failed or stopped, each with what follows from it."""
        _, state = self.step(world.state, "rest")
        left = tuple(motion for motion in world.motions if motion is not running)
        rest = min(now, max(running.rest, running.low))
        for endings, goes_on in _endings(running):
            owed = Owed(running.key, running.name, endings, True, now + self.outcome_ns)
            after = world._replace(state=state, motions=left, owed=(*world.owed, owed))
            after = self._end_doomed(after, now)
            if not goes_on:
                after = self.drop_queued(after, now)
            yield self._ready_first(after, running.low, rest)

    def _ready_first(self, world: World, low: int, rest: int) -> World:
        queued = world.waiting(QUEUED)
        if not queued:
            return world
        high = rest + self.outcome_ns + self.facts.receipt_ms * MS
        return world._replace(motions=swap(world.motions, queued[0], queued[0]._replace(low=low, high=high)))

    # ------------------------------------------------------------ what is overdue

    def overdue(self, world: World, now: int) -> tuple[str, str] | None:
        """The clause and the reason why a world cannot hold any more at ``now``; None when it can."""
        late = now - self.slack_ns
        if world.holder is not None and late > world.holder.high + self.lease_late_ns:
            return "LSE-05", "the lease has not ended at its time"
        running = world.running
        if running is not None and late > running.rest:
            clause = "MOT-16" if running.stop and not running.landing else "MOT-04"
            return clause, f"{running.name} #{running.key[2]} has not come to rest in its time"
        for owed in world.owed:
            if late > owed.due:
                return "ACK-07", f"no outcome of {owed.name} #{owed.key[2]} in its time"
        if running is None:
            first = [*world.waiting(QUEUED)[:1], *world.waiting(SCHEDULED)]
            for motion in first:
                if motion.told and late > motion.high:
                    return "MOT-21", f"{motion.name} #{motion.key[2]} has not begun in its time"
        return None


RUNNING_ACTIVITY = "moving"


def never_begun(motion: Motion) -> frozenset[Ending]:
    return frozenset({(*NEVER_BEGUN[motion.stop], "none")})


def _endings(running: Motion) -> Iterator[tuple[frozenset[Ending], bool]]:
    """How a running motion may end, and whether those queued behind it go on."""
    interrupted = running.stop or "none"
    if running.stop and not running.landing:
        yield frozenset({(*ENDINGS_BY_CAUSE[running.stop], "none")}), False
        return
    yield frozenset({("done", "none", interrupted)}), True
    if running.landing or running.name in BONDING:
        yield frozenset({("failed", "*", interrupted)}), False
