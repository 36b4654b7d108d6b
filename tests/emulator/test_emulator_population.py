"""Many modules behind one door, in virtual time and over a real socket."""

from __future__ import annotations

import threading
import time
from collections.abc import Iterator
from typing import Any

import pytest
import zmq
from module_driver import ANY_CONTROLLER, BROADCAST, CODEC, CONTRACT, read_frame

from emulator import population
from emulator import serve as serving
from emulator.population import ORIGINS_MAX, PEERS_MAX, Population
from emulator.serve import ServeError, serve
from protobench.wire import stuff

SOURCE, SESSION = 0x10001, 5


def request(kind: str, to: int, number: int, *, session: int = SESSION, **fields: Any) -> bytes:
    return CODEC.new(kind, **fields).to_frame(SOURCE, to, session, number)


class Door:
    """A population and its time."""

    def __init__(self, modules: int, seed: int = 1) -> None:
        self.population = Population(CONTRACT, modules, seed)
        self.now_us = 0
        self.wait(100)

    def wait(self, ms: float) -> list[tuple[bytes, Any]]:
        self.now_us += round(1000 * ms)
        self.population.advance(self.now_us)
        return [(peer, read_frame(self.now_us, data)) for peer, data in self.population.frames()]

    def take(self, peer: bytes, part: bytes, wait_ms: float = 10) -> list[tuple[bytes, Any]]:
        self.population.take(self.now_us, peer, part)
        return self.wait(wait_ms)


def test_one_answers_what_goes_to_one() -> None:
    door = Door(20)
    for address in (1, 7, 20):
        ((peer, seen),) = door.take(b"x", request("status", address, 1))
        assert (peer, seen.frame.source) == (b"x", address)
    assert door.take(b"x", request("status", 21, 1)) == []


def test_all_answer_what_goes_to_all() -> None:
    door = Door(50)
    seen = door.take(b"x", request("probe", BROADCAST, 1, answer_window=500), 600)
    assert sorted(one.frame.source for _, one in seen) == list(range(1, 51))
    assert len({one.message.hardware_id for _, one in seen}) == 50


def test_a_part_may_hold_many_frames_and_what_is_bad_costs_nothing_else() -> None:
    door = Door(3)
    blocks = [stuff(request("status", address, 1)) + b"\0" for address in (1, 2, 3)]
    part = b"\0" + blocks[0] + b"\x05\x01\x02\0" + blocks[1] + b"\0\0" + blocks[2] + b"\x03\x01"
    assert sorted(one.frame.source for _, one in door.take(b"x", part)) == [1, 2, 3]
    for address in (1, 2, 3):
        ((_, seen),) = door.take(b"x", request("read-counters", address, 2))
        counted = {
            drop.name: seen.message.drops[drop.number - 1]
            for drop in CONTRACT.drops
            if seen.message.drops[drop.number - 1]
        }
        assert counted == {"stuffing": 1, "half-frame": 1}


def test_what_nobody_takes_is_counted_by_all_and_reading_it_is_not() -> None:
    door = Door(4)
    for number in range(3):
        door.take(b"x", request("status", 99, number))
        door.take(b"x", b"\x01" * 24)
    for _ in range(2):
        for address in (1, 4):
            ((_, seen),) = door.take(b"x", request("read-counters", address, 9))
            drops = {drop.name: seen.message.drops[drop.number - 1] for drop in CONTRACT.drops}
            assert (drops["other-address"], drops["crc"]) == (3, 3)


def test_counters_of_what_nobody_takes_begin_anew_with_a_restart() -> None:
    door = Door(2)
    door.take(b"x", b"short")
    door.take(b"x", request("assist", 1, 1, epoch=1, op=3, cause=0), 100)
    door.take(b"x", b"short")
    told = []
    for address in (1, 2):
        ((_, seen),) = door.take(b"x", request("read-counters", address, 9))
        told.append(sum(seen.message.drops))
    assert told == [1, 2]


def test_answers_go_to_who_asked_and_events_to_where_the_session_spoke_last() -> None:
    door = Door(1)
    door.take(b"a", request("take-lease", 1, 1, epoch=1, lease=0, duration=30_000))
    door.take(b"a", request("reset", 1, 2, epoch=1, lease=1, halt_count=1))
    door.take(b"a", request("energize", 1, 3, epoch=1, lease=1))
    ((peer, receipt),) = door.take(b"a", request("move", 1, 4, epoch=1, lease=1, motion=3, magnitude=5))
    assert (peer, receipt.kind) == (b"a", "receipt")
    door.take(b"b", request("status", 1, 5))
    events = door.wait(150)
    assert [(peer, one.kind) for peer, one in events] == [(b"b", "outcome")]
    door.take(b"c", request("status", 1, 1, session=77))
    told = door.take(b"a", request("assist", 1, 6, epoch=1, op=3, cause=0), 100)
    assert sorted(peer for peer, one in told if one.kind == "started") == [b"a", b"b", b"c"]
    assert {one.frame.destination for _, one in told if one.kind == "started"} == {ANY_CONTROLLER}


def test_an_answer_goes_to_who_asked_though_another_spoke_in_its_session_meanwhile() -> None:
    door = Door(2)
    door.take(b"a", request("status", 1, 1), 0)
    door.take(b"a", request("probe", BROADCAST, 2, answer_window=500), 0)
    door.take(b"b", request("status", 2, 3), 0)
    told = door.wait(600)
    assert sorted((peer, one.kind, one.frame.number) for peer, one in told) == [
        (b"a", "presence", 2), (b"a", "presence", 2), (b"a", "status-report", 1), (b"b", "status-report", 3)
    ]  # fmt: skip


def test_a_halt_receipt_goes_to_who_halted_and_the_outcome_to_where_the_session_spoke_last() -> None:
    door = Door(1)
    door.take(b"a", request("take-lease", 1, 1, epoch=1, lease=0, duration=30_000))
    door.take(b"a", request("reset", 1, 2, epoch=1, lease=1, halt_count=1))
    door.take(b"a", request("energize", 1, 3, epoch=1, lease=1))
    door.take(b"a", request("move", 1, 4, epoch=1, lease=1, motion=3, magnitude=5))
    door.take(b"b", request("halt", 1, 5), 0)
    door.take(b"c", request("status", 1, 6), 0)
    told = door.wait(150)
    assert sorted((peer, one.kind) for peer, one in told) == [
        (b"b", "halt-receipt"), (b"c", "outcome"), (b"c", "status-report")
    ]  # fmt: skip


def test_an_answer_finds_who_asked_though_its_session_is_forgotten(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(population, "ORIGINS_MAX", 4)
    door = Door(1)
    door.take(b"a", request("status", 1, 1), 0)
    for session in range(100, 105):
        door.take(b"b", request("status", 99, 1, session=session), 0)
    ((peer, seen),) = door.wait(20)
    assert (peer, seen.frame.number) == (b"a", 1)


def test_a_new_address_is_found() -> None:
    door = Door(2)
    hardware_id = b"\xe0\0\0\0\0\0\0\x02"
    fields = {"hardware_id": hardware_id, "epoch": 1, "answer_window": 1}
    ((_, receipt),) = door.take(b"x", request("assign-address", BROADCAST, 1, address=500, **fields))
    assert receipt.frame.source == 500
    assert len(door.take(b"x", request("status", 500, 2))) == 1
    assert door.take(b"x", request("status", 2, 3)) == []
    # two modules with one address both hear what goes to it
    ((_, receipt),) = door.take(b"x", request("assign-address", BROADCAST, 4, address=1, **fields))
    assert len(door.take(b"x", request("status", 1, 5))) == 2


def test_what_peers_leave_behind_is_bounded() -> None:
    door = Door(1)
    for place in range(PEERS_MAX + 50):
        door.population.take(door.now_us, b"%d" % place, request("status", 99, 1, session=place))
    assert len(door.population._peers) == PEERS_MAX
    for place in range(ORIGINS_MAX + 50):
        door.population.take(door.now_us, b"x", request("status", 99, 1, session=place))
    assert len(door.population._origins) == ORIGINS_MAX


def test_junk_costs_the_same_for_many_modules_as_for_few() -> None:
    """A part full of bad units is counted once, not once a module."""
    door = Door(300)
    part = b"\0" + b"\x02\x01\0" * 20_000
    begin = time.process_time()
    door.take(b"x", part)
    assert time.process_time() - begin < 2
    ((_, seen),) = door.take(b"x", request("read-counters", 300, 1))
    assert max(seen.message.drops) == 20_000


def test_one_seed_gives_one_run() -> None:
    runs = []
    for _ in range(2):
        door = Door(10, seed=3)
        runs.append([
            [(peer, one.data) for peer, one in door.take(b"x", request("probe", BROADCAST, 1, answer_window=w), 7)]
            for w in range(100)
        ])  # fmt: skip
    assert runs[0] == runs[1]


# ---------------------------------------------------------------- over ZeroMQ


class Interrupted(BaseException):
    """Stands for Ctrl-C in the serving thread."""


@pytest.fixture
def served(monkeypatch: pytest.MonkeyPatch) -> Iterator[str]:
    """Three modules served by a thread; it is interrupted at the end, and must then be gone."""
    stop, bound, ready = threading.Event(), [], threading.Event()
    advance = Population.advance

    def advance_until_stopped(self: Population, now_us: int) -> None:
        if stop.is_set():
            raise Interrupted
        advance(self, now_us)

    def told(address: str) -> None:
        bound.append(address)
        ready.set()

    def run() -> None:
        with pytest.raises(Interrupted):
            serve("zmq+tcp://127.0.0.1:*", 3, 1, ready=told)

    monkeypatch.setattr(Population, "advance", advance_until_stopped)
    monkeypatch.setattr(serving, "IDLE_MS", 20)
    thread = threading.Thread(target=run, daemon=True)
    thread.start()
    assert ready.wait(10)
    yield bound[0].removeprefix("zmq+")
    stop.set()
    thread.join(10)
    assert not thread.is_alive()


@pytest.fixture
def dealer(served: str) -> Iterator[zmq.Socket[bytes]]:
    context = zmq.Context()
    socket = context.socket(zmq.DEALER)
    socket.setsockopt(zmq.LINGER, 0)
    socket.setsockopt(zmq.RCVTIMEO, 5000)
    socket.connect(served)
    yield socket
    socket.close(0)
    context.term()


def receive(socket: zmq.Socket[bytes], kind: str) -> Any:
    while True:
        seen = read_frame(0, socket.recv())
        if seen.kind == kind:
            return seen


def test_served_parts_are_answered(dealer: zmq.Socket[bytes]) -> None:
    dealer.send(request("status", 2, 1))
    assert receive(dealer, "status-report").frame.source == 2
    dealer.send_multipart([request("status", 1, 2), b"", b"\0", b"junk", request("status", 3, 3)])
    assert [receive(dealer, "status-report").frame.source for _ in range(2)] == [1, 3]
    segment = b"\0" + b"".join(stuff(request("status", 1, number)) + b"\0" for number in range(4, 104))
    dealer.send(segment)
    answered = 0
    while True:
        dealer.setsockopt(zmq.RCVTIMEO, 500)
        try:
            answered += receive(dealer, "status-report").frame.number >= 4
        except zmq.Again:
            break
    assert answered == 16, "as many as find room; the others are dropped, and counted"
    dealer.send(request("read-counters", 1, 200))
    counters = receive(dealer, "counters").message
    assert counters.drops[CONTRACT.drop("no-room").number - 1] == 84


def test_a_peer_that_sends_too_much_or_goes_away_harms_nobody(served: str, dealer: zmq.Socket[bytes]) -> None:
    with zmq.Context() as context, context.socket(zmq.DEALER) as hostile:
        hostile.setsockopt(zmq.LINGER, 0)
        hostile.connect(served)
        hostile.send(request("status", 1, 1))
        hostile.send(b"\x01" * 70_000)
    dealer.send(request("status", 2, 1))
    assert receive(dealer, "status-report").frame.source == 2


@pytest.mark.parametrize("bind", ["tcp://127.0.0.1:1", "zmq+tcp://127.0.0.1:70000", "zmq+tcp://nowhere"])
def test_what_cannot_be_served_is_said(bind: str) -> None:
    with pytest.raises(ServeError, match="cannot be served"):
        serve(bind, 1, 1)


def test_a_port_in_use_is_said_in_those_words(served: str) -> None:
    with pytest.raises(ServeError, match="in use by another program"):
        serve(f"zmq+{served}", 1, 1)
