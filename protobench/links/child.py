"""A process that we started: its pipes, the tail of what it says on standard error, and how it ended."""

from __future__ import annotations

import contextlib
import os
import signal
import subprocess
import time

from protobench.links.errors import PeerClosed, from_os_error

_READ_BYTES = 1 << 16
_TAIL_BYTES = 4096
_TAIL_LINES = 10
_GRACE_S = 0.5  # from the end of its standard input until we end it ourselves


class ChildProcess:
    """Runs ``argv`` in a session of its own, with non-blocking pipes on its standard streams.

    Raises NoSuchDevice, NoPermission. ``stop()`` ends only this process and those of its session.
    """

    def __init__(self, name: str, argv: list[str]) -> None:
        self.name = name
        self._tail = b""
        try:
            self._process = subprocess.Popen(  # noqa: S603 - running what the user names is the point
                argv,
                stdin=subprocess.PIPE,
                stdout=subprocess.PIPE,
                stderr=subprocess.PIPE,
                bufsize=0,
                start_new_session=True,  # Ctrl-C reaches the bench alone, which then ends the child in order
            )
        except OSError as error:
            raise from_os_error(f"{name}: start {argv[0]!r}", error) from error
        process = self._process
        self._pipes = [pipe for pipe in (process.stdin, process.stdout, process.stderr) if pipe is not None]
        self.stdin_fd, self.stdout_fd, self.stderr_fd = (pipe.fileno() for pipe in self._pipes)
        for fd in (self.stdin_fd, self.stdout_fd, self.stderr_fd):
            os.set_blocking(fd, False)

    @property
    def pid(self) -> int:
        return self._process.pid

    def drain_stderr(self) -> bool:
        """Keep the tail of what is there, without waiting; False once the child can write no more."""
        try:
            data = os.read(self.stderr_fd, _READ_BYTES)
        except BlockingIOError:
            return True
        self._tail = (self._tail + data)[-_TAIL_BYTES:]
        return bool(data)

    def stderr_lines(self) -> tuple[str, ...]:
        """The last lines, with anything that could steer a terminal replaced."""
        lines = self._tail.decode("utf-8", "replace").splitlines()[-_TAIL_LINES:]
        return tuple("".join(c if c.isprintable() else "\ufffd" for c in line) for line in lines)

    def closed_error(self) -> PeerClosed:
        """The child has closed its standard output or input: say why. Waits a short while for it to end."""
        with contextlib.suppress(subprocess.TimeoutExpired):
            self._process.wait(_GRACE_S)
        give_up = time.monotonic() + _GRACE_S
        while self._process.returncode is not None and time.monotonic() < give_up:
            tail = self._tail
            if not self.drain_stderr() or tail is self._tail:
                break
        status = self._process.returncode
        return PeerClosed(
            self.name,
            _describe_end(status),
            "see why it ended, then start it again",
            status,
            self.stderr_lines(),
        )

    def stop(self) -> None:
        """Close its pipes, give it a moment to end by itself, then end it and its session."""
        self._pipes[0].close()
        try:
            self._process.wait(_GRACE_S)
        except subprocess.TimeoutExpired:
            self.kill()
        for pipe in self._pipes:
            pipe.close()

    def kill(self) -> None:
        """End it and its session at once."""
        if self._process.poll() is None:
            with contextlib.suppress(ProcessLookupError):
                os.killpg(self._process.pid, signal.SIGKILL)
            self._process.wait()


def _describe_end(status: int | None) -> str:
    if status is None:
        return "the program has closed its standard output but still runs"
    if status >= 0:
        return f"the program has ended with exit status {status}"
    try:
        return f"the program was ended by signal {signal.Signals(-status).name}"
    except ValueError:
        return f"the program was ended by signal {-status}"
