"""The lease: one session commands, for a time."""

from __future__ import annotations

MODULUS = 1 << 32
SessionKey = tuple[int, int]


class Lease:
    """``number``: the last one granted; ``end_us``: when it ends, while held."""

    __slots__ = ("duration_ms", "end_us", "holder", "number")

    def __init__(self) -> None:
        self.number = 0
        self.holder: SessionKey | None = None
        self.duration_ms = 0
        self.end_us: int | None = None

    def is_holder(self, key: SessionKey) -> bool:
        return self.holder == key

    def grant(self, key: SessionKey, duration_ms: int, now_us: int) -> None:
        self.number = (self.number + 1) % MODULUS
        self.holder = key
        self.duration_ms = duration_ms
        self.extend(now_us)

    def extend(self, now_us: int) -> None:
        """Let it last from now as long as the grant or the last renewal said."""
        self.end_us = now_us + 1000 * self.duration_ms

    def end(self) -> None:
        self.holder = None
        self.end_us = None

    def remaining_ms(self, now_us: int) -> int:
        return 0 if self.end_us is None else max(0, -((now_us - self.end_us) // 1000))
