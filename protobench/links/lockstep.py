"""A child process in virtual time: it is told the time with every record, and answers each at once.

Records on its standard input, big-endian, one after another:

    u8 op (1 feed, 2 advance), u64 time in us, u16 length, that many bytes (none for advance)

and for each record exactly one reply on its standard output:

    u32 length of output, that many bytes of output, u64 next deadline in us (all ones: none)

``lockstep.md``, beside this file, says it in full for those who write such a child.
"""

from __future__ import annotations

import contextlib
import os
import select
import struct
import sys
import time
from typing import NoReturn

from protobench.links.base import DEFAULT_LIMITS, Limits, VirtualClock
from protobench.links.child import ChildProcess
from protobench.links.errors import LinkError, PeerFault
from protobench.links.memory import MemoryLink

FEED, ADVANCE = 1, 2
NO_DEADLINE = (1 << 64) - 1
OUTPUT_LIMIT_BYTES = 1 << 20

_RECORD = struct.Struct(">BQH")
_LENGTH = struct.Struct(">I")
_DEADLINE = struct.Struct(">Q")
_FEED_LIMIT_BYTES = 0xFFFF
_READ_BYTES = 1 << 16


class _OneCpu:
    """Within it, the calling thread runs on the one CPU that the child is kept to.

    The two alternate strictly, and handing over on one CPU is several times faster than waking another. After
    each record the thread has its CPUs back, so that nothing else in the process is bound. Does nothing where
    the system has no such thing, or refuses it.
    """

    def __init__(self, pid: int) -> None:
        self._shared: set[int] = set()
        if sys.platform == "linux":
            with contextlib.suppress(OSError):
                self._before = os.sched_getaffinity(0)
                shared = {sorted(self._before)[pid % len(self._before)]}
                os.sched_setaffinity(pid, shared)
                self._shared = shared

    def __enter__(self) -> None:
        if sys.platform == "linux" and self._shared:
            os.sched_setaffinity(0, self._shared)

    def __exit__(self, *_: object) -> None:
        if sys.platform == "linux" and self._shared:
            os.sched_setaffinity(0, self._before)


class LockstepPeer:
    """A ``Peer`` that is a child process. Its first record is an advance to ``start_us``, its power-up.

    Raises PeerClosed when the child ends, PeerFault when it is silent or breaks a rule of replies; it is then
    ended, and each later call raises the same again.
    """

    def __init__(self, name: str, argv: list[str], start_us: int, answer_limit_s: float) -> None:
        self._name = name
        self._answer_limit_s = answer_limit_s
        self._output: list[bytes] = []
        self._deadline_us: int | None = None
        self._broken: LinkError | None = None
        self._child = ChildProcess(name, argv)
        self._reading = select.poll()
        self._reading.register(self._child.stdout_fd, select.POLLIN)
        self._reading.register(self._child.stderr_fd, select.POLLIN)
        self._stderr_open = True
        self._one_cpu = _OneCpu(self._child.pid)
        try:
            self.advance(start_us)
        except BaseException:
            self.stop()
            raise

    def feed(self, now_us: int, data: bytes) -> None:
        for start in range(0, len(data), _FEED_LIMIT_BYTES):
            self._exchange(FEED, now_us, data[start : start + _FEED_LIMIT_BYTES])

    def advance(self, now_us: int) -> None:
        self._exchange(ADVANCE, now_us, b"")

    def next_deadline_us(self) -> int | None:
        return self._deadline_us

    def take_output(self) -> list[bytes]:
        output, self._output = self._output, []
        return output

    def stop(self) -> None:
        self._child.stop()

    def _exchange(self, op: int, now_us: int, data: bytes) -> None:
        if self._broken is not None:
            raise self._broken.with_traceback(None)
        give_up = time.monotonic() + self._answer_limit_s
        try:
            with self._one_cpu:
                self._write(_RECORD.pack(op, now_us, len(data)) + data, give_up)
                output, deadline_us = self._read_reply(give_up)
            if deadline_us < now_us:
                self._fault(f"its reply names the deadline {deadline_us} us, which is in the past")
        except LinkError as error:
            what = f"feed of {len(data)} bytes" if op == FEED else "advance"
            error.asked = f"{self._name}: {what} at {now_us} us"
            self._broken = error
            self._child.kill()
            raise
        if output:
            self._output.append(output)
        self._deadline_us = None if deadline_us == NO_DEADLINE else deadline_us

    def _write(self, record: bytes, give_up: float) -> None:
        while True:
            try:
                record = record[os.write(self._child.stdin_fd, record) :]
            except BlockingIOError:
                pass
            except OSError as error:
                raise self._child.closed_error() from error
            if not record:
                return
            self._drain_stderr()
            writing = select.poll()
            writing.register(self._child.stdin_fd, select.POLLOUT)
            writing.poll(20)  # wakes now and then for standard error, which a child may be blocked on
            if time.monotonic() > give_up:
                self._silent("did not read the record")

    def _read_reply(self, give_up: float) -> tuple[bytes, int]:
        reply = self._read_some(give_up)
        while len(reply) < _LENGTH.size:
            reply += self._read_some(give_up)
        (length,) = _LENGTH.unpack_from(reply)
        if length > OUTPUT_LIMIT_BYTES:
            self._fault(f"its reply claims {length} bytes of output (the limit is {OUTPUT_LIMIT_BYTES})")
        end = _LENGTH.size + length
        while len(reply) < end + _DEADLINE.size:
            reply += self._read_some(give_up)
        if len(reply) > end + _DEADLINE.size:
            self._fault(f"its reply is followed by {len(reply) - end - _DEADLINE.size} bytes too many")
        return bytes(reply[_LENGTH.size : end]), _DEADLINE.unpack_from(reply, end)[0]

    def _read_some(self, give_up: float) -> bytearray:
        while True:
            remaining_s = give_up - time.monotonic()
            if remaining_s <= 0:
                self._silent("did not answer the record")
            for fd, _ in self._reading.poll(remaining_s * 1000 + 1):
                if fd == self._child.stderr_fd:
                    self._drain_stderr()
                    continue
                data = os.read(fd, _READ_BYTES)
                if not data:
                    raise self._child.closed_error()
                return bytearray(data)

    def _drain_stderr(self) -> None:
        if self._stderr_open and not self._child.drain_stderr():
            self._stderr_open = False
            self._reading.unregister(self._child.stderr_fd)

    def _silent(self, found: str) -> NoReturn:
        lines = "".join(f"\n    {line}" for line in self._child.stderr_lines())
        raise PeerFault(
            self._name,
            f"the program {found} within {self._answer_limit_s} s, and was ended",
            "each record needs exactly one reply, flushed at once" + lines,
        )

    def _fault(self, found: str) -> NoReturn:
        raise PeerFault(
            self._name,
            found,
            "write only replies to standard output and text to standard error, as lockstep.md lays down",
        )


class LockstepLink(MemoryLink):
    """A byte stream in virtual time to a child process that speaks the lockstep records."""

    def __init__(
        self,
        name: str,
        argv: list[str],
        clock: VirtualClock | None = None,
        *,
        limits: Limits = DEFAULT_LIMITS,
    ) -> None:
        clock = clock or VirtualClock()
        self._lockstep_peer = LockstepPeer(name, argv, clock.now_ns() // 1000, limits.answer_s)
        super().__init__(self._lockstep_peer, clock, name=name, limits=limits)

    def _close(self) -> None:
        self._lockstep_peer.stop()
