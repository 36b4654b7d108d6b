"""Known deviations: reading the list, and judging a run beside it. Cases, owners and dates here are invented."""

from __future__ import annotations

import copy
from datetime import date, timedelta
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from protobench.contract import load_contract
from protobench.judge import CaseRecord, RunRecord
from protobench.suite.deviations import Deviation, apply_deviations, load_deviations
from protobench.suite.files import FileError

CASES = ("HLT.at-rest", "HLT.copies", "SEQ.copies")
DAY = date(2026, 6, 30)
GOOD = """
[[deviation]]
case = "HLT.copies"
clause = "HLT-03"
reason = "Second copy is not answered."
owner = "drives team"
expires = 2026-06-30
"""


def load(tmp_path: Path, text: str) -> tuple[Deviation, ...]:
    path = tmp_path / "known.toml"
    path.write_text(text)
    return load_deviations(path, load_contract(), CASES)


def problems(tmp_path: Path, text: str) -> list[str]:
    with pytest.raises(FileError) as caught:
        load(tmp_path, text)
    lines = str(caught.value).splitlines()
    assert lines == [str(problem) for problem in caught.value.problems]
    assert all(line.startswith(f"{tmp_path / 'known.toml'}: ") for line in lines)
    return [line.removeprefix(f"{tmp_path / 'known.toml'}: ") for line in lines]


def test_a_good_list(tmp_path: Path) -> None:
    (entry,) = load(tmp_path, GOOD)
    assert (entry.case, entry.clause, entry.owner) == ("HLT.copies", "HLT-03", "drives team")
    assert entry.expires == DAY
    (entry,) = load(tmp_path, GOOD.replace('clause = "HLT-03"\n', ""))
    assert entry.clause is None


@pytest.mark.parametrize(
    ("old", "new", "line"),
    [
        ('owner = "drives team"\n', "", "deviation[0].owner: is missing"),
        ('reason = "Second copy is not answered."\n', "", "deviation[0].reason: is missing"),
        ("expires = 2026-06-30\n", "", "deviation[0].expires: is missing"),
        ("2026-06-30", '"soon"', "deviation[0].expires: must be a date such as 2027-01-31; found 'soon'"),
        ("2026-06-30", "2026", "deviation[0].expires: must be a date such as 2027-01-31; found 2026"),
        (
            "2026-06-30",
            "2026-06-30T12:00:00",
            "deviation[0].expires: must be a date such as 2027-01-31; found datetime",
        ),
        (
            "owner",
            "onwer",
            "deviation[0].owner: is missing\ndeviation[0].onwer: unknown key; did you mean 'owner'?",
        ),
        ('"drives team"', '""', "deviation[0].owner: must be text, and not empty; found ''"),
        ('"drives team"', "7", "deviation[0].owner: must be text; found 7"),
        ("HLT.copies", "HLT.copy", "deviation[0].case: 'HLT.copy' is no case; did you mean 'HLT.copies'?"),
        ("HLT-03", "HLT-3", "deviation[0].clause: 'HLT-3' is no clause of the contract; did you mean 'HLT-"),
        ("[[deviation]]", "[[deviations]]", "deviation: is missing\ndeviations: unknown key; did you mean"),
        ("[[deviation]]", "[deviation]", "deviation: must be a list"),
        ("2026-06-30", "2026-02-30", "is not TOML: "),
    ],
)
def test_a_list_that_cannot_be_used(tmp_path: Path, old: str, new: str, line: str) -> None:
    assert GOOD.count(old) >= 1
    found = "\n".join(problems(tmp_path, GOOD.replace(old, new)))
    assert found.startswith(line)


def test_everything_that_is_wrong_is_said_at_once(tmp_path: Path) -> None:
    text = GOOD + GOOD + GOOD.replace("HLT.copies", "no-such").replace("HLT-03", "X")
    found = problems(tmp_path, text)
    assert found[0] == (
        "deviation[1].case: 'HLT.copies' is listed already, in deviation[0]; a case is listed once"
    )
    assert found[1].startswith("deviation[2].case: 'no-such' is no case; known: HLT.at-rest, HLT.copies")
    assert found[2].startswith("deviation[2].clause: 'X' is no clause of the contract")
    assert len(found) == 3


def test_a_file_that_is_none(tmp_path: Path) -> None:
    with pytest.raises(FileError, match="cannot be read: No such file"):
        load_deviations(tmp_path / "none.toml", load_contract(), CASES)
    (tmp_path / "known.toml").write_bytes(b"\xff")
    with pytest.raises(FileError, match="is not TOML"):
        load_deviations(tmp_path / "known.toml", load_contract(), CASES)


def record(verdict: str, *broken: str, reason: str = "HLT-03: no answer") -> RunRecord:
    case = CaseRecord(
        "HLT.copies", "required", "valid", "Purpose.", ("HLT-03",), verdict, reason, 0.0, broken=broken
    )
    other = CaseRecord("SEQ.copies", "required", "valid", "Purpose.", ("SEQ-03",), "pass", "", 0.0)
    return RunRecord("Contract 1.0", 1, cases=[case, other])


def entry(clause: str | None = "HLT-03", expires: date = DAY, case: str = "HLT.copies") -> Deviation:
    return Deviation(case=case, clause=clause, reason="Known.", owner="drives team", expires=expires)


@pytest.mark.parametrize(
    ("verdict", "broken", "clause", "state", "message"),
    [
        ("fail", ("HLT-03",), "HLT-03", "known", "HLT-03: no answer"),
        ("fail", ("HLT-03", "HLT-03"), "HLT-03", "known", "HLT-03: no answer"),
        ("fail", ("SEQ-03",), None, "known", "HLT-03: no answer"),
        ("fail", ("",), None, "known", "HLT-03: no answer"),
        (
            "fail",
            ("SEQ-03",),
            "HLT-03",
            "other",
            "the case fails by SEQ-03, the list says HLT-03: HLT-03: no answer",
        ),
        ("fail", ("",), "HLT-03", "other", "the case fails by no clause, the list says HLT-03"),
        (
            "fail",
            ("HLT-03", "SEQ-03"),
            "HLT-03",
            "other",
            "fails by HLT-03, as listed, and by SEQ-03, which is not",
        ),
        ("pass", (), "HLT-03", "passed", "the case passes; take the entry out of the list"),
        ("not_applicable", (), "HLT-03", "not_applicable", "the case is not applicable (HLT-03: no answer)"),
        ("inconc", (), "HLT-03", "unclear", "the case is inconc: HLT-03: no answer"),
        ("error", (), "HLT-03", "unclear", "the case is error"),
    ],
)
def test_what_comes_of_an_entry(
    verdict: str, broken: tuple[str, ...], clause: str | None, state: str, message: str
) -> None:
    before = record(verdict, *broken)
    kept = copy.deepcopy(before)
    after = apply_deviations(before, [entry(clause)], DAY)
    assert before == kept
    assert after.deviations is not None
    (found,) = after.deviations
    assert found.state == state
    assert message in found.message
    assert found.stale == (state in ("other", "passed", "not_applicable"))
    assert after.cases[0].verdict == ("known_deviation" if state == "known" else verdict)
    assert after.cases[1] == before.cases[1]


@pytest.mark.parametrize("verdict", ["fail", "pass", "not_applicable", "inconc", "error"])
def test_a_day_too_late(verdict: str) -> None:
    late = apply_deviations(record(verdict, "HLT-03"), [entry()], DAY + timedelta(days=1))
    assert late.deviations is not None
    assert late.deviations[0].state == "expired"
    assert late.deviations[0].stale
    assert "expired on 2026-06-30; the case " in late.deviations[0].message
    assert late.cases[0].verdict == verdict


def test_a_case_that_was_not_judged_says_nothing_of_its_entry() -> None:
    after = apply_deviations(record("pass"), [entry(case="HLT.at-rest", expires=date(2020, 1, 1))], DAY)
    assert after.deviations is not None
    assert (after.deviations[0].state, after.deviations[0].stale) == ("not_judged", False)


def test_an_empty_list_is_a_list() -> None:
    assert apply_deviations(record("fail"), [], DAY).deviations == []
    assert record("fail").deviations is None


@given(
    st.sampled_from(["pass", "fail", "inconc", "error", "not_applicable"]),
    st.lists(st.sampled_from(["HLT-03", "SEQ-03", ""]), max_size=3),
    st.none() | st.sampled_from(["HLT-03", "SEQ-03"]),
    st.integers(-400, 400),
)
def test_nothing_but_a_failure_as_listed_in_time_is_excused(
    verdict: str, broken: list[str], clause: str | None, days: int
) -> None:
    after = apply_deviations(record(verdict, *broken), [entry(clause)], DAY + timedelta(days=days))
    excused = after.cases[0].verdict == "known_deviation"
    as_listed = clause is None or set(broken) == {clause}
    assert excused == (verdict == "fail" and as_listed and days <= 0)
