"""Derived sequences against a published machine, against every small machine there is, and against AALpy's own."""

from __future__ import annotations

import itertools
from collections import deque
from collections.abc import Callable, Iterator
from typing import Any

import aalpy
import pytest
from aalpy.automata import MealyMachine
from aalpy.oracles import WMethodEqOracle, WpMethodEqOracle

from protobench.suite.machines.derive import METHODS, characterisation, derive
from protobench.suite.machines.mealy import Mealy, Word

# Mathur, "Foundations of Software Testing", worked machine of the chapter on finite state machines; from memory, and
# consistent in itself: its partitions and its set W follow from it. Output and next state for a, then for b.
PUBLISHED = {
    "1": ("0", "1", "1", "4"),
    "2": ("0", "1", "1", "5"),
    "3": ("0", "5", "1", "1"),
    "4": ("1", "3", "1", "4"),
    "5": ("1", "2", "1", "5"),
}
PUBLISHED_W = ["a", "aa", "aaa", "baaa"]  # the same source, from memory
PUBLISHED_COVER = [
    "",
    "a",
    "b",
    "ba",
    "bb",
    "baa",
    "bab",
    "baaa",
    "baab",
    "baaaa",
    "baaab",
]  # same, from memory
PUBLISHED_TOUR = "abaaaabbabbaabab"  # computed; covers all ten transitions

# Two invented machines for the exhaustive check: states 0, 1, 2 and 0, 1.
THREE = {"0": ("0", "1", "1", "0"), "1": ("1", "2", "1", "0"), "2": ("0", "0", "0", "2")}
TWO = {"0": ("0", "1", "0", "0"), "1": ("1", "0", "0", "1")}

# An invented machine of six states, as in a walk through a small protocol; every input not named is refused.
LADDER = {
    "s0": {"a": "s1"},
    "s1": {"b": "s2", "c": "s0"},
    "s2": {"a": "s3", "c": "s0"},
    "s3": {"b": "s4", "c": "s2"},
    "s4": {"a": "s5", "c": "s2"},
    "s5": {"c": "s0"},
}


def machine_of(rows: dict[str, tuple[str, str, str, str]]) -> Mealy:
    table = {}
    for state, (a_output, a_next, b_output, b_next) in rows.items():
        table[state, "a"], table[state, "b"] = (a_output, a_next), (b_output, b_next)
    return Mealy(("a", "b"), next(iter(rows)), table)


def ladder() -> Mealy:
    inputs = ("a", "b", "c")
    table = {
        (state, symbol): ("ok", steps[symbol]) if symbol in steps else ("err", state)
        for state, steps in LADDER.items()
        for symbol in inputs
    }
    return Mealy(inputs, "s0", table)


def changes(machine: Mealy, sort: str) -> Iterator[Mealy]:
    outputs = {output for output, _ in machine.table.values()}
    for key, (output, after) in machine.table.items():
        others = (
            [(other, after) for other in outputs - {output}]
            if sort == "output"
            else [(output, other) for other in machine.states if other != after]
        )
        for other in others:
            yield Mealy(machine.inputs, machine.initial, {**machine.table, key: other})


# ---------------------------------------------------------------- the published machine


def test_partitions_set_and_products_of_the_published_machine():
    machine = machine_of(PUBLISHED)
    classes = []
    for partition in machine.partitions():
        members: dict[int, str] = {}
        for state in sorted(partition):
            members[partition[state]] = members.get(partition[state], "") + state
        classes.append(set(members.values()))
    assert classes == [{"123", "45"}, {"12", "3", "45"}, {"12", "3", "4", "5"}, {"1", "2", "3", "4", "5"}]
    assert ["".join(w) for w in characterisation(machine)] == PUBLISHED_W
    assert ["".join(machine.run("baaa", state)) for state in "12345"] == [
        "1101",
        "1100",
        "1000",
        "1101",
        "1100",
    ]

    access = machine.cover().values()
    transitions = {(), *((*w, symbol) for w in access for symbol in machine.inputs)}
    assert {"".join(w) for w in transitions} == set(PUBLISHED_COVER)
    products = [w + tail for w in transitions for tail in characterisation(machine)]
    assert (len(products), len(set(products))) == (44, 29)
    whole = {"".join(w) for w in products}
    longest = {text for text in whole if not any(other != text and other.startswith(text) for other in whole)}
    assert {"".join(w) for w in derive(machine, "W", 0)} == longest


@pytest.mark.parametrize(
    ("method", "extra", "sequences", "inputs"),
    [  # computed apart from this package with W = {a, aa, aaa, baaa}, from memory; sequences that begin another removed
        ("W", 0, 12, 82),
        ("W", 1, 24, 188),
        ("Wp", 0, 9, 57),
        ("Wp", 1, 17, 125),
        ("HSI", 0, 9, 56),
        ("HSI", 1, 17, 125),
    ],
)
def test_sizes_and_kills_of_the_published_machine(method, extra, sequences, inputs):
    machine = machine_of(PUBLISHED)
    suite = derive(machine, method, extra, characterisation(machine))
    assert suite.size == (sequences, inputs)
    assert kills(machine, list(suite), "output") == (10, 10)
    assert kills(machine, list(suite), "transfer") == (40, 40)


def test_a_transition_tour_misses_what_the_methods_find():
    machine = machine_of(PUBLISHED)
    assert kills(machine, [tuple(PUBLISHED_TOUR)], "output") == (10, 10)
    assert kills(machine, [tuple(PUBLISHED_TOUR)], "transfer") == (23, 40)  # computed, as above


def kills(machine: Mealy, sequences: list[Word], sort: str) -> tuple[int, int]:
    """How many changed machines some sequence tells from the machine, of how many."""
    found = [any(machine.run(w) != mutant.run(w) for w in sequences) for mutant in changes(machine, sort)]
    return sum(found), len(found)


# ---------------------------------------------------------------- every machine of three states

Cell = tuple[str, int]


def all_machines() -> Iterator[tuple[Cell, ...]]:
    """All 6^6 = 46,656 machines of three states, inputs a and b, outputs 0 and 1: a cell for 0a, 0b, 1a, 1b, 2a, 2b."""
    return itertools.product(list(itertools.product("01", range(3))), repeat=6)


def answers(cells: tuple[Cell, ...], letters: tuple[int, ...]) -> str:
    state, outputs = 0, ""
    for letter in letters:
        output, state = cells[2 * state + letter]
        outputs += output
    return outputs


def verdicts(machine: Mealy, sequences: list[Word]) -> Callable[[tuple[Cell, ...]], bool]:
    expected = [(tuple("ab".index(x) for x in w), "".join(machine.run(w))) for w in sequences]
    return lambda cells: all(answers(cells, letters) == outputs for letters, outputs in expected)


def greedy_tour(machine: Mealy) -> Word:
    """Always to the nearest transition not yet made, a before b; computed here and by none of the package."""
    left, state, tour = set(machine.table), machine.initial, ()
    while left:
        waiting: deque[tuple[str, Word]] = deque([(state, ())])
        while True:
            at, path = waiting.popleft()
            fresh = next((symbol for symbol in machine.inputs if (at, symbol) in left), None)
            if fresh is not None:
                break
            waiting += [(machine.table[at, symbol][1], (*path, symbol)) for symbol in machine.inputs]
        for symbol in (*path, fresh):
            left.discard((state, symbol))
            state = machine.table[state, symbol][1]
        tour += (*path, fresh)
    return tour


@pytest.mark.parametrize(
    ("rows", "equivalent", "at_n", "one_more", "tour"),
    [  # computed apart from this package: equivalent machines, wrong verdicts at m = n, at n + 1, of the tour
        (THREE, 2, 0, 0, 334),
        (TWO, 88, 128, 0, 1208),
    ],
)
def test_every_machine_of_three_states_gets_the_right_verdict(rows, equivalent, at_n, one_more, tour):
    machine = machine_of(rows)
    every_word = list(
        itertools.product("ab", repeat=5)
    )  # 5 = 3 + 3 - 1 inputs tell any two such machines apart
    is_equivalent = verdicts(machine, every_word)
    passes = {
        (method, extra): verdicts(machine, list(derive(machine, method, extra)))
        for method in METHODS
        for extra in (0, 1)
    }
    by_tour = verdicts(machine, [greedy_tour(machine)])
    same, wrong, wrong_tour = 0, dict.fromkeys(passes, 0), 0
    for cells in all_machines():
        right = is_equivalent(cells)
        same += right
        wrong_tour += by_tour(cells) != right
        for suite, passed in passes.items():
            wrong[suite] += passed(cells) != right
    assert same == equivalent
    assert wrong["W", 0] == at_n
    assert all(wrong[method, 1] == one_more for method in METHODS)
    assert all((wrong[method, 0] == 0) == (at_n == 0) for method in METHODS)
    assert wrong_tour == tour


# ---------------------------------------------------------------- AALpy's oracles as suites


class CountingSul(aalpy.SUL):
    """A machine behind AALpy's interface; counts inputs and resets."""

    def __init__(self, machine: Mealy) -> None:
        super().__init__()
        self.machine, self.state = machine, machine.initial
        self.words: list[list[str]] = []

    def pre(self) -> None:
        self.state = self.machine.initial
        self.words.append([])

    def post(self) -> None:
        pass

    def step(self, letter: Any) -> str:
        output, self.state = self.machine.step(self.state, letter)
        self.words[-1].append(letter)
        return output


def theirs(machine: Mealy) -> MealyMachine:
    setup = {
        state: {symbol: machine.table[state, symbol] for symbol in machine.inputs} for state in machine.states
    }
    return MealyMachine.from_state_setup(setup)


ORACLES = {"W": WMethodEqOracle, "Wp": WpMethodEqOracle}


@pytest.mark.parametrize("method", sorted(ORACLES))
@pytest.mark.parametrize("machine", [machine_of(PUBLISHED), ladder()], ids=["published", "ladder"])
def test_what_an_independent_suite_finds_ours_finds(method, machine):
    sequences = list(derive(machine, method, 0))
    killed = 0
    for mutant in [*changes(machine, "output"), *changes(machine, "transfer")]:
        oracle = ORACLES[method](list(machine.inputs), CountingSul(mutant), len(machine.states))
        by_theirs = oracle.find_cex(theirs(machine)) is not None
        by_ours = any(machine.run(w) != mutant.run(w) for w in sequences)
        differs = machine.difference(mutant) is not None
        assert (by_theirs, by_ours) == (differs, differs)
        killed += by_ours
    assert killed >= len(machine.table) * 2


@pytest.mark.parametrize("method", sorted(ORACLES))
@pytest.mark.parametrize("extra", [0, 1])
def test_ours_is_no_larger_than_an_independent_suite(method, extra):
    machine = ladder()
    sul = CountingSul(machine)
    oracle = ORACLES[method](list(machine.inputs), sul, len(machine.states) + extra)
    assert oracle.find_cex(theirs(machine)) is None
    size = derive(machine, method, extra).size
    assert size.sequences <= len(sul.words)
    assert size.inputs <= sum(map(len, sul.words))
