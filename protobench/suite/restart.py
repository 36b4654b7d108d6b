"""Restarting a module from outside, by the means that its conformance statement names."""

from __future__ import annotations

import shlex
import subprocess

from protobench.links import Link, LinkError
from protobench.suite.statement import Restart, Statement

COMMAND_LIMIT_S = 60
PULSE_MS = 100
SAID_BYTES = 400


class RestartFailed(Exception):  # noqa: N818 - says what has failed
    """The means could not be used. That is the bench's failure, and says nothing about the module."""


class NoRestart(Exception):  # noqa: N818 - says what is missing
    """A restart was allowed, and the statement names no means of it that can be used. The message says so."""


class OutsideRestart:
    """Restarts the module behind a link when called. ``takes_ms``: how much later than that it may begin to start."""

    def __init__(self, means: Restart, link: Link) -> None:
        self._means = means
        self._link = link
        self.takes_ms = means.takes_ms or 0

    def __call__(self) -> None:
        """Use the means once. Raises RestartFailed."""
        if self._means.command is not None:
            _run(self._means.command)
        elif self._means.line is not None:
            try:
                self._link.pulse(self._means.line, PULSE_MS)
            except LinkError as error:
                raise RestartFailed(f"the line {self._means.line} cannot be pulsed: {error}") from None


def outside_restart(statement: Statement | None, link: Link) -> OutsideRestart | None:
    """The means that a statement names, where the bench can use it over this link; None where it cannot.

    An operator is asked for nothing, and what happens by the wall clock has no place in virtual time.
    """
    means = statement.testing.restart if statement is not None and statement.testing is not None else None
    if means is None or means.operator is not None or link.virtual or (means.line and not link.has_lines):
        return None
    return OutsideRestart(means, link)


def _run(command: str) -> None:
    try:
        done = subprocess.run(  # noqa: S603 - the caller has allowed the statement's command
            shlex.split(command),
            stdin=subprocess.DEVNULL,
            stdout=subprocess.DEVNULL,
            stderr=subprocess.PIPE,
            timeout=COMMAND_LIMIT_S,
            check=False,
        )
    except subprocess.TimeoutExpired:
        raise RestartFailed(f"{command!r} did not end within {COMMAND_LIMIT_S} s") from None
    except OSError as error:
        raise RestartFailed(f"{command!r} cannot be run: {error.strerror}") from None
    if done.returncode:
        said = done.stderr[-SAID_BYTES:].decode("utf-8", "replace").strip()
        raise RestartFailed(
            f"{command!r} ended with status {done.returncode}" + (f": {said}" if said else "")
        )
