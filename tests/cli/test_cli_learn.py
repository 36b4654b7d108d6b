"""``protobench learn`` as it is used: machines, differences, scripts, alphabets, wrong use, interruption."""

from __future__ import annotations

import json
import shlex
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from command import MODULE, PROGRAM, ROOT, invoke, lockstep, words

from protobench.cli import learning
from protobench.wire import Frame, load_codec

VARIANTS = ROOT / "emulator" / "firmware" / "build-variants" / "module-lockstep"
BROKEN = f"lockstep:{VARIANTS} --variant energize-while-halted"


@pytest.fixture
def alphabet(tmp_path: Path) -> Path:
    """A few inputs of the command states."""
    file = tmp_path / "few.toml"
    file.write_text('inputs = ["halt", "A.take", "A.reset", "A.energize", "A.status"]\n')
    return file


def test_a_sound_module_is_learned_and_drawn(alphabet, tmp_path):
    out = tmp_path / "new" / "folder"
    result = invoke("learn", "--alphabet", str(alphabet), "--out", str(out))
    assert result.exit_code == 0, result.output
    assert "equivalent to the contract's machine, if the module has at most 4 states\n" in result.stdout
    assert "4 states learned, the contract has 4; 5 inputs" in result.stdout
    assert (out / "learned.dot").read_text().startswith('digraph "learned" {')
    assert (out / "contract.dot").read_text().startswith('digraph "contract" {')
    assert "</svg>" in (out / "learned.svg").read_text()
    assert not (out / "difference.py").exists()
    report = json.loads((out / "learned.json").read_text())
    assert (report["verdict"], report["complete"], report["difference"]) == ("same", True, [])
    assert (report["learned_states"], report["states_max"], report["queries_max"]) == (4, 4, 60_000)


def test_a_difference_is_shown_step_by_step_and_replayed(alphabet, tmp_path):
    arguments = ("learn", "--alphabet", str(alphabet), "--link", BROKEN, "--out", str(tmp_path))
    result = invoke(*arguments)
    assert result.exit_code == 1
    assert "the module differs from the contract\n" in result.stdout
    steps = result.stdout[result.stdout.index("  1. ") :]
    assert steps.startswith(
        "  1. A.take\n     both: accepted\n  2. A.energize\n"
        "     contract: refused halted\n     module:   accepted\n"
    )
    replayed = subprocess.run(
        [sys.executable, tmp_path / "difference.py"], capture_output=True, text=True, check=False, timeout=60
    )
    assert replayed.returncode == 1, replayed.stderr
    assert (
        replayed.stdout == "A.take: accepted\nA.energize: accepted\n    the contract says: refused halted\n"
    )
    again = invoke(*arguments[:3], "--out", str(tmp_path))  # a sound module now: the script is gone
    assert again.exit_code == 0
    assert not (tmp_path / "difference.py").exists()
    report = json.loads(invoke(*arguments, "--json").stdout)
    assert [step["input"] for step in report["difference"]] == ["A.take", "A.energize"]
    assert report["clause"] == "STA-01"


def test_a_spent_budget_decides_nothing(alphabet):
    result = invoke("learn", "--alphabet", str(alphabet), "--queries", "6")
    assert result.exit_code == 3
    assert "could not be decided\n" in result.stdout
    assert "the budget of queries is spent" in result.stdout


def test_without_graphviz_it_says_so(alphabet, tmp_path, monkeypatch):
    monkeypatch.setattr(learning.shutil, "which", lambda _: None)
    result = invoke("learn", "--alphabet", str(alphabet), "--out", str(tmp_path))
    assert result.exit_code == 0
    assert "no learned.svg: Graphviz' program dot is not there" in result.stdout
    assert (tmp_path / "learned.dot").exists()


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ('inputs = ["halt", "jump"]', "inputs: input 'jump': one of halt, lease-end, "),
        ('inputs = ["halt", 3]', "inputs: 3: an input is a text"),
        ('inputs = ["halt", "halt"]', "inputs: 'halt': is named twice"),
        ("inputs = []", "inputs = []: one list of inputs and nothing else is wanted"),
        ('inputs = ["halt"]\nmore = 1', "one list of inputs and nothing else is wanted"),
        ("inputs = [", "few.toml: "),
    ],
)
def test_an_alphabet_that_cannot_be_used_is_refused_by_name(alphabet, text, message):
    alphabet.write_text(text)
    result = invoke("learn", "--alphabet", str(alphabet))
    assert result.exit_code == 2
    assert "few.toml" in words(result.output)
    assert message in words(result.output)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["--alphabet", "no-such-file.toml"], "no-such-file.toml"),
        (["--link", "serial:/dev/null"], "Give --attended"),
        (["--link", lockstep("physical")], "describes itself as physical"),
        (["--link", "warp://x"], "warp"),
    ],
)
def test_wrong_use_is_refused_with_2(arguments, message):
    result = invoke("learn", *arguments)
    assert result.exit_code == 2, result.output
    assert message in words(result.output)


def test_no_module_is_the_benchs_failure():
    result = invoke("learn", "--link", "lockstep:./no-such-program")
    assert result.exit_code == 4
    assert "no-such-program" in words(result.output)


def test_in_real_time_the_inputs_are_few_and_the_words_careful():
    program = ROOT / "emulator" / "firmware" / "build" / "module-stdio"
    result = invoke("learn", "--link", f"run:{program}", "--queries", "2")
    assert result.exit_code in (0, 1, 3), result.output
    assert "equivalent" not in result.stdout
    assert f"; {len(learning.REAL_INPUTS)} inputs; 2 queries" in result.stdout


def test_ctrl_c_ends_with_130_and_the_module_is_sent_a_halt(tmp_path):
    log = tmp_path / "log"
    link = "lockstep:" + shlex.join((sys.executable, str(MODULE), "sound", str(log)))
    process = subprocess.Popen([*PROGRAM, "learn", "--link", link], stdout=-1, stderr=-1)
    try:
        deadline = time.monotonic() + 60
        while not (log.exists() and log.stat().st_size > 50_000):
            assert process.poll() is None, process.communicate()[1].decode()
            assert time.monotonic() < deadline
            time.sleep(0.05)
        process.send_signal(signal.SIGINT)
        out, errors = process.communicate(timeout=30)
    finally:
        process.kill()
        process.wait()
    assert process.returncode == 130, errors.decode()
    assert "interrupted; the module has been sent a halt" in errors.decode()
    assert "Traceback" not in errors.decode()
    assert out == b""
    assert last_kind(log) == load_codec().kind("halt").code


def last_kind(log: Path) -> int:
    """The kind of the last sound frame that the module was sent."""
    codec = load_codec()
    decoder = codec.stream_decoder()
    units = [
        unit for line in log.read_text().splitlines()[-20:] for unit in decoder.feed(bytes.fromhex(line), 0)
    ]
    frames = [codec.frames.unpack(unit) for unit in units if isinstance(unit, bytes)]
    return [frame.kind for frame in frames if isinstance(frame, Frame)][-1]
