"""``protobench decode``, ``contract`` and ``emulate``."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import pytest
from typer.testing import CliRunner

from protobench.cli import app
from protobench.contract import load_contract
from protobench.wire import load_codec, stuff

RUNNER = CliRunner()
CODEC = load_codec()
FRAME = CODEC.new("time-exchange", t1=77).to_frame(0x10001, 1, 5, 6)


def test_decode_a_bare_frame() -> None:
    done = RUNNER.invoke(app, ["decode", FRAME.hex(" ")])
    assert done.exit_code == 0
    assert "time-exchange" in done.output
    assert "77" in done.output
    assert "us" in done.output


def test_decode_a_stream_from_a_file(tmp_path: Path) -> None:
    path = tmp_path / "stream.bin"
    path.write_bytes(b"\0" + stuff(FRAME) + b"\0" + stuff(FRAME) + b"\0")
    done = RUNNER.invoke(app, ["decode", str(path), "--json"])
    assert done.exit_code == 0
    assert [frame["kind"] for frame in json.loads(done.output)] == ["time-exchange", "time-exchange"]


def test_decode_says_why_a_frame_is_dropped() -> None:
    done = RUNNER.invoke(app, ["decode", (FRAME[:-1] + b"\x00").hex()])
    assert done.exit_code == 1
    assert "dropped: crc" in done.output


def test_decode_reads_standard_input() -> None:
    done = RUNNER.invoke(app, ["decode", "-"], input=FRAME.hex())
    assert done.exit_code == 0
    assert "time-exchange" in done.output


def test_decode_says_what_a_module_would_refuse() -> None:
    frame = CODEC.frames.pack(0x07, b"\x81\x00\xc3", source=1, destination=2, session=3, number=4)
    done = RUNNER.invoke(app, ["decode", frame.hex()])
    assert done.exit_code == 1
    assert "a module refuses this" in done.output


def test_decode_of_nothing_readable() -> None:
    done = RUNNER.invoke(app, ["decode", "no hex, no file"])
    assert done.exit_code == 2


@pytest.mark.parametrize(
    ("name", "words"),
    [
        ("SEQ-03", "cases: SEQ.copies"),
        ("SEQ.copies", "clauses: SEQ-03"),
        ("stale-epoch", "refusal"),
        ("crc", "drop"),
        ("winding-hot", "fault"),
        ("receipt_time", "limit"),
        ("move", "kind"),
    ],
)
def test_explain(name: str, words: str) -> None:
    done = RUNNER.invoke(app, ["contract", "explain", name])
    assert done.exit_code == 0
    assert words in done.output


def test_explain_the_unknown_suggests() -> None:
    done = RUNNER.invoke(app, ["contract", "explain", "stale-epoc"])
    assert done.exit_code == 1
    assert "stale-epoch" in done.output


def test_contract_commands() -> None:
    assert "no findings" in RUNNER.invoke(app, ["contract", "lint"]).output
    assert RUNNER.invoke(app, ["contract", "header"]).output.startswith("/*")
    assert "# Module Command Link" in RUNNER.invoke(app, ["contract", "show"]).output
    assert len(RUNNER.invoke(app, ["contract", "vectors"]).output.splitlines()) >= 150
    assert RUNNER.invoke(app, ["contract", "document", "--check"]).exit_code == 0


def test_contract_diff_of_a_version_with_itself() -> None:
    folder = str(load_contract().files and Path(__file__).parents[2] / "spec" / "1.0")
    done = RUNNER.invoke(app, ["contract", "diff", folder, folder])
    assert done.exit_code == 0
    assert done.output.strip() == "compatible"


def test_emulate_refuses_what_it_cannot_bind() -> None:
    for bind, words in (
        ("tcp://127.0.0.1:1", "zmq+tcp://"),
        ("zmq+tcp://192.0.2.1:5570", "cannot be served"),
    ):
        command = [sys.executable, "-m", "protobench.cli", "emulate", "--bind", bind]
        done = subprocess.run(command, capture_output=True, text=True, timeout=30, check=False)
        assert done.returncode == 2
        assert words in done.stderr
