"""Complete deterministic Mealy machines, small enough to be kept as a table.

States, inputs and outputs are strings. A word is a tuple of inputs.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterable, Mapping, Sequence
from functools import cached_property
from typing import Protocol, TypeVar

Word = tuple[str, ...]
Table = Mapping[tuple[str, str], tuple[str, str]]
_Key = TypeVar("_Key")


class Subject(Protocol):
    """What a machine is compared with: something that can be brought to its start and takes inputs."""

    def reset(self) -> None:
        """Bring the subject to its start."""

    def step(self, symbol: str, /) -> str:
        """Give it one input and return what it put out."""


class Mealy:
    """A Mealy machine: complete, deterministic, never changed once made."""

    def __init__(self, inputs: Sequence[str], initial: str, table: Table) -> None:
        """`table` maps (state, input) to (output, next state); a ValueError names what is missing or unknown."""
        self.inputs: Word = tuple(inputs)
        self.initial = initial
        self.table: Table = dict(table)
        _validate(self.inputs, initial, self.table)

    @cached_property
    def states(self) -> Word:
        """All states: those that can be reached first, nearest first, then the others in the table's order."""
        others = dict.fromkeys(state for state, _ in self.table)
        return tuple(dict.fromkeys([*self.cover(), *others]))

    def step(self, state: str, symbol: str) -> tuple[str, str]:
        """Output and next state; a ValueError names a state or input that the machine does not have."""
        try:
            return self.table[state, symbol]
        except KeyError:
            raise ValueError(
                f"state {state!r}, input {symbol!r}: the machine has no such transition"
            ) from None

    def run(self, word: Iterable[str], state: str | None = None) -> Word:
        """The outputs that `word` brings from `state`, or from the initial state."""
        at = self.initial if state is None else state
        outputs = []
        for symbol in word:
            output, at = self.step(at, symbol)
            outputs.append(output)
        return tuple(outputs)

    def after(self, word: Iterable[str], state: str | None = None) -> str:
        """The state that `word` leads to."""
        at = self.initial if state is None else state
        for symbol in word:
            at = self.step(at, symbol)[1]
        return at

    def cover(self) -> dict[str, Word]:
        """For each state that can be reached, nearest first, a shortest word that leads to it."""
        access: dict[str, Word] = {self.initial: ()}
        waiting = deque([self.initial])
        while waiting:
            state = waiting.popleft()
            for symbol in self.inputs:
                _, after = self.table[state, symbol]
                if after not in access:
                    access[after] = (*access[state], symbol)
                    waiting.append(after)
        return access

    def trimmed(self) -> Mealy:
        """The same machine without the states that cannot be reached."""
        reached = self.cover()
        return Mealy(
            self.inputs, self.initial, {key: to for key, to in self.table.items() if key[0] in reached}
        )

    def blocks(self) -> dict[str, int]:
        """The number of its class for each state; equivalent states, and no others, share a class."""
        return self.partitions()[-1]

    def partitions(self) -> list[dict[str, int]]:
        """P1, P2, ... up to the last: states share a class of Pk when no word of k inputs tells them apart.

        Moore's refinement ("Gedanken-experiments on sequential machines", 1956).
        """
        states, inputs, table = self.states, self.inputs, self.table
        found = [_numbered({state: tuple(table[state, symbol][0] for symbol in inputs) for state in states})]
        while True:
            last = found[-1]
            finer = _numbered(
                {
                    state: (last[state], *(last[table[state, symbol][1]] for symbol in inputs))
                    for state in states
                }
            )
            if len(set(finer.values())) == len(set(last.values())):
                return found
            found.append(finer)

    def minimal(self) -> Mealy:
        """The smallest machine with the same outputs; each state has the name of the nearest of its class."""
        machine = self.trimmed()
        block = machine.blocks()
        name: dict[int, str] = {}
        for state in machine.states:
            name.setdefault(block[state], state)
        table = {
            (state, symbol): (output, name[block[after]])
            for (state, symbol), (output, after) in machine.table.items()
            if name[block[state]] == state
        }
        return Mealy(self.inputs, name[block[self.initial]], table)

    def difference(self, other: Mealy) -> Word | None:
        """A shortest word that brings different outputs from the two machines; None when there is none.

        A ValueError names an input that only one of the two has.
        """
        alone = set(self.inputs) ^ set(other.inputs)
        if alone:
            raise ValueError(f"input {min(alone)!r}: only one of the two machines has it")
        return _apart(self.inputs, self.table, other.table, (self.initial, other.initial))

    def separating(self, one: str, other: str) -> Word | None:
        """A shortest word that brings different outputs from two states; None when they are equivalent."""
        return _apart(self.inputs, self.table, self.table, (one, other))

    def dot(self, name: str = "machine") -> str:
        """The machine as a graph for Graphviz; transitions between the same two states share an edge."""
        lines = [f"digraph {_quoted(name)} {{", "  rankdir=LR;", '  start [shape=point, label=""];']
        number = {state: f"s{index}" for index, state in enumerate(self.states)}
        lines += [f"  {number[state]} [label={_quoted(state)}];" for state in self.states]
        lines.append(f"  start -> {number[self.initial]};")
        edges: dict[tuple[str, str], list[str]] = {}
        for state in self.states:
            for symbol in self.inputs:
                output, after = self.table[state, symbol]
                edges.setdefault((state, after), []).append(f"{symbol} / {output}")
        for (state, after), labels in edges.items():
            lines.append(f"  {number[state]} -> {number[after]} [label={_quoted(chr(10).join(labels))}];")
        return "\n".join([*lines, "}", ""])


def _apart(inputs: Word, ours: Table, theirs: Table, start: tuple[str, str]) -> Word | None:
    """A shortest word with different outputs, by breadth first search over pairs of states."""
    access: dict[tuple[str, str], Word] = {start: ()}
    waiting = deque([start])
    while waiting:
        pair = waiting.popleft()
        for symbol in inputs:
            our_output, our_next = ours[pair[0], symbol]
            their_output, their_next = theirs[pair[1], symbol]
            word = (*access[pair], symbol)
            if our_output != their_output:
                return word
            after = (our_next, their_next)
            if after not in access:
                access[after] = word
                waiting.append(after)
    return None


def _numbered(of: dict[str, _Key]) -> dict[str, int]:
    numbers: dict[_Key, int] = {}
    return {state: numbers.setdefault(key, len(numbers)) for state, key in of.items()}


def _quoted(text: str) -> str:
    return '"' + text.replace("\\", "\\\\").replace('"', '\\"').replace("\n", "\\n") + '"'


def _validate(inputs: Word, initial: str, table: Table) -> None:
    if not inputs:
        raise ValueError("inputs: a machine has at least one input")
    twice = next((symbol for index, symbol in enumerate(inputs) if symbol in inputs[:index]), None)
    if twice is not None:
        raise ValueError(f"input {twice!r}: is named twice")
    states = dict.fromkeys(state for state, _ in table)
    if initial not in states:
        raise ValueError(f"state {initial!r}: the initial state has no transition")
    known = set(inputs)
    for (state, symbol), (_, after) in table.items():
        if symbol not in known:
            raise ValueError(f"state {state!r}, input {symbol!r}: the input is not one of the machine's")
        if after not in states:
            raise ValueError(
                f"state {state!r}, input {symbol!r}: leads to {after!r}, which has no transition"
            )
    for state in states:
        for symbol in inputs:
            if (state, symbol) not in table:
                raise ValueError(
                    f"state {state!r}, input {symbol!r}: a machine is complete; no transition is given"
                )
