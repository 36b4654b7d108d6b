"""``protobench robustness``: results, failures with what replays them, budgets, wrong use, an interruption."""

from __future__ import annotations

import json
import signal
import subprocess
from pathlib import Path

import pytest
from command import PROGRAM, invoke, lockstep

BROKEN = "late-start-runs"  # of tests/defects/broken_modules.py


def test_a_sound_module() -> None:
    result = invoke("robustness", "--sequences", "8", "--seed", "3")
    assert result.exit_code == 0, result.output
    assert "8 sequences, seed 3: 0 failed" in result.stdout
    assert "slowest answer" in result.stdout


def test_json_is_all_of_standard_output() -> None:
    result = invoke("robustness", "--sequences", "5", "--json")
    data = json.loads(result.stdout)
    assert data["sequences"] == 5
    assert data["failures"] == []
    assert data["accepted"] > 0
    assert {"halted", "busy", "conflict"} <= set(data["refused"])
    assert "crc" in data["dropped"]


def test_a_time_as_budget() -> None:
    data = json.loads(invoke("robustness", "--for", "1s", "--json").stdout)
    assert data["sequences"] > 1
    assert data["duration_s"] < 30


def test_a_broken_module_is_told_with_what_replays_it(tmp_path: Path) -> None:
    out = tmp_path / "out"
    link = lockstep(BROKEN)
    result = invoke("robustness", "--link", link, "--sequences", "30", "--out", str(out))
    assert result.exit_code == 1, result.output
    data = json.loads((out / "robustness.json").read_text())
    first = data["failures"][0]
    assert first["clause"]
    assert f"{first['clause']}: " in result.stdout
    assert f"of {first['steps_drawn']} steps are enough" in result.stdout
    assert str(out / "sequence-1.json") in first["replay"]
    again = invoke("robustness", "--link", link, "--again", str(out / "sequence-1.json"), "--json")
    assert again.exit_code == 1, again.output
    assert json.loads(again.stdout)["failures"][0]["clause"] == first["clause"]


@pytest.mark.parametrize(
    ("arguments", "rule"),
    [
        (("--for", "1s", "--sequences", "3"), "a number or a time, not both"),
        (("--for", "soon"), "a time above zero"),
        (("--for", "0s"), "a time above zero"),
        (("--sequences", "0"), "--sequences"),
        (("--again", "missing.json"), "missing.json"),
        (("--link", "serial:/dev/none"), "Nothing was sent"),
        (("--link", "carrier:pigeon"), "carrier"),
    ],
)
def test_wrong_use(arguments: tuple[str, ...], rule: str) -> None:
    result = invoke("robustness", *arguments)
    assert result.exit_code == 2
    assert rule in result.output


def test_an_interruption_keeps_what_was_found(tmp_path: Path) -> None:
    arguments = [*PROGRAM, "robustness", "--for", "50s", "--out", str(tmp_path / "out")]
    with subprocess.Popen(arguments, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as program:
        assert program.stderr is not None
        assert "sequences" in program.stderr.readline()  # it has begun
        program.send_signal(signal.SIGINT)
        program.communicate(timeout=30)
    assert program.returncode == 130
    data = json.loads((tmp_path / "out" / "robustness.json").read_text())
    assert data["interrupted"]
    assert data["sequences"] > 0
