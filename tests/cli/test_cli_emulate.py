"""``protobench emulate`` refuses what it cannot serve; serving is tested with the suite."""

from __future__ import annotations

import subprocess
import sys


def test_emulate_refuses_what_it_cannot_bind() -> None:
    for bind, words in (
        ("tcp://127.0.0.1:1", "zmq+tcp://"),
        ("zmq+tcp://192.0.2.1:5570", "cannot be served"),
        ("zmq+tcp://127.0.0.1:99999", "port"),
    ):
        command = [sys.executable, "-m", "protobench.cli", "emulate", "--bind", bind]
        done = subprocess.run(command, capture_output=True, text=True, timeout=30, check=False)
        assert done.returncode == 2
        assert words in done.stderr
