"""What all real-time links share: one receive loop, and one send loop for those with a file descriptor."""

from __future__ import annotations

import os
import select
import time
from abc import abstractmethod

from protobench.links.base import DEFAULT_LIMITS, Chunk, Framing, Limits, Link, MonotonicClock
from protobench.links.errors import LinkError, PeerClosed, SendStalled, from_os_error

READ_BYTES = 1 << 16
_MS = 1_000_000
_SLICE_NS = (
    100_000  # poll() counts whole milliseconds: the last one before a deadline is waited for in slices
)
_CLOCK = MonotonicClock()


class RealTimeLink(Link):
    """A link to something outside this process. A chunk is stamped when ``receive`` takes it from the system.

    ``_pull`` puts what is there into the inbox without waiting and says whether it did; when the far end has
    gone it sets ``_ended``. ``_wait`` returns when something arrives, or after so many milliseconds.
    """

    def __init__(
        self, name: str, framing: Framing, *, loopback: bool, limits: Limits = DEFAULT_LIMITS
    ) -> None:
        super().__init__(name, framing, _CLOCK, loopback=loopback, limits=limits)
        self._ended: LinkError | None = None

    def receive(self, deadline_ns: int) -> Chunk | None:
        self._check_open()
        while True:
            chunk = self._inbox.pop()
            if chunk is not None:
                return chunk
            if self._ended is None and self._pull():
                continue
            self._check_far_end()
            remaining_ns = deadline_ns - _CLOCK.now_ns()
            if remaining_ns <= 0:
                return None
            if remaining_ns >= _MS:
                self._wait(remaining_ns // _MS)
            else:
                time.sleep(min(remaining_ns, _SLICE_NS) / 1e9)

    @abstractmethod
    def _pull(self) -> bool: ...

    @abstractmethod
    def _wait(self, timeout_ms: int) -> None: ...

    def _check_far_end(self) -> None:
        if self._ended is not None:
            raise self._ended.with_traceback(None)

    def _stalled(self, what: str) -> SendStalled:
        return SendStalled(
            f"{self.name}: send {what}",
            f"the far end did not take it within {self.limits.send_s} s",
            "see whether the far end still reads",
        )


class DescriptorLink(RealTimeLink):
    """A link whose arrivals show on a file descriptor that ``_watch`` was told of.

    ``_read`` returns b"" at the end of a stream and raises BlockingIOError when nothing is there; ``_write``
    returns how many bytes were taken and raises BlockingIOError when none can be.
    """

    _reading: select.poll
    _writing: select.poll

    def _watch(self, read_fd: int, write_fd: int) -> None:
        self._reading = select.poll()
        self._reading.register(read_fd, select.POLLIN)
        self._writing = select.poll()
        self._writing.register(read_fd, select.POLLIN)
        self._writing.register(write_fd, select.POLLOUT | (select.POLLIN if read_fd == write_fd else 0))
        self._read_fd, self._write_fd = read_fd, write_fd

    def send(self, *units: bytes) -> int:
        self._check_open()
        self._check_far_end()
        data = b"".join(units)
        rest = memoryview(data)
        give_up_ns = _CLOCK.now_ns() + int(self.limits.send_s * 1e9)
        while rest:
            try:
                rest = rest[self._write(rest) :]
            except BlockingIOError:
                self._wait_for_room(give_up_ns, f"{len(data)} bytes ({len(rest)} are left)")
            except OSError as error:
                raise self._end(error) from error
        return _CLOCK.now_ns()

    def _wait_for_room(self, give_up_ns: int, what: str) -> None:
        """Read on meanwhile: a far end that is itself blocked on writing to us would never read."""
        self._pull()
        self._check_far_end()
        remaining_ns = give_up_ns - _CLOCK.now_ns()
        if remaining_ns <= 0:
            raise self._stalled(what)
        self._writing.poll(remaining_ns // _MS + 1)

    def _pull(self) -> bool:
        try:
            data = self._read()
        except BlockingIOError:
            return False
        except OSError as error:
            self._end(error)
            return False
        if not data:
            self._end(None)
            return False
        self._inbox.put(Chunk(_CLOCK.now_ns(), data))
        return True

    def _end(self, error: OSError | None) -> LinkError:
        """The far end has gone (with this system error): remember why."""
        if self._ended is None:
            self._ended = self._closed_error(error)
        return self._ended

    def _closed_error(self, error: OSError | None) -> LinkError:
        if error is None:
            return PeerClosed(self.name, "the far end has closed the link", "see why, then open a new link")
        return from_os_error(self.name, error)

    def _wait(self, timeout_ms: int) -> None:
        self._reading.poll(timeout_ms)

    def _read(self) -> bytes:
        return os.read(self._read_fd, READ_BYTES)

    def _write(self, data: memoryview) -> int:
        return os.write(self._write_fd, data)
