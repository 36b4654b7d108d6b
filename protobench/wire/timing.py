"""Clock offset and delay of RFC 5905, section 8, for clocks that wrap."""

from __future__ import annotations

from fractions import Fraction
from typing import NamedTuple

from protobench.wire.serial import serial_distance


class ClockReading(NamedTuple):
    """How far the far clock is ahead, and the time spent on the link both ways, in clock units."""

    offset: Fraction
    delay: int


def clock_offset_delay(t1: int, t2: int, t3: int, t4: int, bits: int = 32) -> ClockReading:
    """Return offset and delay from one exchange.

    t1: near clock at sending, t2: far clock at arrival, t3: far clock at the answer's sending, t4: near clock
    at its arrival; all modulo 2^bits. Differences are taken modulo 2^bits, so any clock may wrap in between;
    the offset is exact, a whole or a half, and known modulo 2^bits. With unequal ways it is wrong by half
    their difference, at most delay / 2.
    """
    there = serial_distance(t2, t1, bits)
    # Not the mean of both ways: that would be wrong by half the range when only one of them wraps.
    delay = serial_distance(t4, t1, bits) - serial_distance(t3, t2, bits)
    offset = there - Fraction(delay, 2)
    return ClockReading(offset, delay)
