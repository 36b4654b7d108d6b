"""What waits to be sent: unicast answers with their delay, answers to many in their windows; events are made when due.

Answers are kept as functions that make them, so that what they tell is what holds when they leave.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable
from typing import NamedTuple

SessionKey = tuple[int, int]


class Written(NamedTuple):
    """One frame that leaves. ``asker``: the peer whose request it answers, where one was named; None for an event."""

    data: bytes
    asker: bytes | None = None


Make = Callable[[], Written]


class Waiting(NamedTuple):
    """One answer: when it leaves, and how its frame is made."""

    due_us: int
    make: Make


class Outbox:
    """``left`` counts the unicast answers that have left, in the order in which they were put in."""

    __slots__ = ("_answers", "_capacity", "_halts", "_many", "_many_capacity", "left", "queued")

    def __init__(self, capacity: int, many_capacity: int) -> None:
        self._halts: deque[Waiting] = deque()
        self._answers: deque[Waiting] = deque()
        self._many: dict[SessionKey, Waiting] = {}
        self._capacity = capacity
        self._many_capacity = many_capacity
        self.queued = 0
        self.left = 0

    @property
    def has_room(self) -> bool:
        """Whether another unicast answer finds a place."""
        return len(self._answers) < self._capacity

    def has_room_for_many(self, key: SessionKey) -> bool:
        """Whether an answer to many of this session finds a place."""
        return key in self._many or len(self._many) < self._many_capacity

    def put(self, due_us: int, make: Make) -> int:
        """Add a unicast answer; returns its place in the order, to compare with ``left``."""
        self._answers.append(Waiting(due_us, make))
        self.queued += 1
        return self.queued

    def put_halt(self, due_us: int, make: Make) -> None:
        """Add a halt receipt; beyond the capacity the halt stays unanswered."""
        if len(self._halts) < self._capacity:
            self._halts.append(Waiting(due_us, make))

    def put_many(self, key: SessionKey, due_us: int | None, make: Make) -> None:
        """Replace the answer to many that waits for a session; without a time there is none any more."""
        self._many.pop(key, None)
        if due_us is not None and len(self._many) < self._many_capacity:
            self._many[key] = Waiting(due_us, make)

    def next_due_us(self) -> int | None:
        heads = [queue[0].due_us for queue in (self._halts, self._answers) if queue]
        return min([*heads, *(waiting.due_us for waiting in self._many.values())], default=None)

    def take_halts(self, now_us: int) -> list[Written]:
        return [waiting.make() for waiting in _due(self._halts, now_us)]

    def take_answers(self, now_us: int) -> list[Written]:
        frames = [waiting.make() for waiting in _due(self._answers, now_us)]
        self.left += len(frames)
        return frames

    def take_many(self, now_us: int) -> list[Written]:
        due = [key for key, waiting in self._many.items() if waiting.due_us <= now_us]
        return [self._many.pop(key).make() for key in due]


def _due(queue: deque[Waiting], now_us: int) -> list[Waiting]:
    due = []
    while queue and queue[0].due_us <= now_us:
        due.append(queue.popleft())
    return due
