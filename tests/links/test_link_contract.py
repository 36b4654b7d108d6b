"""What every link owes its caller, run over every kind of link."""

from __future__ import annotations

import random
import time

import pytest
from far_ends import DEAF, FLOOD, QUIT
from pairs import BLOCKING, CLOSABLE, KINDS, LIMITS

from protobench.links import Framing, LinkClosed, PeerClosed, SendStalled

MS = 1_000_000
PATIENCE_NS = 2_000 * MS
ALL = [*KINDS, "impaired memory", "impaired tcp", "impaired udp", "impaired zmq+tcp"]


@pytest.fixture(params=ALL)
def link(request, connect):
    return connect(request.param)


def take(link, count_bytes=None, count_chunks=None):
    """Chunks until so many bytes or chunks have come; fails when they do not."""
    chunks = []
    deadline_ns = link.clock.now_ns() + PATIENCE_NS
    while sum(len(chunk.data) for chunk in chunks) < (count_bytes or 0) or len(chunks) < (count_chunks or 0):
        chunk = link.receive(deadline_ns)
        assert chunk is not None, f"only {chunks!r}"
        chunks.append(chunk)
    return chunks


def test_what_is_sent_arrives_whole_and_in_order(link):
    rng = random.Random(7)
    units = [rng.randbytes(rng.randrange(1, 200)).replace(b"\0", b"\1") + b"\0" for _ in range(100)]
    arrived = []
    for unit in units:
        link.send(unit)
        arrived += take(link, count_bytes=len(unit))
    if link.framing is Framing.STREAM:
        assert b"".join(chunk.data for chunk in arrived) == b"".join(units)
    else:
        assert [chunk.data for chunk in arrived] == units


def test_several_units_in_one_send_keep_their_order_and_edges(link):
    units = [bytes([number]) * number + b"\0" for number in range(1, 60)]
    link.send(*units)
    if link.framing is Framing.STREAM:
        assert b"".join(chunk.data for chunk in take(link, sum(map(len, units)))) == b"".join(units)
    else:
        assert [chunk.data for chunk in take(link, count_chunks=len(units))] == units


def test_64_kib_in_many_chunks(link):
    rng = random.Random(8)
    units = [rng.randbytes(1023).replace(b"\0", b"\1") + b"\0" for _ in range(64)]
    for unit in units:
        link.send(unit)
    assert b"".join(chunk.data for chunk in take(link, 64 * 1024)) == b"".join(units)


def test_an_empty_unit_is_nothing_on_a_stream_and_a_unit_elsewhere(link):
    link.send()
    link.send(b"")
    link.send(b"after\0")
    chunks = take(link, count_bytes=6)
    expected = [b"after\0"] if link.framing is Framing.STREAM else [b"", b"after\0"]
    assert [chunk.data for chunk in chunks] == expected


def test_stamps_never_go_back_and_lie_between_send_and_now(link):
    last_ns = link.clock.now_ns()
    for number in range(50):
        sent_ns = link.send(b"unit %d\0" % (number + 1))
        assert sent_ns >= last_ns
        (chunk, *more) = take(link, count_bytes=len(b"unit %d\0" % (number + 1)))
        last_ns = (more or [chunk])[-1].time_ns
        assert sent_ns - 50_000_000 * (not link.virtual) <= chunk.time_ns <= last_ns <= link.clock.now_ns()


@pytest.mark.parametrize("wait_us", [0, 300, 1_700, 30_000])
def test_a_deadline_is_kept(link, wait_us):
    link.receive(link.clock.now_ns())  # whatever the far end says at its start
    late_us = []
    for _ in range(5):
        deadline_ns = link.clock.now_ns() + wait_us * 1000
        assert link.receive(deadline_ns) is None
        late_us.append((link.clock.now_ns() - deadline_ns) / 1000)
    assert min(late_us) >= 0, "returned before the deadline"
    assert min(late_us) <= (0 if link.virtual else 50_000), late_us  # a busy machine is late, a poll interval later


def test_a_deadline_long_past_does_not_wait_but_takes_what_is_there(link):
    started = time.monotonic()
    assert link.receive(-1) is None
    assert link.receive(0) is None
    assert time.monotonic() - started < 0.5
    link.send(b"hello\0")
    arrived = b""
    while arrived != b"hello\0":
        assert time.monotonic() - started < 2
        chunk = link.receive(0)
        arrived += chunk.data if chunk else b""


def test_closing_twice_is_closing_once_and_a_closed_link_is_not_used(link):
    link.close()
    link.close()
    with pytest.raises(LinkClosed, match="open a new one"):
        link.receive(0)
    with pytest.raises(LinkClosed, match="open a new one"):
        link.send(b"x\0")
    with pytest.raises(LinkClosed, match="open a new one"):
        link.settle(0)


def test_settle_ends_with_nothing_held_back(link):
    link.send(b"settled\0")
    assert link.settle(link.clock.now_ns() + PATIENCE_NS)
    assert take(link, count_bytes=8)[-1].data.endswith(b"\0")


@pytest.mark.parametrize("kind", [*CLOSABLE, "impaired tcp", "impaired udp"])
def test_a_far_end_that_closes_is_reported_each_time(connect, kind):
    link = connect(kind)
    link.send(b"last words\0")
    take(link, count_bytes=11)
    with pytest.raises(PeerClosed) as caught:  # noqa: PT012 - which of them meets the end is a matter of time
        link.send(QUIT)
        deadline_ns = link.clock.now_ns() + PATIENCE_NS
        while link.clock.now_ns() < deadline_ns:
            link.receive(link.clock.now_ns() + 20 * MS)
            if kind.endswith("udp"):
                link.send(b"are you there?\0")  # only a refused datagram tells
    assert link.name in str(caught.value)
    with pytest.raises(PeerClosed):  # noqa: PT012 - as above
        for _ in range(20):
            link.send(b"and now?\0")
            link.receive(link.clock.now_ns() + 20 * MS)


# Not over UDP, which has no end; not over a pty, where the system throws away what was not read.
@pytest.mark.parametrize("kind", ["run", "tcp", "zmq+tcp", "zmq+ipc", "serial-socket", "impaired tcp"])
def test_what_came_before_the_end_is_taken_before_the_end_is_told(connect, kind):
    link = connect(kind)
    words = b"".join(b"word %d\0" % number for number in range(1, 200))
    link.send(words)
    time.sleep(0.1)
    link.send(QUIT)
    time.sleep(0.1)
    arrived = b""
    with pytest.raises(PeerClosed):  # noqa: PT012 - at some time
        while True:
            chunk = link.receive(link.clock.now_ns() + PATIENCE_NS)
            assert chunk is not None
            arrived += chunk.data
    assert arrived == words


@pytest.mark.parametrize("kind", BLOCKING)
def test_a_far_end_that_does_not_read_stalls_a_send_for_a_bounded_time(connect, kind):
    link = connect(kind)
    link.send(DEAF)
    started = time.monotonic()
    with pytest.raises(SendStalled, match=r"did not take it within 0\.4 s"):
        link.send(bytes(32 << 20))
    assert 0.35 < time.monotonic() - started < 1.5


@pytest.mark.parametrize("kind", KINDS)
def test_a_flood_is_bounded_and_what_it_cost_is_counted(connect, kind):
    link = connect(kind)
    link.send(FLOOD)
    deadline_ns = link.clock.now_ns() + 300 * MS
    received = 0
    while link.clock.now_ns() < deadline_ns:
        chunk = link.receive(deadline_ns)
        received += len(chunk.data) if chunk else 0
        held = link._inbox._held_bytes
        assert held <= LIMITS.inbox_bytes
    assert received > 1_000


@pytest.mark.parametrize("kind", ["memory", "lockstep", "run", "tcp", "serial", "udp"])
def test_a_flood_during_sends_is_discarded_and_counted(connect, kind):
    link = connect(kind)
    link.send(FLOOD)
    time.sleep(0.3)
    if link.virtual:
        link.send(FLOOD)
    if kind in BLOCKING:
        # It never reads again. All that while we read, and throw away, so as not to be what blocks it.
        with pytest.raises(SendStalled):
            link.send(bytes(32 << 20))
    for _ in range(2000):
        link.receive(link.clock.now_ns())
    if kind == "udp":  # the system tells what it lost with the next datagram
        link.send(b"one more\0")
        take(link, count_bytes=9)
    assert link.discarded.chunks > 0
    assert link.discarded.bytes > 0 or kind == "udp"
    assert link._inbox._held_bytes <= LIMITS.inbox_bytes
