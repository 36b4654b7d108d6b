"""What a module remembers of each (source, session): which numbers it saw, and the receipts it keeps."""

from __future__ import annotations

from collections import OrderedDict
from dataclasses import dataclass, field

from protobench.suite.model.request import Request

HALF = 1 << 31
MODULUS = 1 << 32
FRESH, CONFLICT, COPY, UNSEEN, EXPIRED, UNKNOWN = (
    "fresh", "conflict", "copy", "late-unseen", "answer-expired", "unknown",
)  # fmt: skip


@dataclass(slots=True)
class Stored:
    """A command that was judged: what must be the same in a copy, and its receipt once it is seen."""

    meaning: tuple[object, ...]
    receipt: bytes | None = None


@dataclass(slots=True)
class Memory:
    """One (source, session). ``stored``: by number, the oldest first."""

    highest: int
    seen: set[int] = field(default_factory=set)
    stored: OrderedDict[int, Stored] = field(default_factory=OrderedDict)


class History:
    """All sessions; ``sessions`` and ``numbers``: how many the module declares to keep at least."""

    def __init__(self, sessions: int, numbers: int, window: int) -> None:
        self.sessions = sessions
        self.numbers = numbers
        self.window = window
        self._memories: OrderedDict[tuple[int, int], Memory] = OrderedDict()
        self._gone: set[tuple[int, int]] = set()

    def stored(self, request: Request) -> Stored | None:
        memory = self._memories.get(request.key[:2])
        return None if memory is None else memory.stored.get(request.frame.number)

    def knows(self, source: int, session: int) -> bool:
        """Whether a command of this session was judged."""
        return (source, session) in self._memories

    def highest(self, source: int, session: int) -> int | None:
        """The highest number of a session; None for one that is not known."""
        memory = self._memories.get((source, session))
        return None if memory is None else memory.highest

    def judge(self, request: Request) -> str:
        """What the number of a command means; a new one is consumed, and stored unless it went to many.

        UNKNOWN: the module may have pushed out what would tell, or keep more than it declares.
        """
        who = request.key[:2]
        if who in self._gone:
            return UNKNOWN
        number = request.frame.number
        memory = self._memories.get(who)
        if memory is None:
            memory = self._memories[who] = Memory(number)
            self._consume(memory, request)
            self._push_out()
            return FRESH
        self._memories.move_to_end(who)
        ahead = (number - memory.highest) % MODULUS
        if 0 < ahead < HALF:
            memory.highest = number
            self._consume(memory, request)
            return FRESH
        if request.many:
            return EXPIRED
        return self._old(memory, request, MODULUS - ahead if ahead else 0)

    def _old(self, memory: Memory, request: Request, behind: int) -> str:
        stored = memory.stored.get(request.frame.number)
        if stored is not None:
            newest = list(memory.stored)[-self.numbers :]
            if request.frame.number not in newest:
                return UNKNOWN
            return COPY if stored.meaning == meaning(request) else CONFLICT
        if behind >= self.window or request.frame.number in memory.seen:
            return EXPIRED
        return UNSEEN

    def _consume(self, memory: Memory, request: Request) -> None:
        memory.seen.add(request.frame.number)
        if not request.many:
            memory.stored[request.frame.number] = Stored(meaning(request))
        if len(memory.stored) > KEPT_MAX:
            memory.stored.popitem(last=False)

    def _push_out(self) -> None:
        """A session beyond those declared may have been pushed out; the holder's never is, which is not relied on."""
        while len(self._memories) > self.sessions - 1:
            who, _ = self._memories.popitem(last=False)
            self._gone.add(who)
        if len(self._gone) > GONE_MAX:
            self._gone.clear()


def meaning(request: Request) -> tuple[object, ...]:
    frame = request.frame
    return frame.kind, frame.flags, frame.destination, bytes(frame.body)


KEPT_MAX = 64
GONE_MAX = 10_000
