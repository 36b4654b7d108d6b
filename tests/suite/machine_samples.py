"""Small machines, and subjects that follow one, for the tests of derivation and of running what is derived."""

from __future__ import annotations

import itertools
import random
from collections.abc import Iterator

from protobench.suite.machines.mealy import Mealy, Word

Row = tuple[str, str, str, str]

# Mathur, "Foundations of Software Testing", the worked machine of the W-method (from memory). For each state: output
# and next state for a, then for b.
WORKED: dict[str, Row] = {
    "1": ("0", "1", "1", "4"),
    "2": ("0", "1", "1", "5"),
    "3": ("0", "5", "1", "1"),
    "4": ("1", "3", "1", "4"),
    "5": ("1", "2", "1", "5"),
}


def from_rows(rows: dict[str, Row]) -> Mealy:
    """A machine over a and b; the first row is the initial state."""
    table = {}
    for state, (a_output, a_next, b_output, b_next) in rows.items():
        table[state, "a"] = (a_output, a_next)
        table[state, "b"] = (b_output, b_next)
    return Mealy(("a", "b"), next(iter(rows)), table)


def mutants(machine: Mealy) -> Iterator[tuple[str, Mealy]]:
    """Every change of one output to another one in use, and of one next state, each with its sort."""
    outputs = sorted({output for output, _ in machine.table.values()})
    for key, (output, after) in machine.table.items():
        for other in outputs:
            if other != output:
                yield "output", Mealy(machine.inputs, machine.initial, {**machine.table, key: (other, after)})
        for state in machine.states:
            if state != after:
                yield (
                    "transfer",
                    Mealy(machine.inputs, machine.initial, {**machine.table, key: (output, state)}),
                )


def random_machine(seed: int, states: int, inputs: int, outputs: int = 2) -> Mealy:
    """A minimal machine of at most so many states."""
    rng = random.Random(seed)
    names = [f"s{index}" for index in range(states)]
    symbols = tuple(f"i{index}" for index in range(inputs))
    table = {
        (state, symbol): (f"o{rng.randrange(outputs)}", rng.choice(names))
        for state, symbol in itertools.product(names, symbols)
    }
    return Mealy(symbols, names[0], table).minimal()


class MachineSubject:
    """Behaves as a machine does; counts how often it is brought to its start and how many inputs it takes."""

    def __init__(self, machine: Mealy) -> None:
        self.machine = machine
        self.state = machine.initial
        self.resets = self.steps = 0

    def reset(self) -> None:
        self.state = self.machine.initial
        self.resets += 1

    def step(self, symbol: str) -> str:
        self.steps += 1
        output, self.state = self.machine.step(self.state, symbol)
        return output


def word(text: str) -> Word:
    """A word of one-letter inputs."""
    return tuple(text)
