"""A sound module that also speaks of its own: private keys in what it sends, private kinds after it."""

from __future__ import annotations

import msgpack

from emulator.engine import ModuleEngine
from protobench.wire import Frame, load_codec, stuff

CODEC = load_codec()
PRIVATE_KEY, PRIVATE_KIND = 121, 0xF5
BODY_ROOM, PAIRS_ROOM = 200, 31


class PrivateModule(ModuleEngine):
    """The emulated module; the private range lies outside the verdict."""

    def take_output(self) -> list[bytes]:
        return [self._extended(chunk) for chunk in super().take_output()]

    def _extended(self, chunk: bytes) -> bytes:
        extended = b""
        for unit in CODEC.split_part(b"\0" + chunk):
            assert isinstance(unit, bytes)
            frame = CODEC.frames.unpack(unit)
            assert isinstance(frame, Frame)
            body = msgpack.unpackb(frame.body, strict_map_key=False)
            if len(frame.body) < BODY_ROOM and len(body) < PAIRS_ROOM:
                body[PRIVATE_KEY] = b"own"
            for kind, fields in ((frame.kind, body), (PRIVATE_KIND, {})):
                extended += stuff(_packed(frame, kind, fields)) + b"\0"
        return extended or chunk


def _packed(frame: Frame, kind: int, fields: dict[int, object]) -> bytes:
    return CODEC.frames.pack(
        kind,
        msgpack.packb(fields),
        source=frame.source,
        destination=frame.destination,
        session=frame.session,
        number=frame.number,
    )
