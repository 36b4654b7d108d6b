"""What a run leaves: report, JUnit XML, conformance log."""

from __future__ import annotations

import io
import xml.etree.ElementTree as ET

from protobench.contract import load_contract
from protobench.evidence import ConformanceLog, build_report, junit_xml
from protobench.judge import CaseRecord, Failed, RunRecord, Verdict


def case(case_id: str, verdict: str, *clauses: str) -> CaseRecord:
    reason = "" if verdict == "pass" else "because \x01 <&>"
    return CaseRecord(
        case_id, "required", "valid", "Purpose.", clauses, verdict, reason, 0.5, "detail", "again"
    )


def record() -> RunRecord:
    cases = [
        case("FRM.a", "pass", "FRM-01", "FRM-02"),
        case("FRM.b", "fail", "FRM-02"),
        case("FRM.c", "inconc", "FRM-03"),
        case("FRM.d", "not_applicable", "FRM-04"),
        case("FRM.e", "error", "FRM-05"),
    ]
    return RunRecord("Module Command Link 1.0", 3, {}, {"link": "memory"}, cases)


def test_a_clause_has_the_worst_verdict_of_its_applicable_cases() -> None:
    report = build_report(record(), load_contract())
    verdicts = {clause["id"]: clause["verdict"] for clause in report["clauses"]}
    wanted = {
        "FRM-01": "pass",
        "FRM-02": "fail",
        "FRM-03": "inconc",
        "FRM-04": "none",
        "FRM-05": "error",
        "FRM-06": "none",
    }
    assert {name: verdicts[name] for name in wanted} == wanted
    assert report["summary"] == {"pass": 1, "fail": 1, "inconc": 1, "error": 1, "not_applicable": 1}


def test_junit_tells_inconclusive_and_not_applicable_apart() -> None:
    suite = ET.fromstring(junit_xml(record()))[0]
    assert (suite.attrib["failures"], suite.attrib["errors"], suite.attrib["skipped"]) == ("1", "1", "2")
    types = [element.attrib["type"] for element in suite.iter("skipped")]
    assert types == ["inconc", "not_applicable"]
    assert "again" in (next(suite.iter("failure")).text or "")


def test_the_log_has_a_line_for_each_frame() -> None:
    stream = io.StringIO()
    log = ConformanceLog(stream)
    log.header(seed=3)
    log.case_begins("FRM.a")
    log.frame(5_000_000_000, "->", b"\x01\x02", "status\nwith a break")
    log.frame(5_000_250_000, "<-", b"\x03", "answer")
    log.case_ends("FRM.a", "fail", "two\nlines")
    lines = stream.getvalue().splitlines()
    assert lines[0] == "# seed: 3"
    assert lines[2].split() == ["0.000000", "->", "status", "with", "a", "break", "|", "0102"]
    assert lines[3].split() == ["0.000250", "<-", "answer", "|", "03"]
    assert lines[4] == "# case FRM.a ends: fail (two lines)"


def test_verdicts_only_worsen() -> None:
    order = [Verdict.NONE, Verdict.PASS, Verdict.INCONC, Verdict.FAIL, Verdict.ERROR]
    assert sorted(Verdict) == order
    assert max(Verdict.PASS, Verdict.INCONC) is Verdict.INCONC
    assert str(Failed("reason", clause="FRM-01")) == "FRM-01: reason"
