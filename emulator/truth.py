"""The truth log: what actuator and position really did, for the upper tester."""

from __future__ import annotations

from collections import deque
from typing import NamedTuple

KEPT = 64
PAGE = 8


class Entry(NamedTuple):
    """Module clock in us, name of the event, position."""

    time: int
    event: str
    position: int


class TruthLog:
    """The newest entries come first; ``motion_starts`` counts motions physically begun since the start."""

    __slots__ = ("entries", "motion_starts")

    def __init__(self) -> None:
        self.entries: deque[Entry] = deque(maxlen=KEPT)
        self.motion_starts = 0

    def add(self, time: int, event: str, position: int) -> None:
        self.entries.appendleft(Entry(time, event, position))

    def begin(self, time: int, position: int) -> None:
        self.motion_starts += 1
        self.add(time, "motion-start", position)

    def page(self, number: int) -> list[Entry]:
        return list(self.entries)[PAGE * number : PAGE * (number + 1)]
