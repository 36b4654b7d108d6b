"""Explaining names: every meaning of each, and the nearest ones for a name that is none."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from protobench.contract import Contract, load_contract
from protobench.contract.explain import UnknownName, all_names, explain

NAMES = all_names(load_contract())


@pytest.mark.parametrize("name", NAMES)
def test_every_name_is_explained(contract: Contract, name: str) -> None:
    for entry in explain(contract, name):
        assert entry.name == name
        assert entry.text.strip()
        assert entry.lines()[0] == f"{entry.what} {name}"
        assert all("\n" not in line for line in entry.lines())
        for clause_id in entry.related:
            assert contract.clause(clause_id)


def test_the_names_are_those_of_the_contract(contract: Contract) -> None:
    wanted = {clause.id for clause in contract.clauses} | {kind.name for kind in contract.kinds}
    wanted |= (
        {drop.name for drop in contract.drops}
        | {row.name for row in contract.refusals}
        | set(contract.limits)
    )
    wanted |= {fault.name for fault in contract.faults} | {item.name for item in contract.states.inputs}
    wanted |= contract.condition_names
    assert wanted <= set(NAMES)


@pytest.mark.parametrize(
    ("name", "what", "label", "fact"),
    [
        ("FRM-15", "clause", "binds", "the sender"),
        ("ADR-13", "clause", "applies with", "groups"),
        ("FRM-08", "clause", "observable", "no, so it has no case"),
        ("move", "message kind", "key 65", "allow_last_bond: boolean, optional, default false"),
        ("move", "message kind", "fence", "full"),
        (
            "renew-lease",
            "message kind",
            "key 0",
            "epoch: uint 0..4294967295, required when unicast, not examined to many",
        ),
        ("description", "message kind", "key 0", "hardware_id: 8 bytes, required"),
        ("log", "message kind", "key 0", "text: text of at most 32 characters, required"),
        (
            "status-report",
            "message kind",
            "key 17",
            "faces: list of at most 6 face records (bonded, neighbour, orientation), required",
        ),
        (
            "set-groups",
            "message kind",
            "key 2",
            "groups: list of 0 to 16 integers 4026531840..4294967293, required",
        ),
        (
            "move",
            "message kind",
            "key 2",
            "motion: one of pivot 1, slide 2, hinge 3, hop 4, bond 5, unbond 6, required",
        ),
        ("receipt", "message kind", "key 1", "reason: one of refusal, optional"),
        ("not-for-many", "refusal", "aloud", "no, counted in silent_refusals"),
        ("malformed", "refusal (field)", "carries", "key"),
        ("crc", "drop reason", "number", "5"),
        ("brown-out", "fault", "severity", "latching"),
        ("half_frame_bridge", "limit", "value", "200 ms"),
        ("lease_duration", "limit", "value", "500..30000 ms"),
        ("number_window", "limit", "value", "32"),
        ("groups", "capability", "kinds that need it", "read-groups, set-groups"),
        ("rest", "input of the state table", "answers", "none in 26 states"),
        ("outcome", "enumeration", "5", "lost"),
        ("hop", "value of motion", "number", "4"),
        ("magnitude", "field of move", "key", "3"),
    ],
)
def test_facts(contract: Contract, name: str, what: str, label: str, fact: str) -> None:
    found = [entry for entry in explain(contract, name) if entry.what == what]
    assert found
    assert dict(found[0].facts)[label] == fact


def test_a_name_with_several_meanings_has_them_all(contract: Contract) -> None:
    found = {entry.what for entry in explain(contract, "halted")}
    assert {"refusal", "value of outcome", "value of state"} <= found


def test_clauses_that_name_it_are_told(contract: Contract) -> None:
    (entry,) = explain(contract, "too-short")
    assert entry.related == ("FRM-03",)
    assert entry.lines()[-1] == "  clauses: FRM-03"
    assert "MOT-05" in explain(contract, "queue")[0].related


def test_an_unknown_name_is_told_with_the_nearest(contract: Contract) -> None:
    with pytest.raises(UnknownName, match="nothing called 'brownout'; there is brown-out") as caught:
        explain(contract, "brownout")
    assert caught.value.near == ["brown-out"]
    with pytest.raises(KeyError, match="nothing called '???'$".replace("?", r"\?")):
        explain(contract, "???")


@given(st.text(max_size=30))
def test_any_name_is_explained_or_unknown(name: str) -> None:
    try:
        assert explain(load_contract(), name)
    except UnknownName as error:
        assert error.name == name
