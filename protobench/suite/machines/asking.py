"""Asking a module whole words of inputs: each word once, within a budget, and again where an answer does not repeat."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable

from protobench.judge import CaseVerdict
from protobench.suite.machines.mealy import Subject, Word

ASKED_MAX = 5  # times that a word is asked whose answers contradict each other; odd, so that most can agree
OUTPUT_MAX = 300  # characters kept of an output: a module must not fill the memory with what it says
Progress = Callable[[int], None]  # told the number of words asked so far


class BudgetSpent(Exception):  # noqa: N818 - says what is over
    """No more words may be asked."""


class NotRepeatable(Exception):  # noqa: N818 - says what the module is
    """A word's answers have no majority. ``word``: which."""

    def __init__(self, word: Word) -> None:
        super().__init__(f"the answers to {','.join(word)} do not repeat, asked {ASKED_MAX} times")
        self.word = word


class Corrected(Exception):  # noqa: N818 - says what happened
    """An answer that was told before was the odd one out: whoever built on it has to begin again."""


class _Node:
    """What is known after a word: for each input the output and what is known after that."""

    __slots__ = ("after",)

    def __init__(self) -> None:
        self.after: dict[str, tuple[str, _Node]] = {}


class Asker:
    """Remembers all answers. ``queries``: words asked; ``unsteady``: words that did not repeat, and how often asked."""

    def __init__(self, subject: Subject, budget: int, told: Progress = lambda _: None) -> None:
        self._subject = subject
        self._budget = budget
        self._told = told
        self._root = _Node()
        self.queries = 0
        self.inputs = 0
        self.unsteady: dict[Word, int] = {}

    def ask(self, word: Word) -> Word:
        """The outputs that a word brings.

        Raises BudgetSpent, NotRepeatable, Corrected, and LinkError when the link ends.
        """
        known = self._known(word)
        if len(known) == len(word):
            return known
        outputs = self._run(word)
        if outputs[: len(known)] != known:
            outputs = self._settle(word, outputs)
            self._keep(word, outputs)
            if outputs[: len(known)] != known:
                raise Corrected
            return outputs
        self._keep(word, outputs)
        return outputs

    def grant(self, more: int) -> None:
        """Let so many words more than so far be asked, if fewer are left."""
        self._budget = max(self._budget, self.queries + more)

    def ask_afresh(self, word: Word) -> Word:
        """The outputs that most of several runs of a word bring, whatever is remembered."""
        outputs = self._settle(word, self._run(word), least=2)
        self._keep(word, outputs)
        return outputs

    def _settle(self, word: Word, first: Word, least: int = ASKED_MAX) -> Word:
        """Ask again until most of ASKED_MAX answers agree, or the first ``least`` of them all do."""
        seen = Counter([first])
        while seen.total() < ASKED_MAX:
            if len(seen) == 1 and seen.total() >= least:
                return first
            outputs, count = seen.most_common(1)[0]
            if count > ASKED_MAX // 2:
                break
            seen[self._run(word)] += 1
        if len(seen) > 1 or least == ASKED_MAX:
            self.unsteady[word] = self.unsteady.get(word, 0) + seen.total()
        outputs, count = seen.most_common(1)[0]
        if count <= ASKED_MAX // 2:
            raise NotRepeatable(word)
        return outputs

    def _run(self, word: Word) -> Word:
        if self.queries >= self._budget:
            raise BudgetSpent
        self.queries += 1
        self.inputs += len(word)
        self._told(self.queries)
        outputs: list[str] = []
        try:
            self._subject.reset()
            for symbol in word:
                outputs += [
                    self._subject.step(symbol)[:OUTPUT_MAX]
                ]  # kept even when the next one is not reached
        except CaseVerdict as verdict:  # what a module does is its output, whatever it is
            words = f"stopped: {verdict}"[:OUTPUT_MAX]
            outputs += [words] * (len(word) - len(outputs))
        return tuple(outputs)

    def _known(self, word: Word) -> Word:
        node, outputs = self._root, []
        for symbol in word:
            if symbol not in node.after:
                break
            output, node = node.after[symbol]
            outputs.append(output)
        return tuple(outputs)

    def _keep(self, word: Word, outputs: Word) -> None:
        node = self._root
        for symbol, output in zip(word, outputs, strict=True):
            old = node.after.get(symbol)
            if old is None or old[0] != output:
                node.after[symbol] = (output, _Node())  # what was known behind a wrong answer is not known
            node = node.after[symbol][1]
