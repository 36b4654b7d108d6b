"""Motions from acceptance to outcome: queue, stated starts, phases, stops, and a simple body.

The body: a motion takes its typical time, and its displacement grows in proportion.
"""

from __future__ import annotations

from dataclasses import dataclass, field

from emulator.config import BONDING, ModuleConfig, MotionConfig

READY, RUNNING, COMMITTED, SETTLING = "ready", "running", "committed", "settling"
# of several causes that end one motion the stronger is told; those not named here count as 0
STRENGTH = {"cancel": 1, "lease-end": 2, "fault": 3, "halt": 4}
STOPPED = {"halt": "halted", "fault": "failed"}
NEVER_BEGUN = {"halt": "halted", "late": "failed", "last-bond": "failed"}
REPEATS_MS = (200, 400, 800, 1600)
POSITION_SPAN = 1 << 32


def is_stronger(cause: str, told: str) -> bool:
    """Whether a cause takes the place of the one told so far."""
    return STRENGTH.get(cause, 0) > STRENGTH.get(told, 0)


@dataclass(slots=True)
class Motion:
    """One accepted move, and its outcome once it is formed (``event`` is then a number).

    ``answer``: place of its receipt in the order of answers; it begins when that has left.
    """

    source: int
    session: int
    number: int
    motion: str
    magnitude: int
    face: int
    allow_last_bond: bool
    answer: int
    start_us: int | None = None
    held: bool = False
    ending: str | None = None
    outcome: str = ""
    cause: str = "none"
    interrupted: str = "none"
    displacement: int = 0
    duration_ms: int = 0
    energy_mj: int = 0
    event: int | None = None
    change: int | None = None
    confirmed: bool = False
    sendings: int = 0
    next_us: int | None = None
    last_sent_us: int = 0

    @property
    def is_open(self) -> bool:
        """Whether the outcome is formed and not confirmed."""
        return self.event is not None and not self.confirmed


@dataclass(slots=True)
class Run:
    """The running motion. ``done_us``: progress before ``resumed_us``; ``stop_us``: when a stop is at rest."""

    motion: Motion
    config: MotionConfig
    begun_us: int
    resumed_us: int
    done_us: int = 0
    phase: str = RUNNING
    held: bool = False
    stop_us: int | None = None

    @property
    def past_return(self) -> bool:
        return bool(self.config.no_return_ms) and self.phase in (COMMITTED, SETTLING)

    def progress_us(self, now_us: int) -> int:
        """How much of the typical time is made."""
        if self.held or self.stop_us is not None:
            return self.done_us
        return min(1000 * self.config.typical_ms, self.done_us + now_us - self.resumed_us)

    def displacement(self, now_us: int) -> int:
        whole = self.motion.magnitude * self.progress_us(now_us)
        return int(whole / (1000 * self.config.typical_ms)) if whole else 0

    def freeze(self, now_us: int) -> None:
        self.done_us = self.progress_us(now_us)
        self.resumed_us = now_us

    def next_us(self) -> int | None:
        """When the phase ends, or the stop is at rest; None while held."""
        if self.stop_us is not None:
            return self.stop_us
        if self.held:
            return None
        until_ms = (
            self.config.no_return_ms
            if self.phase == RUNNING and self.config.no_return_ms
            else self.config.typical_ms
        )
        return self.resumed_us + 1000 * until_ms - self.done_us

    def is_due(self, now_us: int) -> bool:
        next_us = self.next_us()
        return next_us is not None and next_us <= now_us


@dataclass(slots=True)
class Face:
    """One face now."""

    bonded: bool
    neighbour: int


@dataclass(slots=True)
class Body:
    """Position and faces."""

    faces: list[Face]
    position: int = 0
    known: bool = False

    @classmethod
    def new(cls, config: ModuleConfig) -> Body:
        return cls([Face(face.bonded, face.neighbour) for face in config.faces])

    def is_last_bond(self, motion: str, face: int) -> bool:
        return motion == "unbond" and self.faces[face].bonded and sum(one.bonded for one in self.faces) == 1

    def moved(self, displacement: int) -> int:
        """The position after a displacement; the sum wraps as 32 bits do, so that differences stay right."""
        half = POSITION_SPAN // 2
        return (self.position + displacement + half) % POSITION_SPAN - half

    def conclude(self, motion: Motion) -> tuple[str, str]:
        """Outcome and cause of a motion that nothing stopped."""
        if motion.motion == "bond":
            if not self.faces[motion.face].neighbour:
                return "failed", "no-neighbour"
            self.faces[motion.face].bonded = True
        elif motion.motion == "unbond":
            self.faces[motion.face].bonded = False
        else:
            self.known = True
        return "done", "none"


@dataclass(slots=True)
class MotionTable:
    """Places for motions: queued, scheduled, running, and outcomes until they are confirmed and pushed out."""

    config: ModuleConfig
    queued: list[Motion] = field(default_factory=list)
    scheduled: list[Motion] = field(default_factory=list)
    run: Run | None = None
    formed: list[Motion] = field(default_factory=list)
    hold_phase: str | None = None

    # ------------------------------------------------------------ places

    def has_place(self, *, scheduled: bool) -> bool:
        """Whether another motion can wait, or begin at once."""
        if scheduled:
            return len(self.scheduled) < self.config.scheduled
        return len(self.queued) + (self.run is not None) < self.config.queue + 1

    def has_outcome_place(self) -> bool:
        waiting = len(self.queued) + len(self.scheduled) + (self.run is not None)
        return waiting + sum(motion.is_open for motion in self.formed) < self.config.outcomes

    def accept(self, motion: Motion) -> None:
        """Take a motion in; a confirmed outcome makes room for it."""
        (self.queued if motion.start_us is None else self.scheduled).append(motion)
        waiting = len(self.queued) + len(self.scheduled) + (self.run is not None)
        while waiting + len(self.formed) > self.config.outcomes:
            self.formed.remove(next(one for one in self.formed if one.confirmed))

    def next_start_us(self) -> int | None:
        """The nearest stated start; a motion that was ended and waits for rest has none any more."""
        return min((one.start_us or 0 for one in self.scheduled if one.ending is None), default=None)

    def due_starts(self, now_us: int) -> list[Motion]:
        """The motions whose stated start has come."""
        return [one for one in self.scheduled if one.ending is None and (one.start_us or 0) <= now_us]

    def find(self, source: int, session: int, number: int) -> Motion | None:
        """The motion of a request that is queued, scheduled or running."""
        running = [self.run.motion] if self.run else []
        return next(
            (
                motion
                for motion in (*running, *self.queued, *self.scheduled)
                if motion.ending is None
                and (motion.source, motion.session, motion.number) == (source, session, number)
            ),
            None,
        )

    # ------------------------------------------------------------ endings

    def stop_all(self, cause: str, now_us: int) -> None:
        """End everything that is accepted, for one cause; ``take_ended`` has what needs no rest."""
        self.stop_run(cause, now_us)
        for motion in (*self.queued, *self.scheduled):
            self.end(motion, cause)

    def end(self, motion: Motion, cause: str) -> None:
        """A motion that waits will never begin; the strongest cause is told."""
        if motion.ending is None or is_stronger(cause, motion.cause):
            motion.ending = cause
            motion.cause = cause
            motion.outcome = NEVER_BEGUN.get(cause, "cancelled")

    def stop_run(self, cause: str, now_us: int) -> None:
        """Stop the running motion, or note the interruption when it can only land."""
        run = self.run
        if run is None:
            return
        motion = run.motion
        if run.past_return:
            if is_stronger(cause, motion.interrupted):
                motion.interrupted = cause
            return
        if run.stop_us is None:
            run.freeze(now_us)
            run.held = False
            run.stop_us = now_us + 1000 * self.config.stop_ms
        if is_stronger(cause, motion.cause):
            motion.cause = cause
            motion.outcome = STOPPED.get(cause, "cancelled")

    def take_ended(self, *, alone: Motion | None = None) -> list[Motion]:
        """Ended motions that never began, queued before scheduled; only one and those behind it while another runs."""
        if alone is not None and alone in self.queued:
            behind = self.queued[self.queued.index(alone) :]
            for motion in behind[1:]:
                self.end(motion, "predecessor")
            ended = behind
        elif alone is not None:
            ended = [alone]
        elif self.run is not None:
            return []
        else:
            ended = [motion for motion in (*self.queued, *self.scheduled) if motion.ending is not None]
        self.queued = [motion for motion in self.queued if motion not in ended]
        self.scheduled = [motion for motion in self.scheduled if motion not in ended]
        return ended

    # ------------------------------------------------------------ phases

    def enter(self, phase: str, now_us: int) -> None:
        """The running motion comes into a phase, and stays in it if that was asked for."""
        run = self.run
        assert run is not None
        run.phase = phase
        if self.hold_phase == phase:
            self.hold_phase = None
            run.freeze(now_us)
            run.held = True

    def release(self, now_us: int) -> None:
        """Let go what is held; with nothing held, the next motion is not held either."""
        was_held = False
        if self.run is not None and self.run.held:
            self.run.held = False
            self.run.resumed_us = now_us
            was_held = True
        for motion in self.queued:
            was_held |= motion.held
            motion.held = False
        if not was_held:
            self.hold_phase = None


def is_bonding(motion: str) -> bool:
    return motion in BONDING
