"""The suite as a whole: every observable clause has a case, every case is well described."""

from __future__ import annotations

import pytest

from protobench.contract import load_contract, parse_condition
from protobench.suite.case import CaseInfo, case
from protobench.suite.run import list_cases
from protobench.suite.selection import select

LINK_ITEMS = {"stream", "gaps", "virtual", "travel", "restart"}
CASES = list_cases()


def test_there_are_cases_in_every_area() -> None:
    areas = {area.code for area in load_contract().areas}
    assert {info.area for info in CASES} == areas
    assert len(CASES) >= 100


def test_every_observable_clause_has_a_case() -> None:
    covered = {clause for info in CASES for clause in info.clauses}
    missing = [
        clause.id
        for clause in load_contract().clauses
        if clause.observable and clause.subject == "module" and clause.id not in covered
    ]
    assert missing == []


def test_cases_cover_observable_clauses_only() -> None:
    observable = {clause.id for clause in load_contract().clauses if clause.observable}
    assert [info.id for info in CASES if not set(info.clauses) <= observable] == []


@pytest.mark.parametrize("info", CASES, ids=lambda info: info.id)
def test_a_case_is_well_described(info: CaseInfo) -> None:
    assert info.clauses
    assert len(info.clauses) == len(set(info.clauses))
    assert info.purpose.endswith(".")
    if info.needs:
        parse_condition(info.needs, load_contract().condition_names | LINK_ITEMS)


@pytest.mark.parametrize(
    ("expression", "wanted"),
    [
        ("HLT.copies", {"HLT.copies"}),
        ("HLT.copies or SEQ.copies", {"HLT.copies", "SEQ.copies"}),
        ("copies and not SEQ", {"HLT.copies"}),
        ("(HLT or SEQ) and copies", {"HLT.copies", "SEQ.copies"}),
        ("not not HLT.copies", {"HLT.copies"}),
        ("hlt.COPIES", {"HLT.copies"}),
        ("Copies AND NOT seq", {"HLT.copies"}),
        ("(hlt Or SEQ) and COPIES", {"HLT.copies", "SEQ.copies"}),
    ],
)
def test_select(expression: str, wanted: set[str]) -> None:
    assert {info.id for info in select(CASES, expression)} == wanted


def test_select_by_class_and_clause() -> None:
    assert all(info.case_class == "invalid" for info in select(CASES, "invalid"))
    assert all("HLT-03" in info.clauses for info in select(CASES, "HLT-03"))
    assert select(CASES, None) == CASES


@pytest.mark.parametrize("word", [info.id for info in CASES[:3]] + ["HLT-03", "Invalid", "REQUIRED", "Crc"])
def test_capitals_select_as_small_letters_do(word: str) -> None:
    assert select(CASES, word.lower()) == select(CASES, word.upper()) == select(CASES, word) != []


@pytest.mark.parametrize("area", sorted({info.area for info in CASES}))
def test_an_area_selects_its_cases_and_no_id_that_only_contains_its_letters(area: str) -> None:
    for word in (area, area.lower()):
        assert {info.area for info in select(CASES, word)} == {area}
    assert select(CASES, area.lower()) == [info for info in CASES if info.area == area]


@pytest.mark.parametrize("expression", ["", "and", "a or", "not", "(a", "a)", "a b", "a & b", "or a"])
def test_select_refuses_what_it_cannot_read(expression: str) -> None:
    with pytest.raises(ValueError, match="expression"):
        select(CASES, expression)


@pytest.mark.parametrize(
    ("case_id", "case_class", "level"),
    [
        ("framing", "valid", "required"),
        ("FRM.x", "good", "required"),
        ("FRM.x", "valid", "must"),
        ("FRM.X", "valid", "required"),
    ],
)
def test_a_badly_described_case_is_refused(case_id: str, case_class: str, level: str) -> None:
    with pytest.raises(ValueError, match="case"):
        case(case_id, case_class, "Purpose.", clauses=["FRM-01"], level=level)


def test_a_case_id_is_given_once() -> None:
    with pytest.raises(ValueError, match=r"FRM\.every-length"):
        case("FRM.every-length", "valid", "Purpose.", clauses=["FRM-01"])(lambda bench: None)
