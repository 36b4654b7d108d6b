"""``protobench check`` on its defaults, its report, and its exit statuses for modules that are sound or are not."""

from __future__ import annotations

import json
import re
import shlex
import xml.etree.ElementTree as ET
from pathlib import Path

import pytest
from command import invoke, lockstep, python_child, run, words

from protobench.contract import load_contract
from protobench.suite.run import list_cases

REPORT_KEYS = ["contract", "seed", "iut", "environment", "summary", "cases", "clauses"]
SUMMARY_KEYS = ["pass", "fail", "inconc", "error", "not_applicable"]
CASE_KEYS = ["id", "level", "class", "purpose", "clauses", "verdict", "reason", "duration_s"]
CLAUSE_KEYS = ["id", "level", "verdict", "cases"]


def test_defaults_pass_and_leave_a_report(tmp_path: Path) -> None:
    done = run("check", "--out", str(tmp_path / "new" / "folder"))
    assert done.returncode == 0, done.stderr.decode()
    out = tmp_path / "new" / "folder"
    written = ["conformance.log", "junit.xml", "report.html", "report.json"]
    assert sorted(path.name for path in out.iterdir()) == written
    report = json.loads((out / "report.json").read_text())
    assert list(report) == REPORT_KEYS
    assert list(report["summary"]) == SUMMARY_KEYS
    assert report["summary"]["fail"] == report["summary"]["inconc"] == report["summary"]["error"] == 0
    assert {tuple(case) for case in report["cases"]} == {tuple(CASE_KEYS)}
    assert {tuple(clause) for clause in report["clauses"]} == {tuple(CLAUSE_KEYS)}
    assert [case["id"] for case in report["cases"]] == [info.id for info in list_cases("required")]
    assert sum(report["summary"].values()) == len(report["cases"]) >= 100
    assert [clause["id"] for clause in report["clauses"]] == [clause.id for clause in load_contract().clauses]
    assert report["iut"]["nature"] == "emulated"
    assert report["environment"]["time"] == "virtual"
    suite = ET.parse(out / "junit.xml").getroot().find("testsuite")
    assert suite is not None
    assert int(suite.attrib["tests"]) == len(report["cases"])
    assert int(suite.attrib["skipped"]) == report["summary"]["not_applicable"]
    assert f"{report['summary']['pass']} pass, {report['summary']['not_applicable']} not applicable" in (
        done.stdout.decode()
    )
    frames = [line for line in (out / "conformance.log").read_text().splitlines() if not line.startswith("#")]
    assert len(frames) > 1000
    assert all(re.fullmatch(r" *\d+\.\d{6} (->|<-|\.\.) .+", line) for line in frames)


@pytest.mark.parametrize("level", ["debug", "error"])
def test_json_is_all_that_is_printed(level: str) -> None:
    done = run("--log-level", level, "check", "--json", "--only", "VER")
    assert done.returncode == 0
    report = json.loads(done.stdout)
    assert list(report) == REPORT_KEYS
    assert {case["id"].partition(".")[0] for case in report["cases"]} == {"VER"}
    assert {clause["verdict"] for clause in report["clauses"]} == {"none", "pass"}


def test_same_seed_same_log(tmp_path: Path) -> None:
    logs = []
    for name, seed in (("a", "5"), ("b", "5"), ("c", "6")):
        done = invoke("check", "--only", "LSE", "--seed", seed, "--out", str(tmp_path / name))
        assert done.exit_code == 0
        logs.append((tmp_path / name / "conformance.log").read_text())
    assert logs[0] == logs[1] != logs[2]


def test_list_names_every_case_once_and_judges_none() -> None:
    done = invoke("check", "--list", "--link", "tcp://127.0.0.1:1")
    lines = done.stdout.splitlines()
    assert done.exit_code == 0
    assert [line.split()[0] for line in lines] == [info.id for info in list_cases("required")]
    rows = json.loads(invoke("check", "--list", "--json", "--level", "recommended", "--only", "HLT").stdout)
    assert [row["id"] for row in rows] == [info.id for info in list_cases("recommended", "HLT")]
    assert list(rows[0]) == ["id", "level", "class", "purpose", "clauses", "needs"]


def test_only_selects_by_area_class_clause_and_whole_id() -> None:
    def found(expression: str) -> set[str]:
        return {
            row["id"] for row in json.loads(invoke("check", "--list", "--json", "--only", expression).stdout)
        }

    assert found("HLT and not invalid") < found("HLT")
    assert found("FRM or BDY") == found("FRM") | found("BDY")
    assert found("SEQ.copied-move") == {"SEQ.copied-move"}
    assert all("SEQ-03" in info.clauses for info in list_cases("required", "SEQ-03"))


def test_a_broken_module_fails_readably_and_its_replay_fails_too(tmp_path: Path) -> None:
    link = lockstep("halts-for-others")
    done = run("check", "--link", link, "--only", "HLT.not-included or VER", "--out", str(tmp_path))
    text = done.stdout.decode()
    assert done.returncode == 1, done.stderr.decode()
    assert "FAIL HLT.not-included - A halt for somebody else does nothing." in text
    assert "ADR-01: a halt for another address must not be answered; halt-receipt came" in text
    assert f"ADR-01 says: {load_contract().clause('ADR-01').text}" in text
    assert re.search(r"-> halt #\d+ 0x10001 to 0x2 session [0-9a-f]{8} \{.*\}\n +01 20 00", text)
    assert re.search(r"<- halt-receipt #\d+ .*disposition=at-rest", text)
    assert "1 fail" in text
    (again,) = re.findall(r"^  again: (.+)$", text, re.MULTILINE)
    program, *arguments = shlex.split(again)
    assert program == "protobench"
    repeated = run(*arguments)
    assert repeated.returncode == 1
    assert "halt-receipt came" in repeated.stdout.decode()
    (case,) = [
        case
        for case in json.loads((tmp_path / "report.json").read_text())["cases"]
        if case["verdict"] == "fail"
    ]
    assert case["replay"] == again
    assert any("halt-receipt" in line for line in case["detail"])


def test_the_same_program_unbroken_passes() -> None:
    done = run("check", "--link", lockstep("sound"), "--only", "HLT.not-included or VER")
    assert done.returncode == 0, done.stdout.decode()


def test_nothing_listens() -> None:
    done = invoke("check", "--link", "tcp://127.0.0.1:1")
    assert done.exit_code == 4
    assert done.stdout == ""
    assert "tcp://127.0.0.1:1: connect: nothing listens there" in done.stderr


@pytest.mark.parametrize(
    ("link", "reason"),
    [
        ("run:/no/such/module", "no such device or file"),
        ("lockstep:/no/such/module", "no such device or file"),
        (python_child("raise SystemExit(7)"), "the program has ended with exit status 7"),
        (python_child("import sys; sys.stdin.read()"), "no module answered a probe"),
        (python_child("print('hello, world'); import sys; sys.stdin.read()"), "no module answered a probe"),
    ],
)
def test_no_module_is_the_bench_failing(link: str, reason: str) -> None:
    done = run("check", "--link", link)
    assert done.returncode == 4, done.stderr.decode()
    assert reason in words(done.stderr.decode())
    assert done.stdout == b""


def test_nothing_judged_is_no_pass() -> None:
    done = run("check", "--only", "MOT.no-queue")  # the embedded module has a queue
    assert done.returncode == 4, done.stdout.decode()
    assert "1 not applicable" in done.stdout.decode()


def test_known_deviations_are_reported_and_excused_until_they_expire(tmp_path: Path) -> None:
    known = tmp_path / "known.toml"
    text = (
        '[[deviation]]\ncase = "HLT.not-included"\nclause = "ADR-01"\nreason = "Invented."\n'
        'owner = "drives team"\nexpires = 9999-12-31\n'
    )
    known.write_text(text)
    link = lockstep("halts-for-others")
    arguments = ("check", "--link", link, "--only", "HLT.not-included or VER", "--deviations", str(known))
    done = run(*arguments, "--out", str(tmp_path / "out"))
    words_out = done.stdout.decode()
    assert done.returncode == 0, words_out + done.stderr.decode()
    assert "4 pass, 1 known deviation" in words_out
    assert "KNOWN HLT.not-included - ADR-01: a halt for another address must not be answered" in words_out
    assert "listed by drives team until 9999-12-31: Invented." in words_out
    report = json.loads((tmp_path / "out" / "report.json").read_text())
    assert report["summary"] == dict.fromkeys(SUMMARY_KEYS, 0) | {"pass": 4, "known_deviation": 1}
    (entry,) = report["deviations"]
    assert (entry["case"], entry["state"], entry["owner"]) == ("HLT.not-included", "known", "drives team")
    (judged,) = [case for case in report["cases"] if case["verdict"] == "known_deviation"]
    assert judged["broken"] == ["ADR-01"]
    assert judged["replay"]
    (clause,) = [clause for clause in report["clauses"] if clause["id"] == "ADR-01"]
    assert clause["verdict"] == "fail"
    suite = ET.parse(tmp_path / "out" / "junit.xml").getroot().find("testsuite")
    assert suite is not None
    assert [suite.attrib[name] for name in ("tests", "failures", "skipped")] == ["5", "0", "1"]
    assert [skipped.attrib["type"] for skipped in suite.iter("skipped")] == ["known_deviation"]

    known.write_text(text.replace("9999-12-31", "2026-01-01"))
    done = run(*arguments)
    assert done.returncode == 1
    assert "expired on 2026-01-01; the case still fails" in done.stdout.decode()
    known.write_text(text.replace("ADR-01", "ADR-02"))
    done = run(*arguments)
    assert done.returncode == 1
    assert "the case fails by ADR-01, the list says ADR-02" in done.stdout.decode()


@pytest.mark.parametrize(
    ("case", "only", "status", "message"),
    [
        ("HLT.not-included", "HLT.not-included", 1, "the case passes; take the entry out of the list"),
        ("MOT.no-queue", "MOT.no-queue or VER", 1, "the case is not applicable (only without queue)"),
        ("MOT.no-queue", "VER", 0, "the case was not judged in this run"),
    ],
)
def test_a_list_that_the_run_shows_wrong_fails_it(
    tmp_path: Path, case: str, only: str, status: int, message: str
) -> None:
    known = tmp_path / "known.toml"
    known.write_text(
        f'[[deviation]]\ncase = "{case}"\nreason = "Invented."\nowner = "nobody"\nexpires = 9999-12-31\n'
    )
    done = invoke("check", "--only", only, "--deviations", str(known), "--out", str(tmp_path))
    assert done.exit_code == status
    assert message in words(done.stdout)
    suite = ET.parse(tmp_path / "junit.xml").getroot().find("testsuite")
    assert suite is not None
    failed = [case.attrib["name"] for case in suite.iter("testcase") if case.find("failure") is not None]
    assert failed == ([case] if status else [])
    assert suite.attrib["failures"] == str(len(failed))


def test_a_list_that_cannot_be_used_ends_check_before_it_begins(tmp_path: Path) -> None:
    known = tmp_path / "known.toml"
    known.write_text(
        '[[deviation]]\ncase = "HLT.to-grup"\nreason = "x"\nowner = "y"\nexpires = 9999-12-31\n' * 2
    )
    done = invoke("check", "--deviations", str(known), "--out", str(tmp_path / "out"))
    assert done.exit_code == 2
    assert done.stdout == ""
    assert "deviation[0].case: 'HLT.to-grup' is no case; did you mean 'HLT.to-group'?" in done.stderr
    assert "deviation[1].case: 'HLT.to-grup' is listed already" in done.stderr
    assert not (tmp_path / "out").exists()


def test_a_statement_is_held_against_the_module(tmp_path: Path) -> None:
    described = json.loads(run("check", "--json", "--only", "VER").stdout)["iut"]
    contract = load_contract()
    capabilities = [c.name for c in contract.capabilities if described["capabilities"] >> c.number & 1]
    motions = [
        name for name, number in contract.enum_values("motion").items() if described["motions"] >> number & 1
    ]
    ics = tmp_path / "ics.toml"
    ics.write_text(f"capabilities = {json.dumps(capabilities)}\nmotions = {json.dumps(motions)}\n")
    assert invoke("check", "--ics", str(ics), "--only", "VER").exit_code == 0
    ics.write_text(f"motions = {json.dumps(motions[1:])}\n")
    done = invoke("check", "--ics", str(ics), "--only", "VER")
    assert done.exit_code == 1
    assert f"motion {motions[0]} is described and not stated" in done.stderr
