"""``protobench soak``: what it tells, its exit statuses, and what it refuses."""

from __future__ import annotations

import json
import os
import signal
import subprocess
from pathlib import Path

from command import PROGRAM, ROOT, invoke, lockstep

FIRMWARE = ROOT / "emulator" / "firmware" / "build-variants" / "module-lockstep"


def test_what_is_shown() -> None:
    result = invoke("soak", "--reliability", "0.9", "--confidence", "0.9")
    assert result.exit_code == 0
    assert "22 of 22 motions (hinge) made" in result.stdout
    assert "shown: at least 0.900" in result.stdout
    assert "22 motions (hinge)" in result.stderr
    assert "assumed: motions are alike and independent" in result.stdout


def test_a_failure_is_told_with_what_passed(tmp_path: Path) -> None:
    sound = invoke("soak", "--link", lockstep("sound"), "--reliability", "0.5", "--json")
    assert json.loads(sound.stdout)["made"] == 5
    broken = f"lockstep:{FIRMWARE} --variant motion-stops-short"
    result = invoke("soak", "--link", broken, "--reliability", "0.97", "--out", str(tmp_path))
    assert result.exit_code == 1
    data = json.loads((tmp_path / "soak.json").read_text())
    assert data["failure"].startswith("motion ")
    assert data["failure"].split(": ")[1] == "MOT-04"
    assert data["exchange"]
    assert result.stdout.startswith(f"fail: {data['failure']}")
    assert f"again: {data['again']}" in result.stdout


def test_wrong_use() -> None:
    assert invoke("soak", "--reliability", "1").exit_code == 2
    assert "reliability = 1.0: between 0 and 1" in invoke("soak", "--reliability", "1").output
    unknown = invoke("soak", "--motion", "hop")
    assert unknown.exit_code == 2
    assert "the module has hinge, pivot" in unknown.output
    assert invoke("soak", "--link", "serial:/dev/null").exit_code == 2
    assert invoke("soak", "--link", "tcp://127.0.0.1:1").exit_code == 4


def test_an_interruption_tells_what_was_shown() -> None:
    command = [*PROGRAM, "soak", "--reliability", "0.99999"]
    process = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    assert process.stderr is not None
    assert process.stderr.readline() == "299572 motions (hinge)\n"
    assert process.stderr.readline().endswith("s left\n")
    os.kill(process.pid, signal.SIGINT)
    stdout, _ = process.communicate(timeout=60)
    assert process.returncode == 130
    assert stdout.startswith("stopped: interrupted; the module was sent a halt\n")
    assert "shown: at least 0.9" in stdout
