"""Machines and the sequences derived from them."""

from __future__ import annotations

import itertools

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from machine_samples import WORKED, from_rows, mutants, random_machine, word

from protobench.suite.machines.derive import (
    METHODS,
    characterisation,
    derive,
    harmonised_identifiers,
    small_characterisation,
    state_identifiers,
    without_prefixes,
)
from protobench.suite.machines.mealy import Mealy

MACHINE = from_rows(WORKED)
TWO = {("x", "a"): ("0", "y"), ("y", "a"): ("1", "x")}


@pytest.mark.parametrize(
    ("inputs", "initial", "table", "message"),
    [
        ((), "x", TWO, "inputs: a machine has at least one"),
        (("a", "a"), "x", TWO, "input 'a': is named twice"),
        (("a",), "z", TWO, "state 'z': the initial state has no transition"),
        (("a",), "x", {**TWO, ("x", "b"): ("0", "x")}, "state 'x', input 'b': the input is not one"),
        (("a",), "x", {**TWO, ("y", "a"): ("0", "z")}, "state 'y', input 'a': leads to 'z'"),
        (("a", "b"), "x", TWO, "state 'x', input 'b': a machine is complete"),
    ],
)
def test_a_table_that_is_no_machine_is_refused(inputs, initial, table, message):
    with pytest.raises(ValueError, match=message):
        Mealy(inputs, initial, table)


def test_a_machine_runs_words_and_says_what_it_lacks():
    assert MACHINE.run("baaa") == tuple("1101")
    assert MACHINE.run("baaa", "3") == tuple("1000")
    assert MACHINE.after("baaa") == "2"
    with pytest.raises(ValueError, match="state '1', input 'c': the machine has no such transition"):
        MACHINE.run("ac")


def test_states_are_named_nearest_first_and_unreached_last():
    table = {**MACHINE.table, ("9", "a"): ("0", "9"), ("9", "b"): ("0", "9")}
    machine = Mealy(("a", "b"), "1", table)
    assert machine.states == ("1", "4", "3", "5", "2", "9")
    assert machine.cover() == {
        "1": (),
        "4": word("b"),
        "3": word("ba"),
        "5": word("baa"),
        "2": word("baaa"),
    }
    assert machine.trimmed().states == ("1", "4", "3", "5", "2")


def test_a_machine_with_twins_is_made_minimal():
    table = {**MACHINE.table, ("4", "b"): ("1", "4'"), ("4'", "a"): ("1", "3"), ("4'", "b"): ("1", "4")}
    doubled = Mealy(("a", "b"), "1", table)
    assert len(doubled.states) == 6
    assert doubled.difference(MACHINE) is None
    assert sorted(doubled.minimal().states) == sorted(MACHINE.states)
    assert doubled.minimal().difference(MACHINE) is None
    with pytest.raises(ValueError, match="are equivalent; derive from"):
        derive(doubled, "W", 0)


def test_the_difference_is_a_shortest_word():
    for _, mutant in mutants(MACHINE):
        found = MACHINE.difference(mutant)
        assert found is not None
        assert MACHINE.run(found) != mutant.run(found)
        shorter = itertools.product("ab", repeat=len(found) - 1)
        assert all(MACHINE.run(other) == mutant.run(other) for other in shorter)
    with pytest.raises(ValueError, match="input 'b': only one of the two"):
        MACHINE.difference(Mealy(("a",), "x", TWO))


def test_the_drawing_quotes_what_it_is_given():
    drawn = Mealy(("a",), 'x"', {('x"', "a"): ("back\\slash", 'x"')}).dot()
    assert 'label="x\\""' in drawn
    assert "back\\\\slash" in drawn


@pytest.mark.parametrize(
    ("machine", "method", "extra", "words", "message"),
    [
        (MACHINE, "tour", 0, None, "method 'tour': one of W, Wp, HSI"),
        (MACHINE, "W", -1, None, "extra -1"),
        (
            Mealy(("a",), "x", {("x", "a"): ("0", "x"), ("y", "a"): ("1", "x")}),
            "W",
            0,
            None,
            "cannot be reached",
        ),
        (MACHINE, "W", 0, [word("a")], "states '1' and '3': no word of the set tells them apart"),
    ],
)
def test_what_nothing_can_be_derived_from_is_refused(machine, method, extra, words, message):
    with pytest.raises(ValueError, match=message):
        derive(machine, method, extra, words)


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("extra", [0, 1, 2])
def test_sequences_are_counted_as_they_come_and_none_begins_another(method, extra):
    suite = derive(MACHINE, method, extra)
    sequences = list(suite)
    assert suite.size == (len(sequences), sum(map(len, sequences)))
    assert sequences == list(suite)
    assert without_prefixes(sequences) == sorted(sequences)
    assert (suite.states, suite.states_max) == (5, 5 + extra)


def test_a_machine_of_one_state_is_tested_too():
    machine = Mealy(("a", "b"), "x", {("x", "a"): ("0", "x"), ("x", "b"): ("1", "x")})
    for method in METHODS:
        assert sorted(derive(machine, method, 0)) == [("a",), ("b",)]
        assert derive(machine, method, 1).size == (4, 8)


@settings(max_examples=40, deadline=None)
@given(seed=st.integers(0, 10**6), states=st.integers(2, 6), inputs=st.integers(1, 3))
def test_sets_tell_states_apart(seed, states, inputs):
    machine = random_machine(seed, states, inputs)
    pairs = list(itertools.combinations(machine.states, 2))
    for words in (characterisation(machine), small_characterisation(machine)):
        own, shared = state_identifiers(machine, words), harmonised_identifiers(machine, words)
        for one, other in pairs:
            assert machine.separating(one, other) is not None
            for common in (words, own[one], own[other], set(shared[one]) & set(shared[other])):
                assert any(machine.run(w, one) != machine.run(w, other) for w in common)


@settings(max_examples=15, deadline=None)
@given(seed=st.integers(0, 10**6), method=st.sampled_from(METHODS))
def test_every_small_change_is_found(seed, method):
    machine = random_machine(seed, 5, 2)
    sequences = [(w, machine.run(w)) for w in derive(machine, method, 0)]
    for _, mutant in mutants(machine):
        differs = machine.difference(mutant) is not None
        assert any(mutant.run(w) != expected for w, expected in sequences) == differs


@settings(max_examples=15, deadline=None)
@given(seed=st.integers(0, 10**6), method=st.sampled_from(METHODS))
def test_a_subject_with_one_state_more_needs_one_step_more(seed, method):
    machine = random_machine(seed, 3, 2)
    larger = random_machine(seed + 1, len(machine.states) + 1, 2)
    sequences = [(w, machine.run(w)) for w in derive(machine, method, 1)]
    differs = machine.difference(larger) is not None
    assert any(larger.run(w) != expected for w, expected in sequences) == differs
