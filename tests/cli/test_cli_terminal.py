"""Interrupting a run, progress on terminals only, and a closed pipe."""

from __future__ import annotations

import json
import os
import pty
import shlex
import signal
import subprocess
import sys
import time
import xml.etree.ElementTree as ET
from pathlib import Path

import pytest
from command import PROGRAM

from protobench.suite.run import list_cases
from protobench.wire import Frame, load_codec

FIRMWARE = Path(__file__).parents[2] / "emulator" / "firmware" / "build" / "module-stdio"
RECORDER = """
import subprocess, sys, threading
log, *command = sys.argv[1:]
child = subprocess.Popen(command, stdin=subprocess.PIPE, start_new_session=True)
with open(log, "ab", buffering=0) as stream:
    while data := sys.stdin.buffer.raw.read(4096):
        stream.write(data)
        child.stdin.write(data)
        child.stdin.flush()
child.stdin.close()
child.wait()
"""


def wait_for(path: Path, size: int, process: subprocess.Popen[bytes]) -> None:
    deadline = time.monotonic() + 30
    while not path.exists() or path.stat().st_size < size:
        assert process.poll() is None, process.communicate()[1].decode()
        assert time.monotonic() < deadline
        time.sleep(0.05)


def test_ctrl_c_ends_with_130_and_a_halt(tmp_path: Path) -> None:
    if not FIRMWARE.exists():
        pytest.fail(f"{FIRMWARE} is missing; build it with: make firmware")
    script, log = tmp_path / "recorder.py", tmp_path / "sent"
    script.write_text(RECORDER)
    link = "run:" + shlex.join((sys.executable, str(script), str(log), str(FIRMWARE)))
    out_folder = tmp_path / "report"
    process = subprocess.Popen(
        [*PROGRAM, "check", "--link", link, "--only", "MOT", "--out", str(out_folder)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
    )
    try:
        wait_for(log, 4000, process)
        process.send_signal(signal.SIGINT)
        out, errors = process.communicate(timeout=20)
    finally:
        process.kill()
    assert process.returncode == 130, errors.decode()
    assert out == b""
    assert "interrupted after" in errors.decode()
    assert f"partial report: {out_folder}/report.html, {out_folder}/report.json" in errors.decode()
    assert "Traceback" not in errors.decode()
    codec = load_codec()
    units = codec.split_part(b"\0" + log.read_bytes())
    last = codec.frames.unpack(units[-1]) if isinstance(units[-1], bytes) else units[-1]
    assert isinstance(last, Frame)
    assert codec.kinds_by_code[last.kind].name == "halt"
    assert "The run was stopped (interrupted)." in (out_folder / "report.html").read_text()
    report = json.loads((out_folder / "report.json").read_text())
    assert report["stopped"] == "interrupted"
    judged = [case["id"] for case in report["cases"]]
    assert judged == [info.id for info in list_cases("required", "MOT")][: len(judged)]
    suite = ET.parse(out_folder / "junit.xml").getroot().find("testsuite")
    assert suite is not None
    assert [case.attrib["name"] for case in suite.iter("testcase")] == judged
    assert suite.find("properties/property[@name='stopped']").attrib["value"] == "interrupted"  # type: ignore[union-attr]


def on_terminal(*arguments: str) -> tuple[int, bytes]:
    """Run with standard error on a terminal; returns the status and what the terminal got."""
    ours, theirs = pty.openpty()
    process = subprocess.Popen(
        [*PROGRAM, *arguments],
        stdout=subprocess.DEVNULL,
        stderr=theirs,
        env={**os.environ, "TERM": "xterm", "COLUMNS": "100"},
    )
    os.close(theirs)
    seen = b""
    try:
        while data := os.read(ours, 65_536):
            seen += data
    except OSError:
        pass  # what Linux says when the other side is closed
    finally:
        os.close(ours)
    return process.wait(timeout=20), seen


def test_progress_on_a_terminal_has_count_and_case() -> None:
    status, seen = on_terminal("check", "--only", "MOT")
    assert status == 0
    assert b"\x1b[" in seen
    assert b"MOT." in seen
    assert f"/{len(list_cases('required', 'MOT'))}".encode() in seen


def test_no_progress_bar_elsewhere() -> None:
    done = subprocess.run([*PROGRAM, "check", "--only", "VER"], capture_output=True, timeout=60, check=False)
    assert done.returncode == 0
    assert b"\x1b" not in done.stdout + done.stderr
    assert done.stderr.decode().strip() == "4 cases"


def test_a_closed_pipe_is_no_traceback() -> None:
    done = subprocess.run(
        ["bash", "-c", f"{shlex.join(PROGRAM)} contract show | head -1"],
        capture_output=True,
        timeout=60,
        check=False,
    )
    assert done.stdout.startswith(b"# Module Command Link")
    assert b"Traceback" not in done.stderr
