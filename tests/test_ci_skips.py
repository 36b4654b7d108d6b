"""The rule of conftest.py: with CI=true a skipped test is a failed one."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

TESTS = """
import pytest

@pytest.mark.skip(reason="no such tool")
def test_marked(): ...

def test_inside():
    pytest.skip("no such tool")

@pytest.mark.xfail(strict=True, reason="known")
def test_known():
    raise ValueError
"""


def run_in(folder: Path, ci: str) -> subprocess.CompletedProcess[str]:
    """Run pytest on ``folder`` with the project's conftest.py in it."""
    shutil.copy(Path(__file__).with_name("conftest.py"), folder)
    return subprocess.run(
        [
            sys.executable,
            "-m",
            "pytest",
            "-q",
            "-p",
            "no:cacheprovider",
            "--rootdir",
            str(folder),
            str(folder),
        ],
        env=os.environ | {"CI": ci},
        cwd=folder,
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )


@pytest.mark.parametrize(("ci", "status", "said"), [("true", 1, "CI does not allow"), ("", 0, "2 skipped")])
def test_skips_fail_in_ci_only(tmp_path: Path, ci: str, status: int, said: str) -> None:
    (tmp_path / "test_skips.py").write_text(TESTS)
    result = run_in(tmp_path, ci)
    assert result.returncode == status, result.stdout + result.stderr
    assert said in result.stdout
    assert "1 xfailed" in result.stdout


def test_a_module_that_skips_itself_fails_in_ci(tmp_path: Path) -> None:
    (tmp_path / "test_absent.py").write_text("import pytest\npytest.importorskip('no_such_module_at_all')\n")
    result = run_in(tmp_path, "true")
    assert result.returncode != 0
    assert "CI does not allow" in result.stdout
