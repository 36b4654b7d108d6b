"""A serial line in virtual time: every byte takes its time each way, and a send ends when its last byte has left."""

from __future__ import annotations

from collections import deque

from emulator.engine import ModuleEngine
from protobench.links import MemoryLink


class Line:
    """The far end of the line, and the line: bytes reach the module, and leave it, one after another."""

    def __init__(self, engine: ModuleEngine, byte_us: int) -> None:
        self._engine = engine
        self._byte_us = byte_us
        self._towards: deque[tuple[int, int]] = deque()  # when a byte arrives, and which
        self._leaving = bytearray()
        self._next_leaves_us = 0
        self._line_free_us = 0
        self._now_us = 0

    @property
    def all_arrive_us(self) -> int | None:
        """When the last byte on its way reaches the module."""
        return self._towards[-1][0] if self._towards else None

    def feed(self, now_us: int, data: bytes) -> None:
        self.advance(now_us)
        self._line_free_us = max(self._line_free_us, now_us)
        for byte in data:
            self._line_free_us += self._byte_us
            self._towards.append((self._line_free_us, byte))

    def advance(self, now_us: int) -> None:
        while (due_us := self._next_input_us()) is not None and due_us <= now_us:
            self._to(due_us)
            while self._towards and self._towards[0][0] <= due_us:
                self._engine.feed(due_us, bytes([self._towards.popleft()[1]]))
                self._collect()
        self._to(now_us)

    def _next_input_us(self) -> int | None:
        engine_us = self._engine.next_deadline_us()
        arrival_us = self._towards[0][0] if self._towards else None
        times = [max(time, self._now_us) for time in (engine_us, arrival_us) if time is not None]
        return min(times, default=None)

    def _to(self, now_us: int) -> None:
        self._now_us = max(self._now_us, now_us)
        self._engine.advance(self._now_us)
        self._collect()

    def _collect(self) -> None:
        data = b"".join(self._engine.take_output())
        if data and not self._leaving:
            self._next_leaves_us = max(self._next_leaves_us, self._now_us) + self._byte_us
        self._leaving += data

    def next_deadline_us(self) -> int | None:
        leaves_us = self._next_leaves_us if self._leaving else None
        times = [time for time in (self._next_input_us(), leaves_us) if time is not None]
        return max(self._now_us, min(times)) if times else None

    def take_output(self) -> list[bytes]:
        left = bytearray()
        while self._leaving and self._next_leaves_us <= self._now_us:
            left.append(self._leaving.pop(0))
            self._next_leaves_us += self._byte_us
        return [bytes(left)] if left else []


class SlowLine(MemoryLink):
    """A link over such a line."""

    def __init__(self, engine: ModuleEngine, byte_us: int) -> None:
        self._line = Line(engine, byte_us)
        super().__init__(self._line, name=f"serial line, {byte_us} us a byte")
        self.byte_ns = 1000 * byte_us

    def send(self, *units: bytes) -> int:
        super().send(*units)
        while (last_us := self._line.all_arrive_us) is not None:
            self._step(1000 * last_us)
        return self.clock.now_ns()
