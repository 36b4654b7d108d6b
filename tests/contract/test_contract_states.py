"""The state table: complete, unambiguous, and what the loader says when it is not."""

from __future__ import annotations

import pytest
from contract_copy import Copy
from hypothesis import given
from hypothesis import strategies as st

from protobench.contract import DECLARED, Contract, State, load_contract

INPUTS = [item.name for item in load_contract().states.inputs]


def test_every_state_and_input_has_a_cell(contract: Contract) -> None:
    table = contract.states
    assert len(table.states) == 2 + 3 * 2 * 2 * 2
    assert set(table.cells) == {(state, name) for state in table.states for name in INPUTS}
    assert table.unreachable == ()
    assert table.initial == State("starting", True, False, "free")
    assert str(table.initial) == "starting/halt/free"


@pytest.mark.parametrize(
    ("state", "name", "answer", "after", "causes"),
    [
        (("starting", True, False, "free"), "started", "none", ("idle", True, False, "free"), None),
        (("idle", False, False, "held"), "energize", "accepted", ("energized", False, False, "held"), None),
        (("idle", True, True, "held"), "energize", "halted", ("idle", True, True, "held"), None),
        (("energized", False, False, "held"), "halt", "halt-receipt", ("K", True, False, "held"), ("halt",)),
        (
            ("energized", True, False, "held"),
            "lease-end",
            "none",
            ("K", True, False, "free"),
            ("halt", "lease_end"),
        ),
        (
            ("energized", True, True, "held"),
            "release-lease",
            "accepted",
            ("K", True, True, "free"),
            ("halt", "fault", "lease_end"),
        ),
        (("moving", False, False, "free"), "rest", "none", ("K", False, False, "free"), ("lease_end",)),
        (("moving", False, False, "held"), "rest", "none", ("energized", False, False, "held"), None),
        (("moving", True, False, "held"), "restart-faulty", "none", ("starting", True, True, "free"), None),
        (("idle", False, False, "free"), "move", "not-holder", ("idle", False, False, "free"), None),
    ],
)
def test_steps(
    contract: Contract,
    state: tuple[str, bool, bool, str],
    name: str,
    answer: str,
    after: tuple[str, bool, bool, str],
    causes: tuple[str, ...] | None,
) -> None:
    asked: list[tuple[str, ...]] = []

    def declared(*given: str) -> str:
        asked.append(given)
        return "K"

    assert contract.states.step(state, name, declared) == (answer, after)
    assert asked == ([] if causes is None else [causes])


@given(st.lists(st.sampled_from(INPUTS), max_size=60), st.sampled_from(["idle", "energized"]))
def test_no_sequence_of_inputs_leaves_the_table(names: list[str], settled: str) -> None:
    table = load_contract().states
    state = table.initial
    for name in names:
        answer, after = table.step(state, name, lambda *_: settled)
        assert after in table.states
        assert after.activity != DECLARED
        if answer not in ("none", "accepted", "halt-receipt"):
            assert after == state, f"{answer} to {name} changes {state}"
        assert table.displayed(after)
        state = after


def test_a_restart_never_leads_to_power(contract: Contract) -> None:
    for state in contract.states.states:
        for name in ("restart", "restart-faulty"):
            after = contract.states.cell(state, name).after
            assert (after.activity, after.halt, after.lease) == ("starting", True, "free")


@pytest.mark.parametrize(
    ("state", "displayed"),
    [
        (("moving", True, False, "held"), "stopping"),
        (("energized", True, True, "held"), "faulted"),
        (("energized", True, False, "held"), "halted"),
        (("starting", True, True, "free"), "starting"),
    ],
)
def test_displayed_states(contract: Contract, state: tuple[str, bool, bool, str], displayed: str) -> None:
    assert contract.states.displayed(state) == displayed


def test_an_unknown_state_or_input_is_told(contract: Contract) -> None:
    with pytest.raises(KeyError, match="no 'sneeze' in"):
        contract.states.step(contract.states.initial, "sneeze", str)
    with pytest.raises(KeyError, match=r"no 'halt' in \('asleep'"):
        contract.states.step(("asleep", True, False, "free"), "halt", str)


ROW = '[[transition]]\ninput = "cancel"\nlease = "held"\nanswer = "accepted"\n'


def rules(copy: Copy) -> list[str]:
    problems = copy.problems()
    assert {problem.file for problem in problems} == {"states.toml"}
    return [problem.rule for problem in problems]


def test_a_gap_is_told_state_by_state(copy: Copy) -> None:
    found = rules(copy.edit("states.toml", ROW, ""))
    assert len(found) == 12
    assert "cancel in idle/clear/held has no row" in found


def test_an_overlap_is_told_with_both_rows(copy: Copy) -> None:
    found = rules(copy.edit("states.toml", ROW, ROW + ROW))
    assert len(found) == 12
    assert found[0].startswith("cancel in idle/clear/held has a row already: transition[")


@pytest.mark.parametrize(
    ("old", "new", "rule"),
    [
        ('next_activity = "idle"', 'next_activity = "dozing"', "there is no activity 'dozing'"),
        (
            'activity = ["starting", "idle", "moving"]',
            'activity = ["starting", "idle", "mo"]',
            "there is no activity 'mo'",
        ),
        (
            'next_activity = "declared"\nnext_halt = true',
            'next_activity = "declared"',
            "yet no cause of a stop applies",
        ),
        (
            'next_activity = "starting"\nnext_halt = true',
            'next_activity = "starting"\nnext_halt = false',
            "which is excluded",
        ),
        (
            'activity = "starting"\nhalt = true\nfault = false',
            'activity = "starting"\nhalt = false\nfault = false',
            "starting/clear/free is not one of the states",
        ),
        ('"rest", "begin", "frames"]', '"rest", "begin", "mail"]', "there is no input 'mail'"),
        ('[[displayed]]\nstate = "idle"\nactivity = "idle"\n', "", "idle/clear/free has no displayed state"),
    ],
)
def test_a_table_that_names_what_is_not_there(copy: Copy, old: str, new: str, rule: str) -> None:
    assert any(rule in found for found in rules(copy.edit("states.toml", old, new)))


def test_unreachable_states_are_found(copy: Copy) -> None:
    copy.edit(
        "states.toml",
        'input = "begin"\nactivity = "energized"\nhalt = false\nfault = false\nlease = "held"\n'
        'answer = "none"\nnext_activity = "moving"',
        'input = "begin"\nactivity = "energized"\nhalt = false\n'
        'fault = false\nlease = "held"\nanswer = "none"',
    )
    unreachable = copy.load().states.unreachable
    assert len(unreachable) == 8
    assert {state.activity for state in unreachable} == {"moving"}
