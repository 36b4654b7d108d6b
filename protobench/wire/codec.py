"""The whole wire of one contract: made once from its tables, shared by everyone who speaks it."""

from __future__ import annotations

from collections.abc import Mapping
from functools import lru_cache
from typing import Any

from protobench.contract import Contract, load_contract

from protobench.wire.body import pack_body, unpack_body
from protobench.wire.crc import warn_when_slow
from protobench.wire.errors import Dropped
from protobench.wire.frames import Frame, FrameCodec
from protobench.wire.messages import Message, MessageKind, make_record
from protobench.wire.stream import StreamDecoder, split_part
from protobench.wire.stuffing import DELIMITER, stuff

_NS_PER_MS = 1_000_000


class Wire:
    """Frames, bodies, messages and streams of one contract.

    ``kinds`` by name, ``kinds_by_code`` by code, ``records`` the named tuples of the contract's records,
    ``unpack_frame(bare)`` → Frame, or Dropped with reason too-long, too-short or crc. Making one takes some
    tens of milliseconds: use :func:`wire_for`.
    """

    def __init__(self, contract: Contract) -> None:
        warn_when_slow()
        self.contract = contract
        self.body_limits = _body_limits(contract)
        self.stream_limits = _stream_limits(contract)
        self.crc = _crc(contract)
        self.frames = FrameCodec(_layout(contract), self.crc)
        self.unpack_frame = self.frames.unpack
        records = {name: _record_spec(contract, name) for name in contract.records}
        self.records = {name: make_record(spec) for name, spec in records.items()}
        specs = [_kind_spec(contract, kind, records) for kind in contract.kinds]
        self.kinds = {spec.name: MessageKind(spec, self.body_limits, self.records) for spec in specs}
        self.kinds_by_code = {kind.code: kind for kind in self.kinds.values()}

    def pack_frame(
        self,
        message: Message,
        *,
        source: int,
        destination: int,
        session: int,
        number: int,
    ) -> bytes:
        """Return the bare frame that carries ``message``; raises EncodingError naming the field that cannot be sent."""
        kind = message.KIND
        return self.frames.pack(
            kind.code,
            kind.encode(message),
            source=source,
            destination=destination,
            session=session,
            number=number,
        )

    def check_length(self, frame: Frame) -> Dropped | None:
        """Return why a frame is dropped for its length field, or None. Asked after address, kind and version."""
        return self.frames.check_length(frame)

    def unpack_body(self, body: bytes) -> dict[int, Any]:
        """Return any canonical body as a map, whatever its kind; raises BodyError."""
        return unpack_body(body, self.body_limits)

    def pack_body(self, values: Mapping[int, Any]) -> bytes:
        """Return the canonical body of any map, whatever its kind; raises EncodingError."""
        return pack_body(values, self.body_limits)

    def stream_decoder(self) -> StreamDecoder:
        """Return a decoder for one direction of one stream."""
        return StreamDecoder(self.stream_limits)

    def split_part(self, part: bytes) -> list[bytes | Dropped]:
        """Return the bare frames and drops of one ZeroMQ message part."""
        return split_part(part, self.stream_limits)


def stream_block(frame: bytes) -> bytes:
    """Return a bare frame as it stands in a stream: stuffed, with its delimiter."""
    return stuff(frame) + DELIMITER


@lru_cache(maxsize=8)
def wire_for(version: str = "1.0") -> Wire:
    """Return the wire of a contract version; the same one at each call."""
    return Wire(load_contract(version))
