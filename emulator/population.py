"""Several modules in one process behind one door: bare frames in with the peer they came from, frames out to peers.

Implements the contract's rules for ZeroMQ parts: answers go back to the peer that asked; events to the peer from which
the addressed (source, session) last sent a sound frame; what goes to any controller goes to every known peer.
"""

from __future__ import annotations

import heapq
import random
from collections import OrderedDict
from collections.abc import Sequence
from typing import TypeVar

from emulator.config import ModuleConfig
from emulator.engine import ModuleEngine
from emulator.storage import Storage
from protobench.contract import Contract
from protobench.wire import Dropped, Frame, load_codec

PEERS_MAX = 1024
ORIGINS_MAX = 65_536
HEAP_SHARE, HEAP_SPARE = 4, 1000  # deadlines that have moved are kept up to so many
Peer = bytes


class Population:
    """Modules with consecutive addresses. ``take`` parts, ``advance`` time, ``frames`` for peers.

    What peers can make it remember is bounded: peers and (source, session) origins, the ones unused longest go first.
    """

    def __init__(self, contract: Contract, modules: int, seed: int, first_address: int = 1) -> None:
        self._contract = contract
        self._codec = load_codec(contract)
        rng = random.Random(seed)
        alike = ModuleConfig()
        self._engines = [
            ModuleEngine(
                alike.at(first_address + place), Storage(), random.Random(rng.random()), contract
            )
            for place in range(modules)
        ]
        self._addresses = [engine.address for engine in self._engines]
        self._places: dict[int, list[int]] = {}
        for place, address in enumerate(self._addresses):
            self._places.setdefault(address, []).append(place)
        # What every module drops alike is counted here once; a module is told when something else reaches it.
        self._dropped: dict[str, int] = {}
        self._told: list[dict[str, int]] = [self._dropped] * modules
        self._peers: OrderedDict[Peer, None] = OrderedDict()
        self._origins: OrderedDict[tuple[int, int], Peer] = OrderedDict()
        self._due: list[int | None] = [engine.next_deadline_us() for engine in self._engines]
        self._heap: list[tuple[int, int]] = []
        self._rebuild()
        self._out: list[tuple[Peer, bytes]] = []

    def take(self, now_us: int, peer: Peer, part: bytes) -> None:
        """One message part of a peer arrived."""
        _remember(self._peers, peer, None, PEERS_MAX)
        for unit in self._codec.split_part(part):
            frame = unit if isinstance(unit, Dropped) else self._codec.frames.unpack(unit)
            if isinstance(frame, Dropped):
                self._drop_everywhere(frame.reason)
                continue
            assert isinstance(unit, bytes)
            _remember(self._origins, (frame.source, frame.session), peer, ORIGINS_MAX)
            places = self._addressed(frame)
            if not places:
                self._drop_everywhere("other-address")
            for place in places:
                self._tell_drops(place)
                self._engines[place].feed_frame(now_us, unit, peer)
                self._collect(place)

    def _addressed(self, frame: Frame) -> Sequence[int]:
        """Everyone hears what goes to many, and one what goes to one; nobody: it is dropped by all."""
        if self._contract.is_multicast(frame.destination):
            return range(len(self._engines))
        return tuple(self._places.get(frame.destination, ()))

    def _drop_everywhere(self, reason: str) -> None:
        self._dropped = {**self._dropped, reason: self._dropped.get(reason, 0) + 1}

    def _tell_drops(self, place: int) -> None:
        told = self._told[place]
        if told is not self._dropped:
            self._told[place] = self._dropped
            for reason, count in self._dropped.items():
                self._engines[place].count_drops(reason, count - told.get(reason, 0))

    def _note_address(self, place: int) -> None:
        """A module may have another address than before."""
        before, now = self._addresses[place], self._engines[place].address
        if now == before:
            return
        self._addresses[place] = now
        self._places[before].remove(place)
        if not self._places[before]:
            del self._places[before]
        self._places.setdefault(now, []).append(place)

    def next_deadline_us(self) -> int | None:
        while self._heap and self._due[self._heap[0][1]] != self._heap[0][0]:
            heapq.heappop(self._heap)  # a deadline that has moved since
        return self._heap[0][0] if self._heap else None

    def advance(self, now_us: int) -> None:
        """Do all that is due."""
        while (due_us := self.next_deadline_us()) is not None and due_us <= now_us:
            _, place = heapq.heappop(self._heap)
            self._tell_drops(place)
            self._engines[place].advance(now_us)
            self._due[place] = None
            self._collect(place)

    def frames(self) -> list[tuple[Peer, bytes]]:
        """Frames written since the last call, with the peer each goes to."""
        out, self._out = self._out, []
        return out

    def _rebuild(self) -> None:
        self._heap = [(due_us, place) for place, due_us in enumerate(self._due) if due_us is not None]
        heapq.heapify(self._heap)

    def _collect(self, place: int) -> None:
        engine = self._engines[place]
        self._note_address(place)
        deadline_us = engine.next_deadline_us()
        if deadline_us != self._due[place]:
            self._due[place] = deadline_us
            if deadline_us is not None:
                heapq.heappush(self._heap, (deadline_us, place))
            if len(self._heap) > HEAP_SHARE * len(self._engines) + HEAP_SPARE:
                self._rebuild()
        for data, asker in engine.take_frames():
            if asker is not None:
                self._out.append((asker, data))
                continue
            frame = self._codec.frames.unpack(data)
            assert isinstance(frame, Frame)
            if frame.destination == self._contract.addresses.any_controller:
                self._out += [(peer, data) for peer in self._peers]
                continue
            peer = self._origins.get((frame.destination, frame.session))
            if peer is not None:
                self._out.append((peer, data))


K = TypeVar("K")
V = TypeVar("V")


def _remember(table: OrderedDict[K, V], key: K, value: V, limit: int) -> None:
    """Note a key as the last used; beyond the limit the one used longest ago is forgotten."""
    table[key] = value
    table.move_to_end(key)
    while len(table) > limit:
        table.popitem(last=False)
