"""The whole wire of one contract: made once from its tables, shared by everyone who speaks it."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from protobench.contract import Contract, load_contract
from protobench.wire import tables
from protobench.wire.body import pack_body, unpack_body
from protobench.wire.crc import warn_when_slow
from protobench.wire.errors import Dropped
from protobench.wire.frames import FrameCodec
from protobench.wire.messages import Message, MessageKind, make_record
from protobench.wire.stream import StreamDecoder, split_part
from protobench.wire.stuffing import DELIMITER, stuff


class Codec:
    """Frames, bodies, messages and streams of one contract.

    ``kinds`` by name, ``kinds_by_code`` by code; ``records``: the named tuples of the contract's records;
    ``frames``: packs and unpacks bare frames. Making one takes some tens of milliseconds: use
    :func:`load_codec`.
    """

    def __init__(self, contract: Contract) -> None:
        warn_when_slow()
        self.contract = contract
        self.body_limits = tables.body_limits_of(contract)
        self.stream_limits = tables.stream_limits_of(contract)
        self.crc = tables.crc_of(contract)
        self.frames = FrameCodec(tables.layout_of(contract), self.crc)
        records = tables.records_of(contract)
        self.records = {name: make_record(spec) for name, spec in records.items()}
        kinds = [
            MessageKind(spec, self.frames, self.body_limits, self.records)
            for spec in tables.kinds_of(contract, records)
        ]
        self.kinds = {kind.name: kind for kind in kinds}
        self.kinds_by_code = {kind.code: kind for kind in kinds}

    def kind(self, name: str) -> MessageKind:
        """Return the kind with this name; KeyError when the contract has none."""
        return self.kinds[name]

    def new(self, name: str, **fields: object) -> Message:
        """Return a message of the named kind; KeyError for an unknown kind, TypeError for a wrong field."""
        return self.kinds[name].new(**fields)

    def unpack_body(self, body: bytes) -> dict[int, Any]:
        """Return any canonical body as a map, whatever its kind; raises BodyError."""
        return unpack_body(body, self.body_limits)

    def pack_body(self, values: Mapping[int, Any]) -> bytes:
        """Return the canonical body of any map, whatever its kind; raises EncodingError."""
        return pack_body(values, self.body_limits)

    def stuff(self, frame: bytes) -> bytes:
        """Return a bare frame as it stands in a stream: stuffed, with its delimiter."""
        return stuff(frame) + DELIMITER

    def stream_decoder(self) -> StreamDecoder:
        """Return a decoder for one direction of one stream."""
        return StreamDecoder(self.stream_limits)

    def split_part(self, part: bytes) -> list[bytes | Dropped]:
        """Return the bare frames and drops of one ZeroMQ message part."""
        return split_part(part, self.stream_limits)


_made: list[Codec] = []


def load_codec(contract: Contract | None = None) -> Codec:
    """Return the codec of a contract, by default of 1.0; the same one each time for the same contract."""
    if contract is None:
        contract = load_contract()
    for codec in _made:
        if codec.contract is contract:
            return codec
    codec = Codec(contract)
    _made.append(codec)
    del _made[:-8]
    return codec
