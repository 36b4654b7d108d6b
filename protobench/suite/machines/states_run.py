"""Derived sequences against one module: what is run, in one process or several, and what came of it."""

from __future__ import annotations

import random
import time
from collections.abc import Callable, Sequence
from dataclasses import asdict, dataclass, replace
from typing import Any, NamedTuple

from protobench.judge import CaseVerdict
from protobench.links import LinkError
from protobench.suite.machines.compare import RESET, START, Comparison, Difference, Found, compare, run_word
from protobench.suite.machines.derive import Size, Suite, derive
from protobench.suite.machines.mealy import Word
from protobench.suite.machines.subjects import MACHINES, PortTape, Prepared, prepare
from protobench.suite.options import RunOptions
from protobench.suite.session import Session

ALL = "both"
PASS, FAIL, INCONC = "pass", "fail", "inconc"
SAMPLE = 8  # sequences, or inputs, by which a duration is estimated
SEPARATOR = ","
CASE_ID = "states"
Watcher = Callable[[int], bool]  # told how many sequences are done; whether to go on


@dataclass(frozen=True, slots=True)
class Wanted:
    """What to run. ``extra``: None for 1 in virtual time and 0 in real time. ``budget_s``: None for no limit.

    ``word``: this one sequence instead of those derived. ``share``: which of how many equal parts of the sequences.
    """

    machine: str = "state"
    method: str = "HSI"
    extra: int | None = None
    budget_s: float | None = None
    word: Word | None = None
    share: tuple[int, int] = (0, 1)


class Planned(NamedTuple):
    """The sequences of one machine for one module."""

    prepared: Prepared
    suite: Suite
    wanted: Wanted
    seed: int

    @property
    def total(self) -> Size:
        """Sequences and inputs to run, all shares together."""
        word = self.wanted.word
        return self.suite.size if word is None else Size(1, len(word))

    def words(self) -> Sequence[Word]:
        """The sequences of this share, the shortest first.

        Within a budget they come in an order drawn from the seed, so that those run are a sample.
        """
        if self.wanted.word is not None:
            return [self.wanted.word] if self.wanted.share[0] == 0 else []
        words = sorted(self.suite, key=len)
        if self.wanted.budget_s is not None:
            random.Random(self.seed).shuffle(words)
        index, shares = self.wanted.share
        return words[index::shares]


def names(machine: str) -> list[str]:
    """The machines that a name stands for."""
    return list(MACHINES) if machine == ALL else [machine]


def plan(session: Session, wanted: Wanted) -> Planned:
    """Bring the module to its start and derive the sequences.

    Raises ValueError for an input of a given sequence that the machine does not have.
    """
    bench = session.bench
    bench.begin(CASE_ID)
    prepared = prepare(bench, wanted.machine)
    unknown = [symbol for symbol in wanted.word or () if symbol not in prepared.machine.inputs]
    if unknown:
        known = ", ".join(prepared.machine.inputs)
        raise ValueError(f"input {unknown[0]!r}: the {prepared.name} machine has {known}")
    extra = wanted.extra
    if extra is None:
        extra = 1 if bench.port.link.virtual else 0
    suite = derive(prepared.machine, wanted.method, extra)
    return Planned(prepared, suite, replace(wanted, extra=extra), session.options.seed)


def run(session: Session, planned: Planned, watcher: Watcher) -> Comparison:
    """Run the sequences of one share in this process. A link that ends is a difference like any other."""
    tape = PortTape(session.bench)
    last: list[Word] = [()]

    def noted() -> Any:
        for word in planned.words():
            last[0] = word
            yield word

    try:
        done = compare(
            planned.prepared.machine,
            planned.prepared.subject,
            noted(),
            lambda so_far: watcher(so_far.sequences),
            tape,
        )
    except LinkError as error:
        found = Found(RESET, "a link", f"the link to the module ended: {error}", "LOD-02")
        return Comparison(difference=Difference(last[0], found, tape.taken()))
    _end(session, done, last[0], tape)
    return done


def _end(session: Session, done: Comparison, word: Word, tape: PortTape) -> None:
    """Leave the module at rest and halted; that it cannot be left so is a difference too."""
    try:
        session.bench.end()
    except (CaseVerdict, LinkError) as error:
        if done.difference is None:
            clause = error.clause or "" if isinstance(error, CaseVerdict) else "LOD-02"
            done.difference = Difference(word, Found(RESET, START, str(error), clause), tape.taken())


def open_plan(options: RunOptions, wanted: Wanted) -> tuple[Session, Planned]:
    """A session and its plan; the session is closed again when there is no plan."""
    session = Session(options)
    try:
        return session, plan(session, wanted)
    except BaseException:
        session.close()
        raise


def estimate_s(session: Session, planned: Planned) -> float:
    """How long all sequences may take in one process, from a few ways back to the start and a few inputs.

    In virtual time whole sequences are tried; in real time only the read, so that nothing moves: inputs that wait for
    the module to move or to come to rest take longer than that.
    """
    machine, subject = planned.prepared.machine, planned.prepared.subject
    size = planned.total
    if session.bench.port.link.virtual:
        words = planned.words()
        words = [words[index * len(words) // SAMPLE] for index in range(min(SAMPLE, len(words)))]
        begin = time.monotonic()
        for word in words:
            run_word(machine, subject, word)
        return (time.monotonic() - begin) / sum(map(len, words)) * size.inputs
    begin = time.monotonic()
    subject.reset()
    middle = time.monotonic()
    for _ in range(SAMPLE):
        subject.step(planned.prepared.read)
    end = time.monotonic()
    return (middle - begin) * size.sequences + (end - middle) / SAMPLE * size.inputs


def verdict(planned: Planned, done: Comparison) -> str:
    """``pass``, ``fail``, or ``inconc`` when sequences did not repeat or were left out."""
    if done.difference is not None:
        return FAIL
    return INCONC if done.unrepeated or done.sequences < planned.total.sequences else PASS


def assumptions(planned: Planned) -> list[str]:
    """What has to be so for a pass to mean that the module follows the machine."""
    prepared, suite = planned.prepared, planned.suite
    words = [
        f"the module has at most {suite.states_max} states that these inputs tell apart",
        f"it comes back to its start before each sequence: {prepared.start}",
        "it is deterministic",
        f"not in the machine, and not shown: {prepared.outside}",
    ]
    return words if not prepared.weaker else [*words, f"weaker: {prepared.weaker}"]


def result(
    planned: Planned, done: Comparison | None, elapsed_s: float, more: dict[str, Any]
) -> dict[str, Any]:
    """One machine's part of the report; without ``done`` only what would be run."""
    suite, total = planned.suite, planned.total
    found: dict[str, Any] = {
        "machine": planned.prepared.name,
        "method": suite.method,
        "n": suite.states,
        "m": suite.states_max,
        "extra": suite.extra,
        "alphabet": list(suite.machine.inputs),
        "sequences": total.sequences,
        "inputs": total.inputs,
        "assumptions": assumptions(planned),
        **more,
    }
    if done is not None:
        found |= {
            "verdict": verdict(planned, done),
            "sequences_run": done.sequences,
            "inputs_run": done.inputs,
            "elapsed_s": round(elapsed_s, 3),
            "not_repeated": [SEPARATOR.join(word) for word in done.unrepeated],
            "difference": None if done.difference is None else _told(planned.prepared, done.difference),
        }
    return found


def _told(prepared: Prepared, difference: Difference) -> dict[str, Any]:
    """The difference as data: access word, input, both outputs, clause, transcript."""
    word, found = difference.word, difference.found
    at = max(found.at, 0)
    return {
        "sequence": SEPARATOR.join(word),
        "access": list(word[:at]),
        "input": word[at] if found.at != RESET else "",
        "expected": found.expected,
        "got": found.got,
        "clause": found.clause or prepared.clause(found.expected),
        "transcript": [{**asdict(one), "data": one.data.hex()} for one in difference.exchange],
    }
