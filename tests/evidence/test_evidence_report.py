"""The report: its keys, and a clause's verdict is the worst of the applicable cases that cover it."""

from __future__ import annotations

import json

import pytest
from records import case, run

from protobench.contract import load_contract
from protobench.evidence import build_report
from protobench.judge import RunRecord

CONTRACT = load_contract()


def clause_verdict(*verdicts: str) -> str:
    cases = [case(f"LSE.case{place}", verdict, "LSE-01") for place, verdict in enumerate(verdicts)]
    report = build_report(RunRecord("a contract", 1, cases=cases), CONTRACT)
    (entry,) = [clause for clause in report["clauses"] if clause["id"] == "LSE-01"]
    assert entry["cases"] == [f"LSE.case{place}" for place in range(len(verdicts))]
    return str(entry["verdict"])


@pytest.mark.parametrize(
    ("verdicts", "expected"),
    [
        ((), "none"),
        (("not_applicable",), "none"),
        (("not_applicable", "pass"), "pass"),
        (("pass", "inconc", "pass"), "inconc"),
        (("fail", "inconc"), "fail"),
        (("pass", "error", "fail"), "error"),
    ],
)
def test_the_worst_applicable_case(verdicts: tuple[str, ...], expected: str) -> None:
    assert clause_verdict(*verdicts) == expected


def test_keys_and_counts() -> None:
    report = build_report(run(), CONTRACT)
    assert list(report) == ["contract", "seed", "iut", "environment", "summary", "cases", "clauses"]
    assert report["summary"] == {"pass": 1, "fail": 1, "inconc": 1, "error": 1, "not_applicable": 2}
    assert [clause["id"] for clause in report["clauses"]] == [clause.id for clause in CONTRACT.clauses]
    assert report["cases"][1]["detail"] == ["-> one", "<- two"]
    assert "replay" not in report["cases"][0]
    assert json.loads(json.dumps(report)) == report


def test_a_run_that_was_broken_off_says_so() -> None:
    record = run()
    record.stopped = "after 6 cases: the peer closed"
    assert build_report(record, CONTRACT)["stopped"] == "after 6 cases: the peer closed"
