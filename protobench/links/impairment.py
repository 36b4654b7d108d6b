"""What an impaired line does to the units that pass: the plan, and one direction of such a line."""

from __future__ import annotations

import heapq
import random
from collections import deque
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from enum import Enum

from protobench.links.base import Discarded, Framing

HELD_LIMIT_BYTES = 4 << 20
_TAIL_LIMIT_BYTES = 1 << 16


class Direction(Enum):
    """Out: from the bench to the module. In: from the module to the bench."""

    OUT = "out"
    IN = "in"


class Action(Enum):
    """What happens to a unit."""

    DROP = "drop"
    DELAY = "delay"
    REPEAT = "repeat"
    REORDER = "reorder"
    CORRUPT = "corrupt"
    HOLD = "hold"


@dataclass(frozen=True, slots=True, kw_only=True)
class Impairment:
    """One rule of a plan: it strikes units in ``frames`` that satisfy ``where``, with ``probability``.

    ``frames``: indices of units in this direction, from 0; None for all. ``where(index, unit)``: as you like.
    ``delay_ns``: DELAY, how long (others may overtake); REPEAT, between copies; HOLD, from the first part to
    the rest; REORDER, the longest wait for others to overtake. ``count``: REPEAT, further copies; REORDER,
    how many overtake; CORRUPT, bits flipped. ``split``: HOLD, bytes in the first part (None: half).
    """

    action: Action
    direction: Direction
    frames: frozenset[int] | None = None
    where: Callable[[int, bytes], bool] | None = None
    probability: float = 1.0
    delay_ns: int = 0
    count: int = 1
    split: int | None = None

    def __post_init__(self) -> None:
        needs_delay = self.action in (Action.DELAY, Action.REORDER, Action.HOLD)
        for name, value, good, rule in (
            ("probability", self.probability, 0 <= self.probability <= 1, "must lie from 0 to 1"),
            (
                "delay_ns",
                self.delay_ns,
                self.delay_ns >= int(needs_delay),
                f"is too short for {self.action.value}",
            ),
            ("count", self.count, self.count >= 1, "must be at least 1"),
            ("split", self.split, self.split is None or self.split >= 1, "must be at least 1"),
        ):
            if not good:
                raise ValueError(f"impairment {self.action.value}: {name} {value!r} {rule}")

    def strikes(self, index: int, unit: bytes, rng: random.Random) -> bool:
        # Drawn for every unit, so that one condition does not shift the luck of the rules after it.
        drawn = rng.random() < self.probability
        return (
            drawn
            and (self.frames is None or index in self.frames)
            and (self.where is None or self.where(index, unit))
        )


@dataclass(frozen=True, slots=True)
class LogEntry:
    """One thing an impaired link did, to the unit ``index`` of its direction."""

    time_ns: int
    direction: Direction
    index: int
    action: Action
    detail: str


@dataclass(slots=True)
class _Piece:
    """Bytes on their way: after ``offset_ns`` the data, after a further ``gap_ns`` the rest of them."""

    offset_ns: int
    data: bytes
    rest: bytes = b""
    gap_ns: int = 0
    overtaken_by: int = 0


_Applied = tuple[list[_Piece], str]


def _drop(_rule: Impairment, _pieces: list[_Piece], _rng: random.Random) -> _Applied:
    return [], "dropped"


def _delay(rule: Impairment, pieces: list[_Piece], _rng: random.Random) -> _Applied:
    later = [replace(piece, offset_ns=piece.offset_ns + rule.delay_ns) for piece in pieces]
    return later, f"delayed by {rule.delay_ns} ns"


def _repeat(rule: Impairment, pieces: list[_Piece], _rng: random.Random) -> _Applied:
    copies = [
        replace(piece, offset_ns=piece.offset_ns + number * rule.delay_ns)
        for number in range(rule.count + 1)
        for piece in pieces
    ]
    return copies, f"{rule.count} further copies, {rule.delay_ns} ns apart"


def _reorder(rule: Impairment, pieces: list[_Piece], _rng: random.Random) -> _Applied:
    parked = [
        replace(piece, offset_ns=piece.offset_ns + rule.delay_ns, overtaken_by=rule.count) for piece in pieces
    ]
    return parked, f"let {rule.count} overtake it, within {rule.delay_ns} ns"


def _corrupt(rule: Impairment, pieces: list[_Piece], rng: random.Random) -> _Applied:
    flipped = []
    changed = []
    for piece in pieces:
        data = bytearray(piece.data)
        filled = [place for place, byte in enumerate(data) if byte]  # never a stream's delimiters
        places = rng.sample(range(8 * len(filled)), min(rule.count, 8 * len(filled)))
        for place in places:
            data[filled[place // 8]] ^= 0x80 >> place % 8
        flipped += [f"{filled[place // 8]}.{place % 8}" for place in sorted(places)]
        changed.append(replace(piece, data=bytes(data)))
    return changed, f"flipped byte.bit {', '.join(flipped) or 'none'}"


def _hold(rule: Impairment, pieces: list[_Piece], _rng: random.Random) -> _Applied:
    held = []
    for piece in pieces:
        split = rule.split or max(1, len(piece.data) // 2)
        held.append(replace(piece, data=piece.data[:split], rest=piece.data[split:], gap_ns=rule.delay_ns))
    return held, f"held back from byte {', '.join(str(len(p.data)) for p in held)} on for {rule.delay_ns} ns"


_APPLY: dict[Action, Callable[[Impairment, list[_Piece], random.Random], _Applied]] = {
    Action.DROP: _drop,
    Action.DELAY: _delay,
    Action.REPEAT: _repeat,
    Action.REORDER: _reorder,
    Action.CORRUPT: _corrupt,
    Action.HOLD: _hold,
}


class _Units:
    """Cuts what passes into units: on a stream a block with its delimiter and the fill before it."""

    def __init__(self, framing: Framing) -> None:
        self._stream = framing is Framing.STREAM
        self._fill = 0
        self._tail = b""

    def push(self, data: bytes) -> list[bytes]:
        if not self._stream:
            return [data]
        units = []
        *blocks, self._tail = (self._tail + data).split(b"\0")
        for block in blocks:
            if block:
                units.append(bytes(self._fill) + block + b"\0")
                self._fill = 0
            else:
                self._fill += 1
        if self._fill + len(self._tail) > _TAIL_LIMIT_BYTES:
            units += self.flush()
        return units

    def flush(self) -> list[bytes]:
        """What is left without a delimiter, as one unit."""
        left = bytes(self._fill) + self._tail
        self._fill, self._tail = 0, b""
        return [left] if left else []


class Line:
    """One direction of an impaired link.

    What befalls a unit depends on the seed, the direction and its index alone, not on when it passes.
    """

    def __init__(
        self,
        direction: Direction,
        framing: Framing,
        plan: Sequence[Impairment],
        seed: int,
        log: deque[LogEntry],
    ) -> None:
        self._direction = direction
        self._plan = [rule for rule in plan if rule.direction is direction]
        self._seed = seed
        self._log = log
        self._units = _Units(framing)
        self._index = 0
        self._count = 0
        self._waiting: list[
            tuple[int, int, int, _Piece]
        ] = []  # due, 0 for the rest of a held unit, order, what
        self._parked: list[
            tuple[int, int, _Piece]
        ] = []  # due at the latest, index that must have passed, what
        self._busy_until_ns = 0
        self._held_bytes = 0
        self.discarded = Discarded(0, 0)

    def push(self, now_ns: int, data: bytes) -> None:
        """Bytes enter the line."""
        for unit in self._units.push(data):
            self._enter(now_ns, unit)

    def flush_tail(self, now_ns: int) -> None:
        """Let the unfinished unit enter as it is."""
        for unit in self._units.flush():
            self._enter(now_ns, unit)

    def next_due_ns(self) -> int | None:
        """When ``take_due`` will have something, or None."""
        return min(
            [*(entry[0] for entry in self._waiting[:1]), *(entry[0] for entry in self._parked)], default=None
        )

    def take_due(self, now_ns: int) -> list[tuple[int, bytes]]:
        """What leaves the line by now: (due time, bytes), in order."""
        overdue = [entry for entry in self._parked if entry[0] <= now_ns]
        self._unpark(overdue, 0)
        leaving = []
        while self._waiting and self._waiting[0][0] <= now_ns:
            due_ns, rank, _, piece = heapq.heappop(self._waiting)
            if rank and due_ns < self._busy_until_ns:  # behind a held unit, until its rest has passed
                self._wait(self._busy_until_ns, 1, piece)
                continue
            leaving.append((due_ns, piece.data))
            self._held_bytes -= len(piece.data)
            if piece.rest:
                self._busy_until_ns = now_ns + piece.gap_ns
                self._wait(self._busy_until_ns, 0, _Piece(0, piece.rest))
        return leaving

    def drain(self) -> list[tuple[int, bytes]]:
        """All that is still in the line, in order, without waiting for its time."""
        leaving = []
        while (due_ns := self.next_due_ns()) is not None:
            leaving += self.take_due(due_ns)
        return leaving

    def _enter(self, now_ns: int, unit: bytes) -> None:
        index = self._index
        self._index += 1
        pieces = [_Piece(0, unit)]
        if self._plan:
            rng = random.Random(f"{self._seed}/{self._direction.value}/{index}")
            for rule in self._plan:
                if rule.strikes(index, unit, rng):
                    pieces, detail = _APPLY[rule.action](rule, pieces, rng)
                    self._log.append(LogEntry(now_ns, self._direction, index, rule.action, detail))
        last_due_ns = now_ns
        for piece in pieces:
            size = len(piece.data) + len(piece.rest)
            if self._held_bytes + size > HELD_LIMIT_BYTES:
                self.discarded = Discarded(self.discarded.chunks + 1, self.discarded.bytes + size)
                continue
            self._held_bytes += size
            due_ns = now_ns + piece.offset_ns
            if piece.overtaken_by:
                self._parked.append((due_ns, index + piece.overtaken_by, piece))
            else:
                last_due_ns = max(last_due_ns, due_ns)
                self._wait(due_ns, 1, piece)
        self._unpark([entry for entry in self._parked if entry[1] <= index], last_due_ns)

    def _unpark(self, entries: list[tuple[int, int, _Piece]], due_ns: int) -> None:
        for entry in entries:
            self._parked.remove(entry)
            self._wait(due_ns or entry[0], 1, entry[2])

    def _wait(self, due_ns: int, rank: int, piece: _Piece) -> None:
        self._count += 1
        heapq.heappush(self._waiting, (due_ns, rank, self._count, piece))
