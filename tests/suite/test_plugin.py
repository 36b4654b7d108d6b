"""The cases under plain pytest, and a team's own beside them, as README shows."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

from judging import firmware

OWN = '''
"""Tests of a team, beside the suite."""

def test_it_describes_itself(bench):
    """The module describes itself as emulated."""
    assert bench.a.read("describe")["nature"] == "emulated"

def test_what_does_not_hold(bench, tmp_path):
    """A lease is refused, which is wrong."""
    assert tmp_path.exists()
    bench.a.learn()
    bench.a.refused("lease-held", "take-lease", duration=1000, clause="LSE-01")

def test_without_a_module():
    assert True
'''


def run_pytest(*arguments: str | Path, cwd: Path) -> subprocess.CompletedProcess[str]:
    command = [
        sys.executable,
        "-m",
        "pytest",
        "-q",
        "-p",
        "no:cacheprovider",
        "-p",
        "no:randomly",
        *map(str, arguments),
    ]
    return subprocess.run(command, cwd=cwd, capture_output=True, text=True, timeout=120, check=False)


def test_the_suite_by_pyargs(tmp_path: Path) -> None:
    link = f"lockstep:{firmware('module-smallest-lockstep')}"
    done = run_pytest("--pyargs", "protobench.suite", "--link", link, cwd=tmp_path)
    assert done.returncode == 0, done.stdout[-3000:]
    assert "passed" in done.stdout
    assert "skipped" in done.stdout  # what the smallest profile does not have


def test_own_cases_with_the_same_fixtures(tmp_path: Path) -> None:
    (tmp_path / "test_own.py").write_text(OWN)
    done = run_pytest(
        "test_own.py", "--link", f"lockstep:{firmware('module-lockstep')}", "--bench-seed", "4", cwd=tmp_path
    )
    assert done.returncode == 1
    assert "1 failed, 2 passed" in done.stdout
    assert "fail: LSE-01: take-lease must be refused lease-held; it was accepted" in done.stdout
    assert "-> take-lease" in done.stdout


def test_a_dead_link_is_an_error_not_a_verdict(tmp_path: Path) -> None:
    done = run_pytest("--pyargs", "protobench.suite", "--link", "run:/no/such/module", "-x", cwd=tmp_path)
    assert done.returncode == 1
    assert "/no/such/module" in done.stdout
    assert "error" in done.stdout
