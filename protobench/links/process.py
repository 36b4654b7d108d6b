"""A child process in real time, on its standard input and output."""

from __future__ import annotations

import select

from protobench.links.base import DEFAULT_LIMITS, Framing, Limits
from protobench.links.child import ChildProcess
from protobench.links.errors import LinkError
from protobench.links.realtime import DescriptorLink


class ProcessLink(DescriptorLink):
    """A byte stream to a program that this link starts, and ends when it is closed."""

    def __init__(self, name: str, argv: list[str], *, limits: Limits = DEFAULT_LIMITS) -> None:
        super().__init__(name, Framing.STREAM, loopback=True, limits=limits)
        self._child = ChildProcess(name, argv)
        self._watch(self._child.stdout_fd, self._child.stdin_fd)
        self._stderr_open = True
        for poller in (self._reading, self._writing):
            poller.register(self._child.stderr_fd, select.POLLIN)

    def _pull(self) -> bool:
        # Standard error is read along, so that a talkative child never blocks on it.
        if self._stderr_open and not self._child.drain_stderr():
            self._stderr_open = False
            for poller in (self._reading, self._writing):
                poller.unregister(self._child.stderr_fd)
        return super()._pull()

    def _closed_error(self, error: OSError | None) -> LinkError:  # noqa: ARG002 - the child's end says more
        return self._child.closed_error()

    def _close(self) -> None:
        self._child.stop()
