"""Telemetry: reports at a stated rate, with a stated end."""

from __future__ import annotations

from dataclasses import dataclass

SessionKey = tuple[int, int]


@dataclass(slots=True)
class Telemetry:
    """What one telemetry-on asked for."""

    requester: SessionKey
    number: int
    period_us: int
    end_us: int
    next_us: int
    sequence: int = 0

    @classmethod
    def start(
        cls, requester: SessionKey, number: int, period_ms: int, duration_ms: int, now_us: int
    ) -> Telemetry:
        """The first report comes one period from now."""
        period_us = 1000 * period_ms
        return cls(requester, number, period_us, now_us + 1000 * duration_ms, now_us + period_us)

    @property
    def is_over(self) -> bool:
        return self.next_us > self.end_us

    def advance(self) -> None:
        """A report was made."""
        self.sequence = (self.sequence + 1) % (1 << 32)
        self.next_us += self.period_us
