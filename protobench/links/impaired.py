"""A link around a link that loses, delays, repeats, reorders, corrupts or holds what passes, as planned."""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence

from protobench.links.base import Chunk, Discarded, Framing, Link
from protobench.links.errors import PeerClosed
from protobench.links.impairment import Action, Direction, Impairment, Line, LogEntry

__all__ = ["Action", "Direction", "ImpairedLink", "Impairment", "LogEntry"]

LOG_LIMIT = 100_000
_SWALLOWED_LIMIT = 1000  # arrivals that come to nothing before a receive past its deadline gives up


class ImpairedLink(Link):
    """Passes units through two impaired lines, on the inner link's clock; repeatable from ``seed``.

    On a stream a unit passes when its delimiter has come: a half frame sent through waits for its other half
    (HOLD makes one). Nothing moves between calls: what falls due leaves in the next call that can send.
    ``log`` holds what was done, the latest 100,000 entries. Closing it closes the inner link.
    """

    def __init__(self, inner: Link, plan: Sequence[Impairment], seed: int) -> None:
        super().__init__(inner.name, inner.framing, inner.clock, loopback=inner.loopback)
        if inner.framing is not Framing.STREAM and any(rule.action is Action.HOLD for rule in plan):
            raise ValueError(
                f"impairment hold: {inner.name} is no stream, a unit there comes whole or not at all"
            )
        self.inner = inner
        self.seed = seed
        self.log: deque[LogEntry] = deque(maxlen=LOG_LIMIT)
        self._out = Line(Direction.OUT, inner.framing, plan, seed, self.log)
        self._in = Line(Direction.IN, inner.framing, plan, seed, self.log)

    @property
    def discarded(self) -> Discarded:
        """Lost to full buffers, here and in the inner link; what the plan drops is in ``log``."""
        lost = (self._inbox.discarded, self._out.discarded, self._in.discarded, self.inner.discarded)
        return Discarded(sum(each.chunks for each in lost), sum(each.bytes for each in lost))

    def send(self, *units: bytes) -> int:
        self._check_open()
        now_ns = self.clock.now_ns()
        for unit in units:
            self._out.push(now_ns, unit)
        return self._send_due()

    def receive(self, deadline_ns: int) -> Chunk | None:
        self._check_open()
        swallowed = 0
        while True:
            self._send_due()
            chunk = self._take_arrived()
            if chunk is not None:
                return chunk
            until_ns = min(deadline_ns, self._next_due_ns(deadline_ns))
            if self._let_in(until_ns):
                swallowed += self.clock.now_ns() > deadline_ns
            elif until_ns >= deadline_ns:
                self._send_due()
                return self._take_arrived()
            if swallowed > _SWALLOWED_LIMIT:
                return None

    def settle(self, deadline_ns: int) -> bool:
        """As ``Link.settle``; what was sent without a delimiter goes out as it is."""
        self._check_open()
        self._out.flush_tail(self.clock.now_ns())
        self._send_due()
        while (due_ns := self._out.next_due_ns()) is not None:
            until_ns = min(due_ns, deadline_ns)
            if not self._let_in(until_ns) and due_ns > deadline_ns:
                return False
            self._send_due()
        return self.inner.settle(deadline_ns)

    def _let_in(self, until_ns: int) -> bool:
        """Wait on the inner link; whether anything came. At its end, what is in the line arrives at once."""
        try:
            arrived = self.inner.receive(until_ns)
        except PeerClosed:
            self._in.flush_tail(self.clock.now_ns())
            left = self._in.drain()
            if not left:
                raise
            now_ns = self.clock.now_ns()
            for _, data in left:
                self._inbox.put(Chunk(now_ns, data))
            return True
        if arrived is None:
            return False
        self._in.push(arrived.time_ns, arrived.data)
        return True

    def _send_due(self) -> int:
        now_ns = self.clock.now_ns()
        due = [data for _, data in self._out.take_due(now_ns)]
        return self.inner.send(*due) if due else now_ns

    def _take_arrived(self) -> Chunk | None:
        for due_ns, data in self._in.take_due(self.clock.now_ns()):
            self._inbox.put(Chunk(due_ns, data))
        return self._inbox.pop()

    def _next_due_ns(self, default: int) -> int:
        dues = (self._out.next_due_ns(), self._in.next_due_ns())
        return min((due for due in dues if due is not None), default=default)

    def _close(self) -> None:
        self.inner.close()
