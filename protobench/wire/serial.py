"""Serial number arithmetic of RFC 1982."""

from __future__ import annotations


def serial_add(number: int, amount: int, bits: int = 32) -> int:
    """Return ``number + amount`` in serial arithmetic; ``amount`` is 0 to 2^(bits-1) - 1, else ValueError."""
    if not 0 <= amount < 1 << (bits - 1):
        raise ValueError(f"amount {amount} is outside 0..{(1 << (bits - 1)) - 1}")
    return (number + amount) % (1 << bits)


def serial_distance(a: int, b: int, bits: int = 32) -> int:
    """Return how far ``a`` is ahead of ``b``: -(2^(bits-1)) to 2^(bits-1) - 1.

    Negative when ``a`` is behind; the least value is the distance at which RFC 1982 leaves the order
    undefined.
    """
    half = 1 << (bits - 1)
    return ((a - b + half) & ((1 << bits) - 1)) - half


def serial_compare(a: int, b: int, bits: int = 32) -> int | None:
    """Return 1 when ``a`` is newer than ``b``, -1 when older, 0 when equal, None when that is undefined."""
    distance = serial_distance(a, b, bits)
    if distance == 0:
        return 0
    if distance == -(1 << (bits - 1)):
        return None
    return 1 if distance > 0 else -1
