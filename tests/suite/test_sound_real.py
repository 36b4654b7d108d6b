"""Sound modules pass everything that applies in real time, over every link; a busy machine may make some unclear."""

from __future__ import annotations

import re
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest
from judging import expect_sound, firmware, judge

INCONCLUSIVE_ALLOWED = 12  # the machine may be busy with something else
pytestmark = pytest.mark.alone


@contextmanager
def started(command: list[str], pattern: str, *, stream: str) -> Iterator[re.Match[str]]:
    """Run a program; yields what it says of where it listens."""
    process = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    try:
        lines = process.stdout if stream == "stdout" else process.stderr
        assert lines is not None
        for line in lines:
            if (match := re.search(pattern, line)) is not None:
                yield match
                return
        pytest.fail(f"{command[0]} ended without saying where it listens")
    finally:
        process.terminate()
        process.communicate(timeout=10)


def test_c_module_on_its_standard_input_and_output() -> None:
    expect_sound(judge(f"run:{firmware('module-stdio')}"), inconclusive_allowed=INCONCLUSIVE_ALLOWED)


def test_c_module_over_tcp() -> None:
    command = [str(firmware("module-tcp")), "--port", "0"]
    with started(command, r"127\.0\.0\.1:(\d+)", stream="stderr") as match:
        record = judge(f"tcp://127.0.0.1:{match[1]}")
    expect_sound(record, inconclusive_allowed=INCONCLUSIVE_ALLOWED)


def test_c_module_over_a_serial_line() -> None:
    with started([str(firmware("module-pty"))], r"(/dev/\S+)", stream="stdout") as match:
        record = judge(f"serial:{match[1]}", attended=True)
    expect_sound(record, inconclusive_allowed=INCONCLUSIVE_ALLOWED)


def test_python_module_over_zeromq(tmp_path: Path) -> None:
    bind = f"zmq+ipc://{tmp_path}/module"
    command = [sys.executable, "-m", "protobench.cli", "emulate", "--bind", bind, "--modules", "1"]
    with started(command, r"(zmq\+ipc://\S+)", stream="stdout"):
        record = judge(bind)
    expect_sound(record, inconclusive_allowed=INCONCLUSIVE_ALLOWED)
