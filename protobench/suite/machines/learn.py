"""Learning the machine that a module is, by asking it words, and comparing it with the contract's.

The learner is the library AALpy's L#: Vaandrager, Garhewal, Rot and Wissmann, "A new approach for active automata
learning based on apartness", 2022. What it believes is tested by a difference from the contract's machine first, then
by Chow's W-method up to a stated number of states where time is virtual, else by random words.
"""

from __future__ import annotations

import random
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any

from aalpy.base import SUL, Oracle
from aalpy.learning_algs import run_Lsharp

from protobench.suite.machines.asking import Asker, BudgetSpent, Corrected, NotRepeatable
from protobench.suite.machines.derive import derive, small_characterisation
from protobench.suite.machines.mealy import Mealy, Word

SAME, DIFFERS, UNDECIDED = "same", "differs", "undecided"
BEGINNINGS_MAX = 10  # times that learning begins again because an answer was corrected
RANDOM_WORDS = 60
RANDOM_LENGTH = 8
Growing = Callable[[int], None]  # told the number of states so far


@dataclass(frozen=True, slots=True)
class Effort:
    """How far learning goes.

    ``states``: the most states that the module is taken to have, for the W-method; None: random words instead, drawn by
    ``seed``, and the first difference is enough. ``read``: an input that tells most of the state; where the alphabet
    has it, the W-method looks with it behind every transition, so that more than the promised modules are found.
    """

    states: int | None
    seed: int = 1
    read: str = "A.status"


@dataclass(slots=True)
class Learned:
    """What came of it. ``machine``: the last hypothesis, or None; ``word``: a shortest sequence that tells it apart.

    ``outputs``: the module's to ``word``; ``complete``: whether the hypothesis stood every test; ``why``: why not.
    """

    verdict: str
    machine: Mealy | None = None
    word: Word = ()
    outputs: Word = ()
    complete: bool = False
    why: str = ""


class _Found(Exception):  # noqa: N818 - ends the learning
    """A difference is found and no more is wanted."""


class _Words(SUL):  # type: ignore[misc]
    """What the library asks; a word at a time."""

    def __init__(self, asker: Asker) -> None:
        super().__init__()
        self._asker = asker
        self._word: Word = ()

    def query(self, word: tuple[str, ...]) -> list[str]:
        self.num_queries += 1
        return list(self._asker.ask(tuple(word)))

    def pre(self) -> None:
        self._word = ()

    def post(self) -> None:
        self._word = ()

    def step(self, letter: str) -> str:
        self._word = (*self._word, letter)
        return self._asker.ask(self._word)[-1]


class _Examiner(Oracle):  # type: ignore[misc]
    """Looks for a word to which the module answers otherwise than the hypothesis."""

    def __init__(self, sul: _Words, run: _Run) -> None:
        super().__init__(list(run.contract.inputs), sul)
        self._run = run

    def find_cex(self, hypothesis: Any) -> Word | None:
        return self._run.examine(as_mealy(hypothesis, self._run.contract.inputs))


class _Run:
    """One learning, begun again where an answer is corrected."""

    def __init__(self, contract: Mealy, asker: Asker, effort: Effort, growing: Growing) -> None:
        self.contract = contract
        self._asker = asker
        self._effort = effort
        self._growing = growing
        self.hypothesis: Mealy | None = None
        self.difference: Word | None = None

    def learn(self) -> Mealy:
        words = _Words(self._asker)
        automaton = run_Lsharp(
            list(self.contract.inputs),
            words,
            _Examiner(words, self),
            automaton_type="mealy",
            separation_rule="SepSeq",
            cache_and_non_det_check=False,
            print_level=0,
        )
        return as_mealy(automaton, self.contract.inputs)

    def examine(self, hypothesis: Mealy) -> Word | None:
        """A word to which the module does not answer as the hypothesis does; None when none is found."""
        self.hypothesis = hypothesis
        self._growing(len(hypothesis.states))
        self.difference = None
        word = hypothesis.difference(self.contract)
        if word is not None:
            if self._contradicts(hypothesis, word):
                return word
            self.difference = word
            if self._effort.states is None:
                raise _Found
        return next((word for word in self._tests(hypothesis) if self._contradicts(hypothesis, word)), None)

    def _contradicts(self, hypothesis: Mealy, word: Word) -> bool:
        return self._asker.ask(word) != hypothesis.run(word)

    def _tests(self, hypothesis: Mealy) -> Iterator[Word]:
        if self._effort.states is None:
            rng = random.Random(f"{self._effort.seed}/{len(hypothesis.states)}")
            for _ in range(RANDOM_WORDS):
                yield tuple(rng.choice(self.contract.inputs) for _ in range(RANDOM_LENGTH))
            return
        extra = max(0, self._effort.states - len(hypothesis.states))
        words = small_characterisation(hypothesis) if len(hypothesis.states) > 1 else ()
        if self._effort.read in hypothesis.inputs:
            words = tuple(dict.fromkeys([*words, (self._effort.read,)]))
        for deeper in range(extra + 1):
            yield from derive(hypothesis, "W", deeper, words or None)


def learn(contract: Mealy, asker: Asker, effort: Effort, growing: Growing = lambda _: None) -> Learned:
    """Learn what ``asker`` asks, over the inputs of ``contract``, and compare.

    Raises LinkError when the link to the module ends.
    """
    run = _Run(contract, asker, effort, growing)
    why = ""
    complete = False
    for _ in range(BEGINNINGS_MAX):
        try:
            run.hypothesis = run.learn()
            run.difference = run.hypothesis.difference(contract)
            complete = True
        except Corrected:
            why = "answers kept being corrected by later ones"
            continue
        except _Found:
            why = "the first difference was enough"
        except BudgetSpent:
            why = "the budget of queries is spent"
        except NotRepeatable as error:
            why = str(error)
        break
    return _concluded(run, asker, complete, "" if complete else why)


def _concluded(run: _Run, asker: Asker, complete: bool, why: str) -> Learned:
    """A difference counts when the module shows it again, asked afresh."""
    found = Learned(UNDECIDED, run.hypothesis, complete=complete, why=why)
    if run.difference is None:
        found.verdict = SAME if complete else UNDECIDED
        return found
    asker.grant(_AGAIN)
    try:
        outputs = asker.ask_afresh(run.difference)
    except NotRepeatable as error:
        found.why = str(error)
        return found
    if outputs == run.contract.run(run.difference):
        found.why = f"the difference after {','.join(run.difference)} did not come again"
        return found
    found.verdict, found.word, found.outputs = DIFFERS, *_shortened(run, outputs)
    return found


def _shortened(run: _Run, outputs: Word) -> tuple[Word, Word]:
    """The sequence up to its first difference."""
    assert run.difference is not None
    expected = run.contract.run(run.difference)
    upto = next(at for at, (one, other) in enumerate(zip(outputs, expected, strict=True)) if one != other) + 1
    return run.difference[:upto], outputs[:upto]


_AGAIN = 5


def as_mealy(automaton: Any, inputs: Word) -> Mealy:
    """The library's machine as one of ours, its states named in the order of finding."""
    names = {id(state): f"s{index}" for index, state in enumerate(automaton.states)}
    table = {
        (names[id(state)], symbol): (
            str(state.output_fun[symbol]),
            names[id(state.transitions[symbol])],
        )
        for state in automaton.states
        for symbol in inputs
    }
    return Mealy(inputs, names[id(automaton.initial_state)], table)
