"""A peer that means harm and knows the contract: noise and damaged frames, between commands that are in order.

It reads what the module says, so that epoch, lease number and halt count of its sound commands are right and a good
share of them is accepted: a module that only ever refuses shows little.
"""

from __future__ import annotations

import random
from collections import Counter
from collections.abc import Callable, Iterator
from typing import Any, ClassVar

import msgpack

from protobench.contract import load_contract
from protobench.wire import Frame, load_codec, stuff

CONTRACT = load_contract()
CODEC = load_codec(CONTRACT)
SOURCE, SESSION = 0x10001, 1
NUMBERS = [0, 1, 5, 127, 128, 500, 20_000, 65_536, 2**32 - 1, 2**32, 2**64 - 1, -1, -90_000]
VALUES = [*NUMBERS, True, "x", b"\0" * 8, [1], [], {0: 1}]
HINGE = CONTRACT.enum_values("motion")["hinge"]
COMMANDS = (
    "take-lease", "renew-lease", "release-lease", "energize", "de-energize", "move", "cancel", "reset", "clear-faults",
    "halt", "status", "describe", "read-counters", "read-motions", "read-faults", "read-groups", "probe",
    "telemetry-off",
)  # fmt: skip
TO_MOTION = ("read-faults", "take-lease", "clear-faults", "status", "reset", "energize", "move", "move")


def random_frames(rng: random.Random) -> Iterator[bytes]:
    """Bytes as they stand in a stream, delimiter included; of a peer that listens to nothing."""
    while True:
        body = bytes(rng.randrange(256) for _ in range(rng.randrange(40)))
        if rng.random() < 0.7:
            keys = sorted(rng.sample(range(12), rng.randrange(7)))
            body = msgpack.packb({key: rng.choice(VALUES) for key in keys})
        frame = CODEC.frames.pack(
            rng.choice([rng.randrange(256), rng.randrange(1, 0x30), 0x20, 0x60]),
            body,
            source=rng.choice([SOURCE, 0x10002, 1, 0, 0xFFFFFFFF, rng.randrange(1 << 32)]),
            destination=rng.choice([1, 1, 1, 0xFFFFFFFF, 0xF0000001, 2]),
            session=rng.choice([1, 2, rng.randrange(1 << 32)]),
            number=rng.choice([rng.randrange(64), rng.randrange(1 << 32)]),
            flags=rng.choice([0, 0, 0, 0, 1, 255]),
            version=rng.choice([1, 1, 1, 1, 2, 255]),
        )
        match rng.randrange(6):
            case 0:
                yield bytes(rng.randrange(256) for _ in range(rng.randrange(300)))
            case 1:
                yield damaged(rng, frame)
            case 2:
                yield stuff(frame)[: rng.randrange(1, 30)]
            case _:
                yield stuff(frame) + b"\0"


def damaged(rng: random.Random, frame: bytes) -> bytes:
    """A stuffed frame with one bit flipped."""
    block = bytearray(stuff(frame))
    block[rng.randrange(len(block))] ^= 1 << rng.randrange(8)
    return bytes(block) + b"\0"


class HostilePeer:
    """Makes bytes to send and reads what comes back; ``results`` counts receipts by result and command."""

    def __init__(self, rng: random.Random) -> None:
        self._rng = rng
        self._noise = random_frames(rng)
        self._decoder = CODEC.stream_decoder()
        self._number = rng.randrange(1 << 16)
        self._asked: dict[int, str] = {}
        self._sent: list[bytes] = []
        self._next: list[str] = []  # what an honest controller would send now
        self.epoch = self.lease = self.halt_count = 0
        self.latched: tuple[int, ...] = (1,)
        self._event = 0
        self.results: Counter[tuple[str, str]] = Counter()
        self.kinds: Counter[str] = Counter()

    # ------------------------------------------------------------ out

    def bytes_to_send(self) -> bytes:
        """The next bytes, sound or not; a block that was cut short is ended first."""
        draw = self._rng.random()
        if draw < 0.45:
            return next(self._noise)
        frame = self._copy() if draw < 0.55 else self._command()
        return b"\0" + stuff(frame) + b"\0" if draw < 0.97 else damaged(self._rng, frame)

    def pause_ns(self) -> int:
        """How long it listens before it sends again."""
        return 3_000_000 if self._next else self._rng.choice([0, 0, 1_000_000, 60_000_000])

    def _copy(self) -> bytes:
        return self._rng.choice(self._sent) if self._sent else self._command()

    def _command(self) -> bytes:
        if not self._next and self._rng.random() < 0.3:
            self._next = list(TO_MOTION)
        kind = self._next.pop(0) if self._next else self._rng.choice(COMMANDS)
        return self.make(kind, **self._FIELDS.get(kind, lambda _: {})(self))

    def make(self, kind: str, **fields: Any) -> bytes:
        """A sound request with the next number and what the module last told."""
        self._number = (self._number + 1) % (1 << 32)
        names = {field.name for field in CONTRACT.kind(kind).fields}
        fence = {"epoch": self.epoch, "lease": self.lease}
        fields = {**{name: value for name, value in fence.items() if name in names}, **fields}
        self._asked[self._number] = kind
        if len(self._asked) > 2000:
            del self._asked[next(iter(self._asked))]
        frame: bytes = CODEC.new(kind, **fields).to_frame(SOURCE, 1, SESSION, self._number)
        self._sent = [*self._sent[-30:], frame]
        return frame

    _FIELDS: ClassVar[dict[str, Callable[[HostilePeer], dict[str, Any]]]] = {
        "take-lease": lambda peer: {"duration": peer._rng.choice([1000, 30_000])},
        "reset": lambda peer: {"halt_count": peer.halt_count},
        "move": lambda peer: {"motion": HINGE, "magnitude": peer._rng.choice([1, 500, 2000])},
        "clear-faults": lambda peer: {"occurrences": peer.latched},
        "renew-lease": lambda peer: {"duration": peer._rng.choice([1000, 30_000])},
        "confirm": lambda peer: {"event": peer._event},
    }

    # ------------------------------------------------------------ in

    def read(self, data: bytes, time_ns: int) -> None:
        """Take what the module sent; raises AssertionError for anything that is no sound frame."""
        for unit in self._decoder.feed(data, time_ns):
            assert isinstance(unit, bytes), f"the module sent what is no frame: {unit}"
            frame = CODEC.frames.unpack(unit)
            assert isinstance(frame, Frame), f"the module sent an unsound frame: {frame}"
            kind = CODEC.kinds_by_code[frame.kind]
            self.kinds[kind.name] += 1
            self._learn(kind.name, frame, kind.decode(frame.body, False))

    def _learn(self, kind: str, frame: Frame, message: Any) -> None:
        for name in ("epoch", "lease", "halt_count"):
            value = getattr(message, name, None)
            if value is not None:
                setattr(self, name, value)
        if kind == "fault-page":
            latched = tuple(sorted(entry.occurrence for entry in message.entries if entry.latched))
            self.latched = latched or (1,)
        if kind == "outcome" and self._rng.random() < 0.8:
            self._next.insert(0, "confirm")
            self._event = message.event
        if kind == "receipt" and frame.destination == SOURCE and frame.session == SESSION:
            result = "accepted" if message.result == 0 else "refused"
            self.results[self._asked.pop(frame.number, "noise"), result] += 1
