"""Random messages and damaged bytes for the wire tests, from a generator that the caller seeds."""

from __future__ import annotations

import random
from typing import Any

import msgpack

from protobench.wire import Codec, Message, MessageKind
from protobench.wire.specs import FieldSpec, FieldType, Presence


def random_message(kind: MessageKind, rng: random.Random) -> Message:
    """A good message; what may be absent is so half of the time; values favour the ends of their ranges."""
    fields = {
        spec.attribute: good_value(spec, rng)
        for spec in kind.spec.fields
        if spec.presence is Presence.ALWAYS or rng.random() < 0.5
    }
    if any(spec.presence is Presence.UNICAST for spec in kind.spec.fields):
        fields |= {
            s.attribute: good_value(s, rng) for s in kind.spec.fields if s.presence is Presence.UNICAST
        }
    return kind.new(**fields)


def good_value(spec: FieldSpec, rng: random.Random) -> Any:
    if spec.type is FieldType.ENUM:
        return rng.choice(sorted(spec.values))
    if spec.type in (FieldType.UINT, FieldType.INT):
        return integer(spec.low, spec.high, rng)
    if spec.type is FieldType.BOOL:
        return rng.random() < 0.5
    size = rng.randint(spec.size_min, spec.size_max)
    if spec.type is FieldType.BYTES:
        return rng.randbytes(size)
    if spec.type is FieldType.TEXT:
        return "".join(chr(rng.randint(0x20, 0x7E)) for _ in range(size))
    if spec.record is not None:
        return [[good_value(part, rng) for part in spec.record.fields] for _ in range(size)]
    return [integer(spec.low, spec.high, rng) for _ in range(size)]


def integer(low: int, high: int, rng: random.Random) -> int:
    edges = [low, high, 0, -1, -32, -33, -128, -129, -32768, -32769, 127, 128, 255, 256, 65535, 65536]
    value = rng.choice(edges) if rng.random() < 0.5 else rng.randint(low, high)
    return min(max(value, low), high)


_ODD: list[Any] = [
    None,
    1.0,
    0,
    -1,
    True,
    False,
    "a",
    "é",
    b"a",
    [],
    {},
    [1],
    {1: 2},
    1 << 40,
    -(1 << 40),
    "x" * 33,
]


def odd_body(kind: MessageKind, rng: random.Random) -> bytes:
    """A body that is nearly one of ``kind``: a value, a key or a byte of a good one is changed."""
    values: dict[Any, Any] = msgpack.unpackb(random_message(kind, rng).to_body(), strict_map_key=False)
    for _ in range(rng.randint(0, 2)):
        key = rng.choice([*values, rng.randint(0, 127)])
        if rng.random() < 0.3:
            values.pop(key, None)
        else:
            values[key] = rng.choice(_ODD)
    if rng.random() < 0.6:
        values = dict(sorted(values.items()))
    body = bytearray(msgpack.packb(values))
    if rng.random() < 0.4:
        place = rng.randrange(len(body))
        choice = rng.randrange(3)
        if choice == 0:
            body[place] = rng.choice([rng.randrange(256), 0xCC, 0xD0, 0xC0, 0x80, 0x90])
        elif choice == 1:
            body.insert(place, rng.choice([0xCC, 0xD0, 0x00, 0x01]))
        else:
            del body[place]
    return bytes(body)


def random_frame(codec: Codec, rng: random.Random) -> bytes:
    """A good bare frame around a random message, or around random bytes of any length that fits."""
    header = {name: rng.getrandbits(32) for name in ("source", "destination", "session", "number")}
    if rng.random() < 0.5:
        return random_message(rng.choice(list(codec.kinds.values())), rng).to_frame(**header)
    layout = codec.frames.layout
    body = rng.randbytes(rng.randint(0, layout.frame_size_max - layout.frame_size_min))
    return codec.frames.pack(rng.randrange(256), body, flags=rng.randrange(256), **header)


def in_pieces(data: bytes, rng: random.Random, longest: int) -> list[bytes]:
    """Cut ``data`` into pieces of 1 to ``longest`` bytes."""
    pieces = []
    at = 0
    while at < len(data):
        size = rng.randint(1, longest)
        pieces.append(data[at : at + size])
        at += size
    return pieces
