"""``protobench ics``, and ``check --ics`` beside it: the form, both reviews, and what is said of each finding."""

from __future__ import annotations

import json
import shlex
import sys
import tomllib
from pathlib import Path

import pytest
from command import invoke, lockstep, python_child, run, words
from test_cli_wrong_use import kinds_in

from protobench.contract import load_contract


def test_an_empty_form_goes_to_standard_output_and_says_nothing() -> None:
    done = invoke("ics", "new")
    assert done.exit_code == 0
    said = {name: value for name, value in tomllib.loads(done.stdout).items() if value}
    assert said == {"contract": "1.0"}
    assert "#stop_ms = 0\n" in done.stdout
    assert "# Longest time to rest. 0..500 ms.\n" in done.stdout


def test_a_form_from_a_module_is_found_right_and_judged_by(tmp_path: Path) -> None:
    form, log = tmp_path / "module.toml", tmp_path / "in.txt"
    done = run("ics", "new", "--link", lockstep("sound", log), "--out", str(form))
    assert done.returncode == 0, done.stderr.decode()
    assert f"wrote {form}; check every line, then: protobench ics review {form}" in done.stdout.decode()
    codec_kinds = {load_contract().kind(name).class_ for name in kinds_in(log)}
    assert codec_kinds == {"read"}
    done = run("ics", "review", str(form), "--link", lockstep("sound"))
    assert done.returncode == 0
    assert done.stdout.decode() == "by itself: nothing found\nagainst the module: nothing found\n"
    out = tmp_path / "out"
    done = run("check", "--ics", str(form), "--link", lockstep("sound"), "--only", "VER", "--out", str(out))
    assert done.returncode == 0, done.stderr.decode()
    assert json.loads((out / "report.json").read_text())["environment"]["statement"] == str(form)


def test_a_form_is_not_written_over(tmp_path: Path) -> None:
    form = tmp_path / "module.toml"
    form.write_text("mine")
    done = invoke("ics", "new", "--out", str(form))
    assert done.exit_code == 2
    assert "is there already; name another file" in words(done.stderr)
    assert form.read_text() == "mine"
    assert invoke("ics", "new", "--out", str(tmp_path / "none" / "x.toml")).exit_code == 2


BAD = """
capabilities = ["queue"]
[sizes]
sessions = 2
queue = 0
[times]
stop_ms = 501
[requests]
halt = false
"""
FOUND = [
    "sizes.sessions = 2: must be 4..255 (DSC-06)",
    "times.stop_ms = 501: must be 0..500 ms, the limit stop_time (DSC-06)",
    "sizes.queue = 0: contradicts capabilities, which has queue (DSC-01)",
    "requests.halt = false: is required of every module",
]


def test_everything_that_breaks_the_contract_is_said_at_once(tmp_path: Path) -> None:
    form = tmp_path / "module.toml"
    form.write_text(BAD)
    done = invoke("ics", "review", str(form))
    assert done.exit_code == 1
    assert done.stdout.splitlines() == ["by itself: 4 findings", *(f"  {form}: {line}" for line in FOUND)]
    found = json.loads(invoke("ics", "review", str(form), "--json").stdout)
    assert list(found) == ["file", "sha256", "static", "dynamic"]
    assert found["dynamic"] is None
    assert found["static"][0] == {
        "field": "sizes.sessions",
        "value": 2,
        "rule": "must be 4..255",
        "clause": "DSC-06",
    }
    assert len(found["static"]) == 4


def test_check_sends_nothing_beside_a_statement_that_breaks_the_contract(tmp_path: Path) -> None:
    form, log = tmp_path / "module.toml", tmp_path / "in.txt"
    form.write_text(BAD)
    done = run("check", "--ics", str(form), "--link", lockstep("sound", log))
    assert done.returncode == 1
    assert done.stderr.decode().splitlines() == [f"{form}: {line}" for line in FOUND]
    assert done.stdout == b""
    assert not log.exists()


def test_a_module_that_differs_is_named_item_by_item(tmp_path: Path) -> None:
    form = tmp_path / "module.toml"
    form.write_text('motions = ["pivot", "hinge", "bond"]\n[times]\nstop_ms = 20\n')
    lines = [
        f"  {form}: motions: motion unbond is described and not stated (DSC-01)",
        f"  {form}: times.stop_ms = 20: the module describes 50 (DSC-06)",
    ]
    done = run("ics", "review", str(form), "--link", lockstep("sound"))
    assert done.returncode == 1
    assert done.stdout.decode().splitlines() == [
        "by itself: nothing found",
        "against the module: 2 findings",
        *lines,
    ]
    done = run("ics", "review", str(form), "--link", lockstep("sound"), "--json")
    assert [entry["field"] for entry in json.loads(done.stdout)["dynamic"]] == ["motions", "times.stop_ms"]
    done = run("check", "--ics", str(form), "--link", lockstep("sound"))
    assert done.returncode == 1
    assert done.stderr.decode().splitlines() == ["module 1 contradicts its statement:", *lines]


@pytest.mark.parametrize("command", [("ics", "review"), ("check", "--ics")])
def test_a_file_that_cannot_be_read_is_wrong_use(tmp_path: Path, command: tuple[str, ...]) -> None:
    form = tmp_path / "module.toml"
    form.write_text('motions = ["hopp"]\n[sizes]\nsesions = 4\n')
    done = invoke(*command, str(form))
    assert done.exit_code == 2
    assert f"{form}: motions[0]: 'hopp' is no motion of the contract; did you mean 'hop'?" in done.stderr
    assert f"{form}: sizes.sesions: unknown key; did you mean 'sessions'?" in done.stderr
    assert done.stdout == ""


@pytest.mark.parametrize(
    ("link", "status", "message"),
    [
        ("carrier-pigeon", 2, "link address 'carrier-pigeon'"),
        ("serial:/dev/nothing", 2, "Give --attended"),
        ("tcp://192.0.2.1:9", 2, "Give --attended"),  # RFC 5737: nobody's
        ("tcp://127.0.0.1:1", 4, "nothing listens there"),
        (python_child("import sys; sys.stdin.read()"), 4, "no module answered a probe"),
    ],
)
def test_no_module_is_said_with_the_reason(tmp_path: Path, link: str, status: int, message: str) -> None:
    form = tmp_path / "module.toml"
    form.write_text("")
    for arguments in (("ics", "new", "--link", link), ("ics", "review", str(form), "--link", link)):
        done = invoke(*arguments)
        assert done.exit_code == status, done.stderr
        assert message in words(done.stderr)
        assert done.stdout == ""


def test_a_physical_module_may_be_asked_unattended(tmp_path: Path) -> None:
    log = tmp_path / "in.txt"
    done = run("ics", "new", "--link", lockstep("physical", log))
    assert done.returncode == 0, done.stderr.decode()
    assert tomllib.loads(done.stdout.decode())["module"]["nature"] == "physical"
    assert {load_contract().kind(name).class_ for name in kinds_in(log)} == {"read"}


@pytest.mark.parametrize("command", ["new", "review"])
def test_help_has_statuses_and_an_example(command: str) -> None:
    text = words(invoke("ics", command, "--help").stdout)
    assert "Exit status: 0" in text
    assert "Example: protobench ics" in text


NEEDING_RESTART = "LSE.restart or SEQ.restart or DSC.position"


def restartable(tmp_path: Path, command: str) -> tuple[str, Path]:
    """Link to a module without assist, and a statement that says how it is restarted."""
    form = tmp_path / "module.toml"
    form.write_text(f"[testing]\nassist = false\n[testing.restart]\ncommand = {json.dumps(command)}\n")
    module = Path(__file__).with_name("restartable_module.py")
    return "run:" + shlex.join((sys.executable, str(module), str(tmp_path / "restart"))), form


def test_a_module_without_assist_is_restarted_by_the_means_of_its_statement(tmp_path: Path) -> None:
    link, form = restartable(tmp_path, shlex.join(("touch", str(tmp_path / "restart"))))
    arguments = (
        "check",
        "--link",
        link,
        "--ics",
        str(form),
        "--only",
        f"{NEEDING_RESTART} or VER.unknown-kind",
    )
    done = run(*arguments)
    assert done.returncode == 0, done.stdout.decode() + done.stderr.decode()
    assert "1 pass, 3 not applicable" in done.stdout.decode()
    assert "restart of the module" not in done.stderr.decode()
    assert not (tmp_path / "restart").exists()
    done = run(*arguments, "--restart", "--json", "--out", str(tmp_path / "out"))
    assert done.returncode == 0, done.stdout.decode() + done.stderr.decode()
    assert "restart of the module, as" in done.stderr.decode()
    report = json.loads(done.stdout)
    assert report["summary"]["pass"] == 4
    assert "restart" in report["iut"]["items"]
    assert "assist" not in report["iut"]["items"]
    assert (tmp_path / "out" / "conformance.log").read_text().count(" .. restart from outside") == 4


@pytest.mark.parametrize(
    ("command", "reason"),
    [
        ("false", "RestartFailed: 'false' ended with status 1"),
        ("sh -c 'echo no power >&2; exit 3'", "ended with status 3: no power"),
        ("/no/such/program", "RestartFailed: '/no/such/program' cannot be run: No such file or directory"),
    ],
)
def test_a_means_that_does_not_work_is_the_bench_failing(tmp_path: Path, command: str, reason: str) -> None:
    link, form = restartable(tmp_path, command)
    done = run("check", "--link", link, "--ics", str(form), "--restart", "--only", "LSE.restart", "--json")
    assert done.returncode == 4, done.stderr.decode()
    (case,) = json.loads(done.stdout)["cases"]
    assert case["verdict"] == "error"
    assert reason in case["reason"]
    assert "--restart" in case["replay"]
    assert f"--ics {form}" in case["replay"]


def test_a_means_that_does_nothing_fails_the_case(tmp_path: Path) -> None:
    link, form = restartable(tmp_path, "true")
    done = run("check", "--link", link, "--ics", str(form), "--restart", "--only", "LSE.restart", "--json")
    assert done.returncode == 1, done.stderr.decode()
    (case,) = json.loads(done.stdout)["cases"]
    assert "STA-08: no started event within" in case["reason"]


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (None, "--restart needs --ics with a table testing.restart"),
        ("[times]\nstop_ms = 50", "names no means of restarting that the bench can use over this link"),
        (
            '[testing.restart]\noperator = "Pull the plug."',
            "names no means of restarting that the bench can use",
        ),
        (
            '[testing.restart]\ncommand = "true"',
            "names no means of restarting that the bench can use",
        ),  # virtual time
    ],
)
def test_restart_without_a_means_is_wrong_use(tmp_path: Path, text: str | None, message: str) -> None:
    form = tmp_path / "module.toml"
    form.write_text(text or "")
    done = invoke("check", "--restart", *(("--ics", str(form)) if text else ()), "--only", "VER")
    assert done.exit_code == 2, done.stderr
    assert message in words(done.stderr)
