"""Many motions in a row, each judged: as many as a stated reliability with a stated confidence needs."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass, field

from protobench.judge import CaseVerdict, Exchange, Failed, Inconclusive, NotApplicable
from protobench.judge.statistics import lower_limit, trials_needed
from protobench.links import LinkError
from protobench.suite.bench import Bench
from protobench.suite.facts import BONDING, MotionFacts
from protobench.suite.port import Received, Sent
from protobench.suite.session import Session

SHARE = 0.01  # of a magnitude, by which a displacement may differ (MOT-04)
STATUS_EVERY = 50
UNCLEAR_MAX = 20
LEASE_MS = 30_000
FRAMES_SHOWN = 40

Progress = Callable[["Soak"], None]


@dataclass(slots=True)
class Soak:
    """A soak as far as it has come.

    ``made``: motions that were judged; ``unclear``: such as a frame may have been lost for, not counted;
    ``reason``: the failure that ended it, with the last frames in ``exchange``; ``stopped``: what else ended it.
    """

    reliability: float
    confidence: float
    motion: str
    needed: int
    made: int = 0
    unclear: int = 0
    reason: str = ""
    exchange: list[Exchange] = field(default_factory=list)
    stopped: str = ""
    begun_s: float = field(default_factory=time.monotonic)

    @property
    def is_complete(self) -> bool:
        return self.made >= self.needed and not self.reason

    @property
    def shown(self) -> float:
        """The reliability that is shown with the confidence by what was made; 0 for nothing."""
        failures = 1 if self.reason else 0
        return lower_limit(self.made - failures, self.made, self.confidence) if self.made else 0.0

    @property
    def remaining_s(self) -> float:
        """How long the rest takes if it goes on as until now."""
        passed_s = time.monotonic() - self.begun_s
        return passed_s / self.made * (self.needed - self.made) if self.made else float("inf")


def plan(bench: Bench, reliability: float, confidence: float, motion: str | None) -> Soak:
    """What is to be made. Raises ValueError for a motion that the module does not have, and for shares out of range."""
    known = {name: facts for name, facts in bench.facts.motions.items() if name not in BONDING}
    if not known:
        raise ValueError("the module declares no motion but of its faces")
    if motion is not None and motion not in known:
        raise ValueError(f"motion {motion!r}: the module has {', '.join(sorted(known))}")
    name = motion or bench.facts.travel().name
    return Soak(reliability, confidence, name, trials_needed(reliability, confidence))


def run(session: Session, soak: Soak, progress: Progress | None = None) -> None:
    """Make the motions until the number is reached, one fails, or too many are unclear.

    A KeyboardInterrupt is the caller's; ``soak`` then holds what was made.
    """
    bench = session.bench
    try:
        bench.begin("soak")
        bench.a.make_ready(LEASE_MS)
        while soak.made < soak.needed and soak.unclear < UNCLEAR_MAX:
            _one(bench, soak)
            if soak.reason:
                return
            if progress is not None:
                progress(soak)
        if soak.unclear >= UNCLEAR_MAX:
            soak.stopped = f"{UNCLEAR_MAX} motions were unclear: a frame may have been lost each time"
            return
        bench.end()
    except (CaseVerdict, NotApplicable) as verdict:
        soak.reason = soak.reason or str(verdict)
    except LinkError as error:
        soak.reason = f"LOD-02: the link to the module ended: {error}"


def _one(bench: Bench, soak: Soak) -> None:
    """One motion and all that must be true of it."""
    bench.port.begin_case()
    facts = bench.facts.motions[soak.motion]
    magnitude = _magnitude(facts, soak.made)
    try:
        sent = bench.a.move(soak.motion, magnitude=magnitude)
        outcome = bench.a.ended(sent, "done", "none", "MOT-04")
        _judge(bench, sent, outcome, magnitude, facts)
        if soak.made % STATUS_EVERY == STATUS_EVERY - 1:
            _judge_status(bench)
        for violation in bench.port.watch.violations:
            raise Failed(violation.reason, clause=violation.clause)
    except Inconclusive:
        soak.unclear += 1
    except CaseVerdict as verdict:
        soak.made += 1
        soak.reason = f"motion {soak.made}: {verdict}"
        soak.exchange = bench.port.exchange(last=FRAMES_SHOWN)
    else:
        soak.made += 1


def _magnitude(facts: MotionFacts, made: int) -> int:
    """There and back, where the range has two sides, so that a module goes on moving about one place."""
    back = -facts.magnitude
    return back if made % 2 and facts.magnitude_min <= back <= facts.magnitude_max else facts.magnitude


def _judge(bench: Bench, sent: Sent, outcome: Received, magnitude: int, facts: MotionFacts) -> None:
    if abs(outcome["displacement"] - magnitude) > max(1, SHARE * abs(magnitude)):
        raise Failed(f"a motion of {magnitude} ended done with {outcome['displacement']}", clause="MOT-04")
    if outcome["duration_ms"] > facts.longest_ms:
        raise Failed(
            f"it took {outcome['duration_ms']} ms; {facts.longest_ms} are declared at most", clause="MOT-04"
        )
    again = [
        one for one in bench.port.inbox if one.kind == "outcome" and one.frame.number != sent.frame.number
    ]
    if again:
        raise Failed(f"an outcome of another motion came: #{again[0].frame.number}", clause="ACK-07")


def _judge_status(bench: Bench) -> None:
    status = bench.a.status()
    wanted = {"activity": "energized", "halt_latch": False, "fault_latch": False, "queued": 0, "scheduled": 0}
    wrong = {name: status[name] for name, value in wanted.items() if status[name] != value}
    if wrong:
        raise Failed(f"between motions the status must say {wanted}; it says {wrong}", clause="STA-01")
