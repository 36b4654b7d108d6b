"""From bytes as they arrive to bare frames: the stream rules and the rule for ZeroMQ parts."""

from __future__ import annotations

from dataclasses import dataclass

from protobench.wire.errors import Dropped
from protobench.wire.stuffing import ALWAYS_CANONICAL_SIZE, DELIMITER, DecodeError, decode_short

_WHY = "longer blocks can have two encodings"


@dataclass(frozen=True, slots=True)
class StreamLimits:
    """Longest block in bytes, delimiter not counted, and the longest gap in ns inside a frame."""

    block_size_max: int
    discard_gap_ns: int

    def __post_init__(self) -> None:
        if self.block_size_max > ALWAYS_CANONICAL_SIZE:
            raise ValueError(f"block_size_max {self.block_size_max}, at most {ALWAYS_CANONICAL_SIZE}: {_WHY}")


class StreamDecoder:
    """Cuts a byte stream into bare frames, whatever pieces it arrives in.

    Holds at most one unfinished block of ``block_size_max`` bytes. A block that is longer is dropped, once,
    as soon as that is known, and skipped up to the next delimiter.
    """

    __slots__ = ("_last_ns", "_limits", "_skipping", "_tail")

    def __init__(self, limits: StreamLimits) -> None:
        self._limits = limits
        self._tail = b""
        self._skipping = False
        self._last_ns = 0

    @property
    def holds_half(self) -> bool:
        """Whether a frame has begun to arrive and is not whole."""
        return bool(self._tail)

    @property
    def deadline_ns(self) -> int | None:
        """When the half frame now held must be discarded, or None when none is held."""
        if not self._tail:
            return None
        return self._last_ns + self._limits.discard_gap_ns

    def expire(self, now_ns: int) -> list[bytes | Dropped]:
        """Discard a half frame whose gap has grown too long by ``now_ns``; return what was dropped for it."""
        if now_ns - self._last_ns <= self._limits.discard_gap_ns:
            return []
        self._skipping = False
        if not self._tail:
            return []
        gap_ms = (now_ns - self._last_ns) // 1_000_000
        tail, self._tail = self._tail, b""
        return [Dropped("half-frame", f"{len(tail)} bytes, then {gap_ms} ms without any", tail)]

    def feed(self, data: bytes, now_ns: int) -> list[bytes | Dropped]:
        """Take bytes that arrived at ``now_ns``; return, in order, the bare frames and drops they complete.

        Bytes of one call arrived together. ``now_ns`` never goes back.
        """
        if not data:
            return []
        result: list[bytes | Dropped] = []
        if self._tail or self._skipping:
            result = self.expire(now_ns)
            data = self._tail + data
        self._last_ns = now_ns
        blocks = data.split(DELIMITER)
        tail = blocks.pop()
        if self._skipping and blocks:
            self._skipping = False
            del blocks[0]
        _take_blocks(blocks, result, self._limits.block_size_max)
        self._hold(tail, result)
        return result

    def _hold(self, tail: bytes, result: list[bytes | Dropped]) -> None:
        if self._skipping:
            tail = b""
        elif len(tail) > self._limits.block_size_max:
            result.append(_too_long(tail, self._limits.block_size_max))
            self._skipping = True
            tail = b""
        self._tail = tail


def split_part(part: bytes, limits: StreamLimits) -> list[bytes | Dropped]:
    """Return the bare frames and drops of one ZeroMQ message part.

    A part that begins with 0x00 is a segment of a stream and stands for itself; any other is one bare frame.
    """
    if part[:1] != DELIMITER:
        return [part]
    result: list[bytes | Dropped] = []
    blocks = part.split(DELIMITER)
    tail = blocks.pop()
    _take_blocks(blocks, result, limits.block_size_max)
    if len(tail) > limits.block_size_max:
        result.append(_too_long(tail, limits.block_size_max))
    elif tail:
        result.append(
            Dropped("half-frame", f"{len(tail)} bytes and no delimiter at the end of the segment", tail)
        )
    return result


def _take_blocks(blocks: list[bytes], result: list[bytes | Dropped], size_max: int) -> None:
    """Append what whole blocks hold. Empty blocks are fill."""
    append = result.append
    for block in blocks:
        if not block:
            continue
        if len(block) > size_max:
            append(_too_long(block, size_max))
            continue
        try:
            append(decode_short(block))
        except DecodeError as error:
            append(Dropped("stuffing", f"not COBS: {error}", block))


def _too_long(block: bytes, size_max: int) -> Dropped:
    return Dropped("too-long", f"more than {size_max} bytes without a delimiter", block[:size_max])
