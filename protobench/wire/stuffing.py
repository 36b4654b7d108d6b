"""Byte stuffing (COBS) with the check that an encoding is the canonical one."""

from __future__ import annotations

from collections.abc import Callable

from cobs import cobs

DELIMITER = b"\x00"

# A block this short cannot hold a full group of 254 bytes, the only thing that COBS can write in two ways.
# So whatever decodes at all is canonical, and the comparison is not made.
ALWAYS_CANONICAL_SIZE = 254

DecodeError: type[Exception] = cobs.DecodeError
decode_short: Callable[[bytes], bytes] = cobs.decode
"""For a block of 1 to ALWAYS_CANONICAL_SIZE bytes: its data; raises DecodeError."""


class StuffingError(ValueError):
    """The bytes are no canonical COBS block; the message says why."""


def stuff(data: bytes) -> bytes:
    """Return ``data`` as one COBS block, without its delimiter."""
    return cobs.encode(data)  # type: ignore[no-any-return]


def unstuff(block: bytes) -> bytes:
    """Return the data of one COBS block, given without its delimiter.

    Raises StuffingError for an empty block, a zero byte, a group that runs past the end, and an encoding that
    is not what :func:`stuff` makes of the same data.
    """
    if not block:
        raise StuffingError("an empty block holds no frame, not even an empty one")
    try:
        data: bytes = cobs.decode(block)
    except cobs.DecodeError as error:
        raise StuffingError(f"not COBS: {error}") from None
    if len(block) > ALWAYS_CANONICAL_SIZE and cobs.encode(data) != block:
        raise StuffingError("not the canonical encoding: a full last group is closed by one more")
    return data
