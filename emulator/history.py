"""Sessions, numbers, duplicates: which command was seen, and what it was told."""

from __future__ import annotations

from collections import OrderedDict
from collections.abc import Callable
from typing import NamedTuple

from protobench.wire import serial_compare

WINDOW = 32
MODULUS = 1 << 32
NEW, COPY = "new", "copy"
SessionKey = tuple[int, int]  # source, session


class Entry(NamedTuple):
    """One command: digest of kind, flags, destination and body, and the body of its receipt."""

    digest: int
    receipt: bytes


class SessionHistory:
    """Numbers of one session: the highest, which of the 32 up to it were seen, the receipts still kept."""

    __slots__ = ("entries", "highest", "seen")

    def __init__(self) -> None:
        self.highest: int | None = None
        self.seen = 0
        self.entries: OrderedDict[int, Entry] = OrderedDict()


class History:
    """All sessions, the one used longest ago first. ``is_holder`` tells whose session is never pushed out."""

    __slots__ = ("_capacity", "_is_holder", "_numbers", "sessions")

    def __init__(self, sessions: int, numbers: int, is_holder: Callable[[SessionKey], bool]) -> None:
        self.sessions: OrderedDict[SessionKey, SessionHistory] = OrderedDict()
        self._capacity = sessions
        self._numbers = numbers
        self._is_holder = is_holder

    def lookup(self, key: SessionKey, number: int, digest: int) -> tuple[str, Entry | None]:
        """``new``, ``copy`` with its entry, or the name of the refusal."""
        session = self.sessions.get(key)
        if session is None or session.highest is None:
            return NEW, None
        self.sessions.move_to_end(key)
        if serial_compare(number, session.highest) == 1:
            return NEW, None
        entry = session.entries.get(number)
        if entry is not None:
            return (COPY, entry) if entry.digest == digest else ("conflict", None)
        behind = (session.highest - number) % MODULUS
        if behind >= WINDOW or session.seen >> behind & 1:
            return "answer-expired", None
        return "late-unseen", None

    def consume(self, key: SessionKey, number: int) -> SessionHistory:
        """Take note of a new number; a new session may push another out."""
        session = self.sessions.get(key)
        if session is None:
            self._make_room()
            session = self.sessions[key] = SessionHistory()
        ahead = 0 if session.highest is None else (number - session.highest) % MODULUS
        session.seen = (session.seen << ahead if ahead < WINDOW else 0) & (1 << WINDOW) - 1 | 1
        session.highest = number
        return session

    def store(self, session: SessionHistory, number: int, entry: Entry) -> None:
        """Keep a receipt, in place of the oldest when there is no room."""
        session.entries.pop(number, None)
        session.entries[number] = entry
        while len(session.entries) > self._numbers:
            session.entries.popitem(last=False)

    def _make_room(self) -> None:
        while len(self.sessions) >= self._capacity:
            del self.sessions[next(key for key in self.sessions if not self._is_holder(key))]
