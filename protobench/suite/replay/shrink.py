"""Makes a failed case short: the fewest frames and waits that still fail in the same way."""

from __future__ import annotations

import time
from collections.abc import Iterator
from collections.abc import Sequence as Listed
from dataclasses import dataclass, replace
from typing import Any

from protobench.judge import CaseRecord
from protobench.suite.case import CaseInfo
from protobench.suite.facts import Facts
from protobench.suite.language import Language
from protobench.suite.replay.ddmin import ddmin
from protobench.suite.replay.lift import Lifter, frames_of
from protobench.suite.replay.observe import Place, Seen, observer
from protobench.suite.replay.oracle import CASE, Differs, Oracle, candidates
from protobench.suite.replay.steps import Send, Sequence, Step, Until, Wait
from protobench.suite.replay.subject import Subject
from protobench.suite.replay.trial import Difference, Trial, Twin
from protobench.suite.watch import Violation

CANDIDATES_MOST = 4
WAITS_MS = (1, 2, 5, 10, 20, 30, 50, 80, 100, 150, 200, 300, 500, 1000, 2000, 5000)
STEPS_MAX = 8000
TAILS = (2, 4, 8, 16, 32)
HEAD = 8
LONGER_MS = 1500.0  # what was still to come when the case failed


@dataclass(slots=True)
class Shrunk:
    """What came of one failure.

    ``oracle``: who decided, ``case`` where only the case itself shows it. ``sequence``: what is left of ``drawn``
    steps; ``where``: the difference to a sound module, where a twin decided. ``repeats``: whether the failure shows
    again; if not, ``differs`` says what came instead. ``plays``: how many it took.
    """

    record: CaseRecord
    oracle: str
    words: str = ""
    clause: str = ""
    way: tuple[str, str] = ("", "")
    sequence: Sequence | None = None
    where: Difference | None = None
    drawn: int = 0
    plays: int = 0
    took_s: float = 0.0
    repeats: bool = True
    differs: str = ""

    @property
    def steps(self) -> int:
        return 0 if self.sequence is None else len(self.sequence.steps)


class Shrinker:
    """Shrinks failures of one module; ``budget_s`` for each."""

    def __init__(self, subject: Subject, budget_s: float) -> None:
        self.subject = subject
        self.budget_s = budget_s
        bench = subject.session.bench
        self.facts: Facts = bench.facts
        self.address = bench.address
        self.language: Language = bench.language
        self.virtual = bench.port.link.virtual
        try:
            self.twin: Twin | None = Twin(bench.facts, bench.address, subject.options.seed, None)
        except ValueError:
            self.twin = None

    def shrink(self, record: CaseRecord, info: CaseInfo) -> Shrunk:
        """The shortest sequence found that fails as the record does, or the case itself."""
        begin = time.monotonic()
        plays = self.subject.plays
        work = _Work(self, begin + self.budget_s)
        found = work.shorten(record) if record.exchange else None
        if found is None:
            found = self._case(record, info)
        found.plays = self.subject.plays - plays
        found.took_s = time.monotonic() - begin
        return found

    def play_twin(self, sequence: Sequence) -> Trial:
        return Trial() if self.twin is None else self.twin.play(sequence)

    def _case(self, record: CaseRecord, info: CaseInfo) -> Shrunk:
        """The last resort: the case's own function says whether it fails again."""
        again = self.subject.judge(info)
        shrunk = Shrunk(record, CASE, record.reason.partition("\n")[0], next(iter(record.broken), ""))
        if again.verdict != record.verdict or again.broken[:1] != record.broken[:1]:
            shrunk.repeats = False
            shrunk.differs = self._first_difference(record, again)
        return shrunk

    def _first_difference(self, record: CaseRecord, again: CaseRecord) -> str:
        """What came instead, and where the two exchanges part."""
        told = f"the case said {again.verdict} this time"
        told += f": {again.reason.partition(chr(10))[0]}" if again.reason else ""
        if not again.exchange:
            return told
        pairs = zip(record.exchange, again.exchange, strict=False)
        for place, (then, now) in enumerate(pairs):
            if (then.direction, _head(then.words)) != (now.direction, _head(now.words)):
                return f"{told}; first difference in frame {place + 1}: {then.words} then, {now.words} now"
        return told


def _head(words: str) -> str:
    return words.partition(" ")[0]


class _Work:
    """Shrinking one failure."""

    def __init__(self, shrinker: Shrinker, until_s: float) -> None:
        self.shrinker = shrinker
        self.subject = shrinker.subject
        self.until_s = until_s
        self._known: dict[tuple[Step, ...], bool] = {}

    def goes_on(self) -> bool:
        return time.monotonic() < self.until_s

    def shorten(self, record: CaseRecord) -> Shrunk | None:
        shrinker = self.shrinker
        lifter = Lifter(shrinker.language, shrinker.address, virtual=shrinker.virtual)
        sequence = lifter.lift(record.exchange, record.ended_ns)
        if len(sequence.steps) > STEPS_MAX or not self.subject.may_play(sequence):
            return None
        recorded = self._recorded(record)
        longer = sequence.with_steps([*sequence.steps, Wait(LONGER_MS)])
        for tried in (sequence, longer):
            module, twin = self.subject.play(tried, fresh=True), shrinker.play_twin(tried)
            for place, oracle in enumerate(candidates(record.broken, recorded, module, twin)):
                if place >= CANDIDATES_MOST or not self.goes_on():
                    break
                found = self._by(oracle, record, tried)
                if found is not None:
                    return found
        return None

    def _recorded(self, record: CaseRecord) -> dict[Place, Seen]:
        frames = list(frames_of(record.exchange, self.shrinker.language))
        return observer(self.subject.session.bench).observe([], frames, record.ended_ns)[0]

    def _by(self, oracle: Oracle, record: CaseRecord, sequence: Sequence) -> Shrunk | None:
        """Shrink by one oracle; None where what is left does not show it on a new module."""
        self._known.clear()

        def shows(steps: Listed[Step]) -> bool:
            key = tuple(steps)
            if key not in self._known:
                self._known[key] = self._shows(oracle, sequence.with_steps(steps))
            return self._known[key]

        if not shows(sequence.steps):
            return None
        steps = self._short_tail(list(sequence.steps), shows)
        steps = ddmin(steps, shows, self.goes_on)
        steps = self._simpler(steps, shows)
        short = sequence.with_steps(steps)
        module, twin = self.subject.play(short, fresh=True), self.shrinker.play_twin(short)
        if not oracle.shows(module, twin):
            return None
        way = getattr(oracle, "way", ("", ""))
        where = oracle.where(module, twin) if isinstance(oracle, Differs) else None
        return Shrunk(
            record, oracle.name, self._words(oracle, module), oracle.clause, way[:2], short, where,
            drawn=len(sequence.steps),
        )  # fmt: skip

    def _words(self, oracle: Oracle, module: Trial) -> str:
        """What is wrong, as the last play shows it."""
        found: list[Violation] = [*module.watched, *module.modelled]
        ways = [violation for violation in found if violation.clause == oracle.clause]
        return f"{ways[0].clause}: {ways[0].reason}" if ways and oracle.name != "twin" else oracle.words

    def _shows(self, oracle: Oracle, sequence: Sequence) -> bool:
        module = self.subject.play(sequence)
        return oracle.suspects(module) and oracle.shows(module, self.shrinker.play_twin(sequence))

    def _short_tail(self, steps: list[Step], shows: Any) -> list[Step]:
        """Most failures show in the last frames, with the first for the preamble: try these before all else."""
        for size in TAILS:
            for tried in (steps[-size:], steps[:HEAD] + steps[-size:], steps[: 2 * HEAD] + steps[-size:]):
                if len(tried) < len(steps) and self.goes_on() and shows(tried):
                    return tried
        return steps

    # ------------------------------------------------------------ simpler steps

    def _simpler(self, steps: list[Step], shows: Any) -> list[Step]:
        """Shorter waits, fewer fields, numbers that follow each other."""
        for place in range(len(steps)):
            for other in _simpler(steps[place]):
                if not self.goes_on():
                    return steps
                tried = [*steps[:place], other, *steps[place + 1 :]]
                if shows(tried):
                    steps = tried
                    break
        renumbered = _renumbered(steps)
        return renumbered if renumbered != steps and self.goes_on() and shows(renumbered) else steps


def _simpler(step: Step) -> Iterator[Step]:
    """Simpler forms of a step, the simplest first."""
    if isinstance(step, Wait | Until):
        yield from (replace(step, ms=float(ms)) for ms in WAITS_MS if ms < step.ms)
    elif isinstance(step, Send):
        if step.fields:
            optional = [field for field in step.fields if field[0] not in ("epoch", "lease")]
            yield from (
                replace(step, fields=tuple(kept for kept in step.fields if kept is not field))
                for field in optional
            )
        if not step.awaits:
            yield replace(step, awaits=True)


def _renumbered(steps: Listed[Step]) -> list[Step]:
    """Each controller's numbers from 1 on, without gaps, where the distance of numbers is no matter."""
    numbers: dict[str, dict[int, int]] = {}
    for step in steps:
        if isinstance(step, Send):
            numbers.setdefault(step.who, {}).setdefault(step.number, 0)
    for own in numbers.values():
        for place, number in enumerate(own, 1):
            own[number] = place
    return [_with_numbers(step, numbers) if isinstance(step, Send) else step for step in steps]


def _with_numbers(step: Send, numbers: dict[str, dict[int, int]]) -> Send:
    own = numbers[step.who]

    def changed(name: Any, value: Any) -> Any:
        if name == "number" and isinstance(value, int):
            return own.get(value, value)
        if name == "event" and hasattr(value, "of") and value.of and value.of[0] == "outcome":
            _, who, number = value.of
            return value._replace(of=("outcome", who, numbers.get(who, {}).get(number, number)))
        return value

    fields = tuple((name, changed(name, value)) for name, value in step.fields)
    return replace(step, number=own[step.number], fields=fields)
