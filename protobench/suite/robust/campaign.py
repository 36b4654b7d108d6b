"""Many sequences within a budget, each judged as a case; what fails is made short."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field

from protobench.judge import CaseRecord
from protobench.suite.bench import Bench
from protobench.suite.case import CaseInfo
from protobench.suite.robust.player import Player, Tally
from protobench.suite.robust.steps import Grammar, Step
from protobench.suite.session import Session
from protobench.suite.tools import SATURATION

FAILURES_MAX = 5
SHRINK_PLAYS_MAX = 150
CLAUSES = ("LOD-01", "LOD-02")
Progress = Callable[[int, int], None]


def play_counted(bench: Bench, steps: Sequence[Step], tally: Tally) -> None:
    """Play one sequence; what the module counted as dropped meanwhile must be what was sent to be dropped."""
    before, _ = bench.counters()
    player = Player(bench, tally)
    player.play(steps)
    after, _ = bench.counters()
    counted = {name: after[name] - count for name, count in before.items()}
    tally.drops.update(counted)
    if SATURATION not in after.values():
        player.check_drops(counted)


@dataclass(slots=True)
class Failure:
    """A sequence that failed: the shortest found that still fails with the same clause, and how it went."""

    index: int
    steps: list[Step]
    drawn: int
    record: CaseRecord


@dataclass(slots=True)
class Campaign:
    """Sequences against the module of a session. ``drops``: what the module counted meanwhile."""

    session: Session
    seed: int
    tally: Tally = field(default_factory=Tally)
    failures: list[Failure] = field(default_factory=list)

    def run(self, indices: Iterator[int], until_s: float | None, progress: Progress | None = None) -> None:
        """Play the sequences of these numbers until the time is over or too many failed."""
        grammar = Grammar(self.session.contract, self.session.bench.facts)
        for index in indices:
            if until_s is not None and time.monotonic() >= until_s:
                return
            steps = grammar.sequence(self.seed, index)
            record = self.play(steps, index)
            if record.verdict in ("fail", "error"):
                self.failures.append(self._shortened(Failure(index, steps, len(steps), record)))
                if len(self.failures) >= FAILURES_MAX:
                    return
            if progress is not None:
                progress(self.tally.sequences, len(self.failures))

    def once(self, steps: Sequence[Step]) -> None:
        """Play one sequence as it is."""
        record = self.play(steps, 0)
        if record.verdict in ("fail", "error"):
            self.failures.append(Failure(0, list(steps), len(steps), record))

    def play(self, steps: Sequence[Step], index: int, tally: Tally | None = None) -> CaseRecord:
        """Play one sequence as a case, between the bench's preamble and postamble."""
        counted = self.tally if tally is None else tally

        def function(bench: Bench) -> None:
            play_counted(bench, steps, counted)

        name = f"LOD.sequence-{index}"
        purpose = "A generated sequence is answered as the contract says."
        return self.session.judge(CaseInfo(name, "required", "invalid", purpose, CLAUSES, "", function))

    def _shortened(self, failure: Failure) -> Failure:
        """Leave out steps, many at first, then one by one, as long as the same clause stays broken."""
        plays = 0
        size = max(1, len(failure.steps) // 2)
        while size:
            place = 0
            while place < len(failure.steps) and plays < SHRINK_PLAYS_MAX:
                fewer = failure.steps[:place] + failure.steps[place + size :]
                record = self.play(fewer, failure.index, Tally())
                plays += 1
                if (
                    record.verdict == failure.record.verdict
                    and record.broken[:1] == failure.record.broken[:1]
                ):
                    failure = Failure(failure.index, fewer, failure.drawn, record)
                else:
                    place += size
            size //= 2
        return failure
