"""The means of restarting a module from outside: which can be used over which link, and what goes wrong with them."""

from __future__ import annotations

import os
import shlex
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from protobench.contract import load_contract
from protobench.links import Link, open_link
from protobench.suite import restart
from protobench.suite.restart import OutsideRestart, RestartFailed, outside_restart
from protobench.suite.statement import Restart, load_statement
from protobench.suite.targets import embedded_link

LINKS = {
    "memory": lambda: embedded_link(1),
    "program": lambda: open_link("run:cat"),
    "serial": lambda: open_link("serial:loop://"),
}


@pytest.fixture(params=LINKS)
def link(request: pytest.FixtureRequest) -> Iterator[Link]:
    with LINKS[request.param]() as opened:
        yield opened


def means_of(tmp_path: Path, link: Link, text: str) -> OutsideRestart | None:
    path = tmp_path / "module.toml"
    path.write_text(text)
    return outside_restart(load_statement(path, load_contract()), link)


@pytest.mark.parametrize(
    ("text", "usable"),
    [
        ("", ()),
        ("[testing]\nassist = false", ()),
        ('[testing.restart]\noperator = "Pull the plug."', ()),
        ('[testing.restart]\ncommand = "true"', ("program", "serial")),
        ('[testing.restart]\nline = "rts"', ("serial",)),
    ],
)
def test_a_means_is_used_where_it_can_be(
    tmp_path: Path, link: Link, text: str, usable: tuple[str, ...], request: pytest.FixtureRequest
) -> None:
    kind = request.node.callspec.params["link"]
    assert (means_of(tmp_path, link, text) is not None) == (kind in usable)
    assert outside_restart(None, link) is None


def test_a_line_is_pulsed_once(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    with open_link("serial:loop://") as link:
        pulses: list[tuple[str, int]] = []
        monkeypatch.setattr(link, "pulse", lambda *arguments: pulses.append(arguments))
        means = means_of(tmp_path, link, '[testing.restart]\nline = "dtr"\ntakes_ms = 700')
        assert means is not None
        means()
        assert pulses == [("dtr", restart.PULSE_MS)]
        assert means.takes_ms == 700


def test_a_line_that_is_not_there_is_the_benchs_failure() -> None:
    ours, theirs = os.openpty()
    try:
        with open_link(f"serial:{os.ttyname(theirs)}") as link:
            outside = OutsideRestart(Restart(line="rts"), link)
            with pytest.raises(RestartFailed, match="the line rts cannot be pulsed: serial:"):
                outside()
    finally:
        os.close(ours)
        os.close(theirs)


def test_a_command_runs_once_with_its_arguments_and_no_shell(tmp_path: Path) -> None:
    log = tmp_path / "log"
    code = f"import sys; open({str(log)!r}, 'a').write(repr(sys.argv[1:]))"
    with open_link("run:cat") as link:
        OutsideRestart(Restart(command=shlex.join((sys.executable, "-c", code, "$HOME", "a b"))), link)()
    assert log.read_text() == "['$HOME', 'a b']"


def test_a_command_that_does_not_end_is_ended(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(restart, "COMMAND_LIMIT_S", 0.2)
    with (
        open_link("run:cat") as link,
        pytest.raises(RestartFailed, match=r"'sleep 60' did not end within 0\.2 s"),
    ):
        OutsideRestart(Restart(command="sleep 60"), link)()


def test_what_a_command_says_is_cut() -> None:
    with open_link("run:cat") as link, pytest.raises(RestartFailed) as caught:
        OutsideRestart(Restart(command="sh -c 'yes no | head -c 100000 >&2; exit 1'"), link)()
    assert "ended with status 1: " in str(caught.value)
    assert len(str(caught.value)) < 600
