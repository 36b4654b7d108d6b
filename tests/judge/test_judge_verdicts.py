"""Verdicts: their order and words; records: their counts."""

from __future__ import annotations

import itertools

import pytest

from protobench.judge import (
    NOT_APPLICABLE,
    CaseRecord,
    Failed,
    Inconclusive,
    NotApplicable,
    RunRecord,
    Verdict,
)


def test_verdicts_are_ordered_as_in_es_201_873_1() -> None:
    words = [verdict.word for verdict in sorted(Verdict)]
    assert words == ["none", "pass", "inconc", "fail", "error"]


def test_merging_only_ever_worsens_and_order_does_not_matter() -> None:
    for some in itertools.product(Verdict, repeat=3):
        merged = max(some)
        assert all(merged >= verdict for verdict in some)
        assert {max(order) for order in itertools.permutations(some)} == {merged}


def test_not_applicable_is_no_verdict() -> None:
    assert NOT_APPLICABLE not in {verdict.word for verdict in Verdict}
    assert not issubclass(NotApplicable, (Failed, Inconclusive))


@pytest.mark.parametrize(("kind", "word"), [(Failed, "fail"), (Inconclusive, "inconc")])
def test_what_ends_a_case_carries_verdict_clause_and_detail(
    kind: type[Failed | Inconclusive], word: str
) -> None:
    raised = kind("it moved", clause="HLT-01", detail="-> halt")
    assert raised.verdict.word == word
    assert str(raised) == "HLT-01: it moved"
    assert (raised.reason, raised.clause, raised.detail) == ("it moved", "HLT-01", "-> halt")
    assert str(kind("it moved")) == "it moved"


def test_a_record_counts_by_verdict() -> None:
    def case(verdict: str) -> CaseRecord:
        return CaseRecord("LSE.take", "required", "valid", "A purpose.", ("LSE-01",), verdict, "", 0.1)

    record = RunRecord(
        "a contract", 1, cases=[case("pass"), case("fail"), case("pass"), case(NOT_APPLICABLE)]
    )
    assert [record.count(word) for word in ("pass", "fail", NOT_APPLICABLE, "error")] == [2, 1, 1, 0]
    assert RunRecord("a contract", 1).cases is not record.cases
