"""The one interface that every link has: bytes out, time-stamped bytes in, a clock.

Everything is synchronous, so that a test case runs unchanged in virtual and in real time. Virtual time passes
only in ``receive`` and ``settle``. All times are nanoseconds of the link's own clock.
"""

from __future__ import annotations

import time
from abc import ABC, abstractmethod
from collections import deque
from dataclasses import dataclass
from enum import Enum
from types import TracebackType
from typing import NamedTuple, Protocol, Self

from protobench.links.errors import LinkClosed, NoControlLine

_CHUNK_COST_BYTES = 64  # counted for each chunk on top of its length, so that empty ones are bounded too


@dataclass(frozen=True, slots=True)
class Limits:
    """What a link may hold (bytes not yet taken) and how long it may wait (seconds of real time)."""

    inbox_bytes: int = 4 << 20
    send_s: float = 5.0
    open_s: float = 5.0
    answer_s: float = 5.0  # for each record of a lockstep link


DEFAULT_LIMITS = Limits()


class Framing(Enum):
    """What a chunk is: any piece of a byte stream, one datagram, or one ZeroMQ message part."""

    STREAM = "stream"
    DATAGRAM = "datagram"
    PART = "part"


class Clock(Protocol):
    """Nanoseconds that never go back; ``virtual`` when they pass only by jumps."""

    virtual: bool

    def now_ns(self) -> int: ...


class MonotonicClock:
    """The machine's monotonic clock."""

    virtual = False

    def now_ns(self) -> int:
        return time.monotonic_ns()


class VirtualClock:
    """A clock that stands still until it is told to jump, and then only forward."""

    virtual = True

    def __init__(self, start_ns: int = 0) -> None:
        self._now_ns = start_ns

    def now_ns(self) -> int:
        return self._now_ns

    def jump_to(self, time_ns: int) -> None:
        """Go to ``time_ns``; a time that has passed leaves the clock where it is."""
        self._now_ns = max(self._now_ns, time_ns)


@dataclass(slots=True)
class Chunk:
    """Bytes that arrived, and when: in real time when the link took them from the system."""

    time_ns: int
    data: bytes


class Discarded(NamedTuple):
    """What was thrown away because a buffer was full. Datagrams lost in the kernel count no bytes."""

    chunks: int
    bytes: int


class Inbox:
    """Chunks that wait for ``receive``, in order. When it is full, what comes is discarded and counted."""

    def __init__(self, limit_bytes: int = DEFAULT_LIMITS.inbox_bytes) -> None:
        self.discarded = Discarded(0, 0)
        self._limit_bytes = limit_bytes
        self._held_bytes = 0
        self._chunks: deque[Chunk] = deque()

    def put(self, chunk: Chunk) -> None:
        cost = len(chunk.data) + _CHUNK_COST_BYTES
        if self._held_bytes + cost > self._limit_bytes:
            self.discarded = Discarded(self.discarded.chunks + 1, self.discarded.bytes + len(chunk.data))
            return
        self._held_bytes += cost
        self._chunks.append(chunk)

    def pop(self) -> Chunk | None:
        if not self._chunks:
            return None
        chunk = self._chunks.popleft()
        self._held_bytes -= len(chunk.data) + _CHUNK_COST_BYTES
        return chunk


class Link(ABC):
    """A way to one far end.

    ``name``: the address as text. ``loopback``: the far end is on this machine and is no device (memory, a
    child process, a loopback network address, a local socket file); what is not may be hardware that moves.
    ``has_lines``: this kind of link has control lines, for ``pulse``; a device may lack them all the same.
    ``byte_ns``: how long one byte takes on the line, where the line has a rate of its own; else 0.
    """

    has_lines = False
    byte_ns = 0

    def __init__(
        self, name: str, framing: Framing, clock: Clock, *, loopback: bool, limits: Limits = DEFAULT_LIMITS
    ) -> None:
        self.name = name
        self.framing = framing
        self.clock = clock
        self.loopback = loopback
        self.limits = limits
        self._inbox = Inbox(limits.inbox_bytes)
        self._closed = False

    @property
    def virtual(self) -> bool:
        """Whether time on this link is virtual."""
        return self.clock.virtual

    @property
    def discarded(self) -> Discarded:
        """What was received and thrown away since the link was opened, because the caller did not take it."""
        return self._inbox.discarded

    @abstractmethod
    def send(self, *units: bytes) -> int:
        """Hand over all units, in order, and return the time in ns at which the last byte was handed over.

        A stream joins them; a datagram link sends each as one datagram; ZeroMQ one message of them as parts.
        Raises PeerClosed, SendStalled (the far end does not take them), LinkClosed.
        """

    @abstractmethod
    def receive(self, deadline_ns: int) -> Chunk | None:
        """Wait until something arrives, or until the link's clock reaches ``deadline_ns``: then None.

        A deadline that has passed takes what is there without waiting. Raises PeerClosed once everything that
        came before the end has been taken, PeerFault, LinkClosed.
        """

    def settle(self, deadline_ns: int) -> bool:  # noqa: ARG002 - most links hold nothing back
        """Wait until nothing that was sent is held back, at most to ``deadline_ns``; whether that is so."""
        self._check_open()
        return True

    def pulse(self, line: str, duration_ms: int) -> None:  # noqa: ARG002 - serial links have lines
        """Turn a control line (``dtr``, ``rts``) over for a while, and back. Raises NoControlLine."""
        raise NoControlLine(
            f"{self.name}: pulse {line}", "this link has no control lines", "use a serial device"
        )

    def close(self) -> None:
        """Give up the link and all it holds. Closing again does nothing."""
        if not self._closed:
            self._closed = True
            self._close()

    @abstractmethod
    def _close(self) -> None: ...

    def _check_open(self) -> None:
        if self._closed:
            raise LinkClosed(self.name)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()
