"""Running sequences against a subject and saying where it first differs from its machine."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from typing import NamedTuple

from protobench.judge import CaseVerdict, Exchange, Inconclusive
from protobench.suite.machines.mealy import Mealy, Subject, Word

RUNS = 3  # of a sequence that differs: two must agree
UNREPEATED_MAX = 20  # sequences that do not repeat; more say nothing new
RESET = -1
START = "the start"


class Found(NamedTuple):
    """Where one run of a sequence differed: ``at`` is the place of the input, RESET for the way back to the start."""

    at: int
    expected: str
    got: str
    clause: str = ""
    unclear: bool = False


class Difference(NamedTuple):
    """A sequence that differed twice in the same way, and what passed when it did."""

    word: Word
    found: Found
    exchange: tuple[Exchange, ...] = ()


@dataclass(slots=True)
class Comparison:
    """What was run, and what was found. ``unrepeated``: sequences that differed and did not do so again."""

    sequences: int = 0
    inputs: int = 0
    difference: Difference | None = None
    unrepeated: list[Word] = field(default_factory=list)

    @property
    def is_over(self) -> bool:
        return self.difference is not None or len(self.unrepeated) >= UNREPEATED_MAX

    def add(self, other: Comparison) -> None:
        """Join what another process ran; the first difference stays."""
        self.sequences += other.sequences
        self.inputs += other.inputs
        self.difference = self.difference or other.difference
        self.unrepeated += other.unrepeated


class Tape:
    """What passes on the way; this one keeps nothing."""

    def begin(self) -> None:
        """A sequence begins."""

    def taken(self) -> tuple[Exchange, ...]:
        """What passed since."""
        return ()


def compare(
    machine: Mealy,
    subject: Subject,
    words: Iterable[Word],
    goes_on: Callable[[Comparison], bool],
    tape: Tape | None = None,
) -> Comparison:
    """Run sequences until one differs or ``goes_on`` says no; it is asked before each.

    Raises LinkError when the link to the module ends.
    """
    tape = tape or Tape()
    done = Comparison()
    for word in words:
        if not goes_on(done):
            break
        found = run_word(machine, subject, word, tape)
        done.sequences += 1
        done.inputs += len(word)
        if found is not None:
            _settle(machine, subject, word, found, done, tape)
            if done.is_over:
                break
    return done


def _settle(machine: Mealy, subject: Subject, word: Word, first: Found, done: Comparison, tape: Tape) -> None:
    """Run a sequence that differed again: a difference is one that comes twice."""
    seen = {first}
    for _ in range(RUNS - 1):
        again = run_word(machine, subject, word, tape)
        if again in seen and not again.unclear:
            done.difference = Difference(word, again, tape.taken())
            return
        if again is not None:
            seen.add(again)
    done.unrepeated.append(word)


def run_word(machine: Mealy, subject: Subject, word: Word, tape: Tape | None = None) -> Found | None:
    """Where one run of a sequence differs from the machine, if it does."""
    at, expected, state = RESET, START, machine.initial
    if tape is not None:
        tape.begin()
    try:
        subject.reset()
        for at, symbol in enumerate(word):
            expected, state = machine.table[state, symbol]
            got = subject.step(symbol)
            if got != expected:
                return Found(at, expected, got)
    except CaseVerdict as verdict:
        return Found(at, expected, str(verdict), verdict.clause or "", isinstance(verdict, Inconclusive))
    return None
