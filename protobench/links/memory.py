"""Virtual time: a link to a module that is a plain object, or behaves like one."""

from __future__ import annotations

from typing import Protocol

from protobench.links.base import DEFAULT_LIMITS, Chunk, Framing, Limits, Link, VirtualClock
from protobench.links.errors import PeerFault

ROUNDS_LIMIT = 10_000  # deadlines a peer may have at one instant, before it is taken to be stuck


class Peer(Protocol):
    """A module that does no input or output and reads no clock. Times are in us and never go back."""

    def feed(self, now_us: int, data: bytes) -> None:
        """Bytes arrived at ``now_us``. The peer's earlier deadlines come first, equal ones as it sees fit."""

    def advance(self, now_us: int) -> None:
        """Do all that is due at ``now_us`` or before."""

    def next_deadline_us(self) -> int | None:
        """When ``advance`` is wanted next, or None."""

    def take_output(self) -> list[bytes]:
        """The stream bytes written since the last call."""


class MemoryLink(Link):
    """A byte stream to a ``Peer``. Time passes only in ``receive``, by jumps to the peer's deadlines."""

    def __init__(
        self,
        peer: Peer,
        clock: VirtualClock | None = None,
        *,
        name: str = "memory:",
        limits: Limits = DEFAULT_LIMITS,
    ) -> None:
        self._virtual_clock = clock or VirtualClock()
        super().__init__(name, Framing.STREAM, self._virtual_clock, loopback=True, limits=limits)
        self._peer = peer
        self._told_us = self._virtual_clock.now_ns() // 1000
        self._rounds = 0
        self._stamp_ns = 0
        self._collect(self._virtual_clock.now_ns())

    def send(self, *units: bytes) -> int:
        self._check_open()
        now_ns = self._virtual_clock.now_ns()
        now_us = now_ns // 1000
        # A clock shared with another link may have passed deadlines of this peer: they come first.
        while self._step((now_us - 1) * 1000):
            pass
        data = b"".join(units)
        if data:
            self._told_us = max(self._told_us, now_us)
            self._peer.feed(now_us, data)
            self._collect(now_ns)
        return now_ns

    def receive(self, deadline_ns: int) -> Chunk | None:
        self._check_open()
        while True:
            chunk = self._inbox.pop()
            if chunk is not None:
                return chunk
            if not self._step(deadline_ns):
                self._virtual_clock.jump_to(deadline_ns)
                return None

    def _step(self, limit_ns: int) -> bool:
        """Jump to the peer's next deadline and let it act, unless that is after ``limit_ns``: then False."""
        due_us = self._peer.next_deadline_us()
        if due_us is None or due_us * 1000 > limit_ns:
            return False
        self._rounds = self._rounds + 1 if due_us <= self._told_us else 0
        if self._rounds > ROUNDS_LIMIT:
            raise PeerFault(
                f"{self.name}: let the module act at {self._told_us} us",
                f"its next deadline was not later ({due_us} us) {ROUNDS_LIMIT} times in a row",
                "a deadline that has been dealt with must be moved on or withdrawn",
            )
        self._told_us = max(self._told_us, due_us)
        self._virtual_clock.jump_to(due_us * 1000)
        self._peer.advance(self._told_us)
        self._collect(self._told_us * 1000)
        return True

    def _collect(self, time_ns: int) -> None:
        # Deadlines are whole microseconds; a send may lie between two, and stamps must not go back.
        self._stamp_ns = max(self._stamp_ns, time_ns)
        for data in self._peer.take_output():
            self._inbox.put(Chunk(self._stamp_ns, data))

    def _close(self) -> None:
        """Nothing to give up: the peer belongs to the caller."""
