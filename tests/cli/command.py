"""Running the command line: in this process where that will do, as a program where it matters."""

from __future__ import annotations

import shlex
import subprocess
import sys
from pathlib import Path

from click.testing import Result
from typer.testing import CliRunner

from protobench.cli import app

ROOT = Path(__file__).parents[2]
MODULE = Path(__file__).with_name("lockstep_module.py")
PROGRAM = (sys.executable, "-m", "protobench.cli")


def invoke(*arguments: str, stdin: bytes | None = None) -> Result:
    """Run in this process; wide, so that no message is wrapped."""
    return CliRunner().invoke(app, arguments, input=stdin, env={"COLUMNS": "300", "TERMINAL_WIDTH": "300"})


def run(*arguments: str, stdin: bytes = b"", timeout_s: float = 60) -> subprocess.CompletedProcess[bytes]:
    """Run as a program, with pipes."""
    return subprocess.run(
        [*PROGRAM, *arguments], input=stdin, capture_output=True, timeout=timeout_s, check=False
    )


def lockstep(*arguments: str | Path) -> str:
    """Link to ``lockstep_module.py``."""
    return "lockstep:" + shlex.join(map(str, (sys.executable, MODULE, *arguments)))


def python_child(code: str) -> str:
    """Link to a child process that runs this Python code."""
    return "run:" + shlex.join((sys.executable, "-c", code))


def words(text: str) -> str:
    """Text without the frame that the command line draws round errors, and without line breaks."""
    return " ".join(text.replace("│", " ").split())
