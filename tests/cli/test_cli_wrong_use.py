"""Wrong use of ``check`` ends with status 2 and names the value and the rule; hardware is left alone unattended."""

from __future__ import annotations

import os
import pty
import select
from pathlib import Path

import pytest
from command import invoke, lockstep, run, words

from protobench.wire import Frame, load_codec

USES = [
    (["--level", "some"], "'some': one of required, recommended"),
    (["--only", "FRM and ("], "expression 'FRM and (': a word is missing after FRM and ("),
    (["--only", "FRM$"], "'$' at place 4 has no meaning"),
    (["--only", "(FRM"], "a closing parenthesis is missing"),
    (["--only", "FRM BDY"], "'BDY' is not expected there"),
    (["--only", "nothing-like-it"], "'nothing-like-it' selects no case; see --list"),
    (["--only", ""], "a word is missing after the start"),
    (["--address", "0"], "--address"),
    (["--address", "4294967295"], "--address"),
    (["--seed", "x"], "--seed"),
    (["--ics", "/no/such/file"], "'/no/such/file' does not exist"),
    (["--link", "carrier-pigeon"], "link address 'carrier-pigeon'"),
    (["--link", "tcp://127.0.0.1:99999"], "port '99999'"),
    (["--link", "tcp://127.0.0.1"], "must be HOST:PORT"),
    (["--link", "run:"], "must name a program to run"),
    (["--link", "run:'open"], "must be a command as in a shell"),
    (["--link", ""], "link address ''"),
    (["--no-such-option"], "--no-such-option"),
    (["surplus"], "surplus"),
]


@pytest.mark.parametrize(("arguments", "message"), USES, ids=lambda value: str(value)[:40])
def test_wrong_use(arguments: list[str], message: str) -> None:
    done = invoke("check", *arguments)
    assert done.exit_code == 2, done.stderr
    assert message in words(done.stderr)
    assert done.stdout == ""
    assert "Traceback" not in done.stderr


@pytest.mark.parametrize("link", ["run:cat", "tcp://127.0.0.1:1", "zmq+ipc:///tmp/nobody"])
def test_virtual_time_over_a_real_link_is_refused_with_the_reason(link: str) -> None:
    done = invoke("check", "--virtual", "--link", link)
    assert done.exit_code == 2
    assert link in done.stderr
    assert "runs by a clock that the bench cannot stop" in words(done.stderr)


def test_virtual_time_where_there_is_one() -> None:
    assert invoke("check", "--virtual", "--only", "VER").exit_code == 0


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (
            'capabilities = ["flight"]',
            "capabilities[0]: 'flight' is no capability of the contract; known: queue",
        ),
        ("speed = 3", "speed: unknown key; known: contract"),
        ("motions = 7", "motions: must be a list; found 7"),
        ("= =", "line 1"),
        ("\udcff", "decode"),
    ],
)
def test_a_statement_that_cannot_be_used(tmp_path: Path, text: str, message: str) -> None:
    path = tmp_path / "ics.toml"
    path.write_bytes(text.encode("utf-8", "surrogateescape"))
    done = invoke("check", "--ics", str(path))
    assert done.exit_code == 2
    assert message in words(done.stderr)
    assert str(path) in done.stderr


def test_a_folder_that_cannot_be_made(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    done = invoke("check", "--out", str(tmp_path / "file" / "below"), "--only", "VER")
    assert done.exit_code == 2
    assert "--out" in done.stderr


def test_a_log_level_that_is_none() -> None:
    done = invoke("--log-level", "loud", "check")
    assert done.exit_code == 2
    assert "'loud': one of debug, info, warning, error" in words(done.stderr)


@pytest.mark.parametrize("link", ["tcp://192.0.2.1:9", "udp://192.0.2.1:9", "zmq+tcp://nobody.invalid:9"])
def test_attendance_is_asked_before_another_host_is_looked_for(link: str) -> None:
    """192.0.2.0/24 and .invalid are nobody's (RFC 5737, RFC 6761)."""
    done = invoke("check", "--link", link)
    assert done.exit_code == 2, done.stderr
    message = words(done.stderr)
    assert f"{link} is a serial device or another host" in message
    assert "Nothing was sent. Give --attended" in message


def test_nothing_is_sent_to_a_serial_device_unattended() -> None:
    ours, theirs = pty.openpty()
    try:
        done = run("check", "--link", f"serial:{os.ttyname(theirs)}")
        assert done.returncode == 2
        message = words(done.stderr.decode())
        assert "is a serial device" in message
        assert "Nothing was sent. Give --attended" in message
        assert select.select([ours], [], [], 0)[0] == []
    finally:
        os.close(ours)
        os.close(theirs)


def test_a_physical_module_is_only_read_unattended(tmp_path: Path) -> None:
    log = tmp_path / "in.txt"
    done = run("check", "--link", lockstep("physical", log))
    assert done.returncode == 2, done.stderr.decode()
    message = words(done.stderr.decode())
    assert "describes itself as physical. Nothing that can move it was sent. Give --attended" in message
    sent = kinds_in(log)
    assert "describe" in sent
    codec = load_codec()
    assert {codec.contract.kind(name).class_ for name in sent} == {"read"}


def test_a_physical_module_is_judged_attended_after_the_cautions(tmp_path: Path) -> None:
    log = tmp_path / "in.txt"
    done = run("check", "--attended", "--link", lockstep("physical", log), "--only", "HLT.at-rest or VER")
    assert done.returncode == 0, done.stdout.decode()
    message = words(done.stderr.decode())
    assert message.index("CAUTION") < message.index("cases")
    for caution in ("lithium cells may vent", "not an emergency stop in the sense of ISO 13850", "power cut"):
        assert caution in message
    assert "halt" in kinds_in(log)


def kinds_in(log: Path) -> set[str]:
    """The kinds of the sound frames that a ``lockstep_module`` took."""
    codec = load_codec()
    found = set()
    for unit in codec.split_part(b"\0" + b"".join(bytes.fromhex(line) for line in log.read_text().split())):
        frame = codec.frames.unpack(unit) if isinstance(unit, bytes) else unit
        if isinstance(frame, Frame) and frame.kind in codec.kinds_by_code:
            found.add(codec.kinds_by_code[frame.kind].name)
    return found
