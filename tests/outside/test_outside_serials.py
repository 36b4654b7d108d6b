"""Serial numbers and clock exchange against their RFCs."""

from __future__ import annotations

from fractions import Fraction

import pytest

from protobench.wire import clock_offset_delay, serial_add, serial_compare, serial_distance


# Source: RFC 1982, section 5.1 (two bits).
def test_rfc_1982_two_bits() -> None:
    assert serial_add(3, 1, bits=2) == 0
    with pytest.raises(ValueError, match="amount 2"):
        serial_add(0, 2, bits=2)
    for newer, older in ((1, 0), (2, 1), (3, 2), (0, 3)):
        assert serial_compare(newer, older, bits=2) == 1
        assert serial_compare(older, newer, bits=2) == -1
    for a, b in ((0, 2), (1, 3), (2, 0), (3, 1)):
        assert serial_compare(a, b, bits=2) is None


# Source: RFC 1982, section 5.2 (eight bits).
def test_rfc_1982_eight_bits() -> None:
    assert serial_add(255, 1, bits=8) == 0
    assert serial_add(100, 100, bits=8) == 200
    assert serial_add(200, 100, bits=8) == 44
    with pytest.raises(ValueError, match="amount 128"):
        serial_add(0, 128, bits=8)
    for newer, older in (
        (1, 0),
        (44, 0),
        (100, 0),
        (100, 44),
        (200, 100),
        (255, 200),
        (0, 255),
        (100, 255),
        (0, 200),
        (44, 200),
    ):
        assert serial_compare(newer, older, bits=8) == 1
        assert serial_compare(older, newer, bits=8) == -1
    assert serial_compare(0, 128, bits=8) is None


# Source: the definition in RFC 1982, section 3.2, written out and compared for all pairs of eight bits.
def test_rfc_1982_definition() -> None:
    for a in range(256):
        for b in range(256):
            less = (a < b and b - a < 128) or (a > b and a - b > 128)
            greater = (a < b and b - a > 128) or (a > b and a - b < 128)
            assert serial_compare(a, b, bits=8) == (0 if a == b else -1 if less else 1 if greater else None)


def test_32_bits_at_the_wrap() -> None:
    top = (1 << 32) - 1
    assert serial_compare(0, top) == 1
    assert serial_compare(top, 0) == -1
    assert serial_distance(5, top) == 6
    assert serial_distance(top, 5) == -6
    assert serial_compare(0, 1 << 31) is None
    assert serial_compare((1 << 31) - 1, 0) == 1
    assert serial_distance(1 << 31, 0) == -(1 << 31)


# Source: the formulas of RFC 5905, section 8; the numbers are worked out by hand, not published.
@pytest.mark.parametrize(
    ("times", "offset", "delay"),
    [((100, 155, 160, 125), 45, 20), ((0, 8, 9, 11), 3, 10), ((1000, 1150, 2000, 1950), 100, 100)],
)
def test_rfc_5905_offset_and_delay(times: tuple[int, int, int, int], offset: int, delay: int) -> None:
    t1, t2, t3, t4 = times
    assert clock_offset_delay(*times) == (offset, delay)
    assert offset == Fraction((t2 - t1) + (t3 - t4), 2)
    assert delay == (t4 - t1) - (t3 - t2)


def test_the_offset_is_wrong_by_half_the_difference_of_the_ways() -> None:
    true_offset, there, back = 5, 3, 7
    t1, t2 = 0, there + true_offset
    t3, t4 = t2 + 1, there + 1 + back
    reading = clock_offset_delay(t1, t2, t3, t4)
    assert reading.offset - true_offset == Fraction(there - back, 2)
    assert abs(reading.offset - true_offset) <= Fraction(reading.delay, 2)


def test_any_clock_may_wrap_within_an_exchange() -> None:
    wrap = 1 << 32
    times = (100, 155, 160, 125)
    for near in (0, wrap - 101, wrap - 110, wrap - 125):
        for far in (0, wrap - 156, wrap - 160, wrap - 300):
            t1, t4 = ((time + near) % wrap for time in (times[0], times[3]))
            t2, t3 = ((time + far) % wrap for time in (times[1], times[2]))
            reading = clock_offset_delay(t1, t2, t3, t4)
            assert reading.delay == 20
            assert (reading.offset - 45 - far + near) % wrap == 0
