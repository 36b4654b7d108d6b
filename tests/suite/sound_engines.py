"""Sound modules that use other freedoms of the contract than the emulated module does."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import Any

import msgpack

from emulator.engine import ModuleEngine
from emulator.motion import Motion
from emulator.outbox import Make, Outbox
from protobench.contract import load_contract
from protobench.wire import Frame, load_codec, stuff

CONTRACT = load_contract()
CODEC = load_codec(CONTRACT)
PRIVATE_KEY, PRIVATE_KIND = 121, 0xF5
BODY_ROOM, PAIRS_ROOM = 200, 31
Fields = dict[int, Any]


def _frames(chunk: bytes) -> Iterator[tuple[Frame, Fields]]:
    for unit in CODEC.split_part(b"\0" + chunk):
        assert isinstance(unit, bytes)
        frame = CODEC.frames.unpack(unit)
        assert isinstance(frame, Frame)
        yield frame, msgpack.unpackb(frame.body, strict_map_key=False, use_list=False)


def _block(frame: Frame, kind: int, fields: Fields) -> bytes:
    body = msgpack.packb({key: fields[key] for key in sorted(fields)})
    packed = CODEC.frames.pack(
        kind,
        body,
        source=frame.source,
        destination=frame.destination,
        session=frame.session,
        number=frame.number,
    )
    return stuff(packed) + b"\0"


class PrivateModule(ModuleEngine):
    """Speaks of its own besides: private keys in what it sends, a private kind after it. Outside the verdict."""

    def take_output(self) -> list[bytes]:
        return [self._extended(chunk) for chunk in super().take_output()]

    def _extended(self, chunk: bytes) -> bytes:
        extended = b""
        for frame, fields in _frames(chunk):
            if len(frame.body) < BODY_ROOM and len(fields) < PAIRS_ROOM:
                fields[PRIVATE_KEY] = b"own"
            extended += _block(frame, frame.kind, fields) + _block(frame, PRIVATE_KIND, {})
        return extended or chunk


class SpelledOutModule(ModuleEngine):
    """Sends fields that hold their default, which the emulated module leaves out."""

    def take_output(self) -> list[bytes]:
        return [self._spelled_out(chunk) for chunk in super().take_output()]

    def _spelled_out(self, chunk: bytes) -> bytes:
        blocks = b""
        for frame, fields in _frames(chunk):
            for spec in CODEC.kinds_by_code[frame.kind].spec.fields:
                if spec.default is not None:
                    fields.setdefault(spec.key, spec.default)
            blocks += _block(frame, frame.kind, fields)
        return blocks or chunk


class FillModule(ModuleEngine):
    """Sends fill around its frames."""

    def take_output(self) -> list[bytes]:
        return [b"\0\0" + chunk + b"\0\0\0" for chunk in super().take_output()]


class UnsteadyOutbox(Outbox):
    """Lets each unicast answer wait for another time, in order all the same."""

    __slots__ = ("_draw_us", "last_us")

    def __init__(self, capacity: int, many_capacity: int, draw_us: Callable[[], int]) -> None:
        super().__init__(capacity, many_capacity)
        self._draw_us = draw_us
        self.last_us = 0

    def put(self, due_us: int, make: Make) -> int:
        self.last_us = max(self.last_us, due_us + self._draw_us())
        return super().put(self.last_us, make)


class UnsteadyModule(ModuleEngine):
    """Takes another time for each answer and each motion, within what it declares."""

    def _start(self, cause: str) -> None:
        super()._start(cause)
        longest_us = 1000 * self.config.declared_receipt_ms - self.config.receipt_delay_us
        self.outbox = UnsteadyOutbox(
            self.config.answers, self.config.sessions, lambda: self.rng.randrange(longest_us)
        )

    def _get_ready(self, motion: Motion) -> None:
        super()._get_ready(motion)
        run = self.motions.run
        if run is not None and run.motion is motion:
            duration_ms = self.rng.randint(run.config.typical_ms, run.config.longest_ms)
            run.config = run.config.model_copy(update={"typical_ms": duration_ms})

    def _form(self, motions: list[Motion]) -> None:
        super()._form(motions)
        for motion in motions:
            if isinstance(self.outbox, UnsteadyOutbox) and self.outbox.left < motion.answer:
                motion.next_us = self.outbox.last_us


class PollingModule(ModuleEngine):
    """Looks at its timers only every 9 ms, as a main loop does; what arrives is taken at once."""

    TICK_US = 9000

    def next_deadline_us(self) -> int | None:
        due_us = super().next_deadline_us()
        return None if due_us is None else -(-due_us // self.TICK_US) * self.TICK_US


ENGINES: dict[str, type[ModuleEngine]] = {
    "private-ranges": PrivateModule,
    "defaults-spelled-out": SpelledOutModule,
    "fill-between-frames": FillModule,
    "unsteady": UnsteadyModule,
    "polling": PollingModule,
}
