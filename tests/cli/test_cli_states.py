"""``protobench states`` as it is used: reports, differences, replays, wrong use, interruption."""

from __future__ import annotations

import json
import shlex
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from command import MODULE, PROGRAM, invoke, lockstep, words

from protobench.wire import Frame, load_codec

WINDOW = ("states", "--machine", "window")
BROKEN = lockstep("overtaken-accepted")


def test_a_sound_module_passes_one_sequence_and_the_report_says_what_that_means(tmp_path):
    result = invoke(*WINDOW, "--only-sequence", "next,copy,skip,gap", "--out", str(tmp_path / "new"))
    assert result.exit_code == 0, result.output
    assert "pass: no difference; ran 1 sequences, 4 inputs" in result.stdout
    assert "assumed: it is deterministic" in result.stdout
    report = json.loads((tmp_path / "new" / "states.json").read_text())
    (part,) = report["machines"]
    assert (part["machine"], part["method"], part["n"], part["m"]) == ("window", "HSI", 44, 45)
    assert (part["verdict"], part["difference"], part["sequences_run"]) == ("pass", None, 1)
    assert report["environment"]["time"] == "virtual"
    assert report["seed"] == 1


def test_a_difference_is_shown_and_replayed():
    result = invoke(*WINDOW, "--link", BROKEN, "--extra", "0")
    assert result.exit_code == 1
    assert "fail: the module differs (SEQ-05)" in result.stdout
    assert "access word: skip\n" in result.stdout
    assert "input: gap\n" in result.stdout
    assert "expected: refused late-unseen\n" in result.stdout
    assert "got: accepted\n" in result.stdout
    assert "SEQ-05 says: A number not newer" in result.stdout
    assert "take-lease #" in result.stdout
    (again,) = [line for line in result.stdout.splitlines() if line.startswith("  again: protobench ")]
    replay = shlex.split(again.removeprefix("  again: protobench "))
    assert replay[-2:] == ["--only-sequence", "skip,gap"]
    replayed = invoke(*replay, "--json")
    assert replayed.exit_code == 1
    told = json.loads(replayed.stdout)["machines"][0]["difference"]
    assert (told["access"], told["input"], told["got"]) == (["skip"], "gap", "accepted")


def test_a_dry_run_says_how_much_and_how_long_and_judges_nothing(tmp_path):
    result = invoke(*WINDOW, "--dry-run", "--json", "--method", "W", "--extra", "0", "--out", str(tmp_path))
    assert result.exit_code == 0
    (part,) = json.loads(result.stdout)["machines"]
    assert (part["sequences"], part["inputs"], part["extra"]) == (3305, 16650, 0)
    assert part["estimate_s"] > 0
    assert "verdict" not in part
    assert list(tmp_path.iterdir()) == []
    assert "may take" in invoke(*WINDOW, "--dry-run", "--extra", "0").stdout


def test_a_spent_budget_is_inconclusive():
    result = invoke(*WINDOW, "--budget", "0.3", "--seed", "4", "--json")
    assert result.exit_code == 3
    (part,) = json.loads(result.stdout)["machines"]
    assert part["verdict"] == "inconc"
    assert 0 < part["sequences_run"] < part["sequences"]


def test_two_processes_find_what_one_finds():
    result = invoke(*WINDOW, "--link", BROKEN, "--extra", "0", "--jobs", "2", "--json")
    assert result.exit_code == 1
    told = json.loads(result.stdout)["machines"][0]["difference"]
    assert told["clause"] == "SEQ-05"
    assert told["transcript"]


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["--machine", "tape"], "'tape': one of "),
        (["--method", "UIO"], "'UIO': one of W, Wp, HSI"),
        (["--machine", "both", "--only-sequence", "next"], "give --machine with it"),
        (["--only-sequence", "next,jump"], "input 'jump': the window machine has next, skip"),
        (
            ["--link", "tcp://127.0.0.1:9", "--jobs", "2"],
            "2 processes need a link that starts a module for each",
        ),
        (["--link", "serial:/dev/null"], "Give --attended"),
        (["--link", lockstep("physical")], "describes itself as physical"),
        (["--link", "warp://x"], "warp"),
    ],
)
def test_wrong_use_is_refused_with_2(arguments, message):
    result = invoke(*WINDOW, *arguments)
    assert result.exit_code == 2, result.output
    assert message in words(result.output)


def test_no_module_is_the_benchs_failure():
    result = invoke(*WINDOW, "--link", "lockstep:./no-such-program")
    assert result.exit_code == 4
    assert "no-such-program" in words(result.output)


@pytest.mark.parametrize("jobs", ["1", "2"])
def test_ctrl_c_ends_with_130_and_every_module_is_sent_a_halt(tmp_path, jobs):
    module = shlex.join((sys.executable, str(MODULE), "sound"))
    link = "lockstep:" + shlex.join(("sh", "-c", f"exec {module} {shlex.quote(str(tmp_path))}/$$"))
    process = subprocess.Popen(
        [*PROGRAM, *WINDOW, "--link", link, "--jobs", jobs],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
    )
    try:
        deadline = time.monotonic() + 60
        while len(driven(tmp_path)) < int(jobs):
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
    assert b"verdict" not in out
    logs = driven(tmp_path)
    assert [last_kinds(log)[-1] for log in logs] == [load_codec().kind("halt").code] * int(jobs)


def driven(folder: Path) -> list[Path]:
    """Logs of the modules that were run against; the one that was only asked what it is has a short one."""
    return [log for log in folder.iterdir() if log.stat().st_size > 50_000]


def last_kinds(log: Path) -> list[int]:
    """Kinds of the last frames in a log of stuffed records."""
    codec = load_codec()
    decoder = codec.stream_decoder()
    units = [
        unit for line in log.read_text().splitlines()[-20:] for unit in decoder.feed(bytes.fromhex(line), 0)
    ]
    frames = [codec.frames.unpack(unit) for unit in units if isinstance(unit, bytes)]
    return [frame.kind for frame in frames if isinstance(frame, Frame)]
