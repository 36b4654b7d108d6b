"""``protobench check`` as a user runs it."""

from __future__ import annotations

import json
import os
import pty
import signal
import subprocess
import sys
import time
import xml.etree.ElementTree as ET
from pathlib import Path

import pytest

CHILD_SILENT = "import sys; sys.stdin.buffer.read()"


def run(*arguments: str, cwd: Path | None = None) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-m", "protobench.cli", *arguments]
    return subprocess.run(command, cwd=cwd, capture_output=True, text=True, timeout=120, check=False)


def test_defaults_judge_the_embedded_module(tmp_path: Path) -> None:
    done = run("check", "--out", str(tmp_path / "report"))
    assert done.returncode == 0, done.stdout[-2000:]
    report = json.loads((tmp_path / "report" / "report.json").read_text())
    assert {"contract", "seed", "iut", "environment", "summary", "cases", "clauses"} <= report.keys()
    assert report["summary"].keys() == {"pass", "fail", "inconc", "error", "not_applicable"}
    assert report["summary"]["pass"] > 150
    wanted = {"id", "level", "class", "purpose", "clauses", "verdict", "reason", "duration_s"}
    assert all(wanted <= case.keys() for case in report["cases"])
    assert all(clause.keys() == {"id", "level", "verdict", "cases"} for clause in report["clauses"])
    suite = ET.parse(tmp_path / "report" / "junit.xml").getroot()[0]
    assert int(suite.attrib["tests"]) == len(report["cases"])
    log = (tmp_path / "report" / "conformance.log").read_text()
    assert "# case FRM.every-length begins" in log
    assert "# case FRM.every-length ends: pass" in log
    assert " -> describe " in log


def test_json_is_all_that_standard_output_holds() -> None:
    done = run("--log-level", "debug", "check", "--json", "--only", "VER")
    assert done.returncode == 0
    assert json.loads(done.stdout)["summary"]["pass"] == 4


def test_list_names_cases_and_judges_none() -> None:
    done = run("check", "--list", "--only", "HLT-03 and valid")
    assert done.returncode == 0
    assert "HLT.every-state" in done.stdout
    assert all("HLT." in line or "LOD." in line for line in done.stdout.splitlines())


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["--level", "best"], "required, recommended"),
        (["--only", "HLT and"], "a word is missing"),
        (["--only", "nothing-like-this"], "selects no case"),
        (["--link", "carrier-pigeon:"], "must be one of"),
        (["--link", "tcp://127.0.0.1:9", "--virtual"], "clock that the bench cannot stop"),
        (["--link", "serial:/dev/ttyUSB77"], "--attended"),
        (["--link", "tcp://127.0.0.1:no"], "port"),
        (["--ics", "/no/such/file"], "--ics"),
        (["--address", "0"], "--address"),
    ],
)
def test_wrong_use_is_2_and_says_what_is_wrong(arguments: list[str], words: str) -> None:
    done = run("check", *arguments)
    assert done.returncode == 2, done.stderr
    assert words in " ".join(done.stderr.replace("│", " ").split())
    assert "Traceback" not in done.stderr


def test_a_statement_that_names_what_the_contract_does_not_have(tmp_path: Path) -> None:
    path = tmp_path / "ics.toml"
    path.write_text('capabilities = ["teleport"]\n')
    done = run("check", "--ics", str(path))
    assert done.returncode == 2
    assert "teleport" in done.stderr


def test_a_module_that_contradicts_its_statement_is_1(tmp_path: Path) -> None:
    path = tmp_path / "ics.toml"
    path.write_text('capabilities = ["queue"]\nmotions = ["pivot", "hinge", "bond", "unbond"]\n')
    done = run("check", "--ics", str(path))
    assert done.returncode == 1
    assert "capability assist is described and not stated" in done.stderr


def test_no_module_is_4() -> None:
    for link in (f"run:{sys.executable} -c '{CHILD_SILENT}'", "run:/bin/false", "tcp://127.0.0.1:1"):
        done = run("check", "--link", link)
        assert done.returncode == 4, (link, done.stderr)
        assert "Traceback" not in done.stderr
        assert done.stderr.strip()


def test_progress_is_live_on_terminals_only() -> None:
    plain = run("check", "--only", "VER")
    assert "\x1b" not in plain.stderr + plain.stdout
    leader, follower = pty.openpty()
    command = [sys.executable, "-m", "protobench.cli", "check", "--only", "VER"]
    process = subprocess.Popen(
        command, stdout=subprocess.DEVNULL, stderr=follower, env={**os.environ, "TERM": "xterm"}
    )
    os.close(follower)
    shown = b""
    while True:
        try:
            data = os.read(leader, 4096)
        except OSError:
            break
        if not data:
            break
        shown += data
    assert process.wait(timeout=60) == 0
    os.close(leader)
    assert b"\x1b[" in shown


def test_interrupting_is_130() -> None:
    command = [
        sys.executable,
        "-m",
        "protobench.cli",
        "check",
        "--link",
        f"run:{sys.executable} -c '{CHILD_SILENT}'",
    ]
    process = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE)
    time.sleep(1.0)
    process.send_signal(signal.SIGINT)
    _, stderr = process.communicate(timeout=20)
    assert process.returncode == 130
    assert b"Traceback" not in stderr
