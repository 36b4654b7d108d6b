"""The contract's language as the raw tester speaks it: any frame out, sound or not; strict reading in."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import msgpack

from protobench.contract import Contract
from protobench.wire import Codec, Dropped, Frame, StreamDecoder, WireError, stuff


@dataclass(slots=True)
class Reading:
    """A frame and what it says. ``fields`` is None, and ``problem`` says why, where the body breaks the contract.

    ``told``: its words where they are not made of header and fields; the others are made when somebody reads them.
    """

    frame: Frame | None
    kind: str
    fields: dict[str, Any] | None
    problem: str
    told: str | None = None

    @property
    def words(self) -> str:
        """The frame in words."""
        if self.told is not None or self.frame is None:
            return self.told or ""
        shown = ", ".join(f"{field}={_shown(value)}" for field, value in (self.fields or {}).items())
        return f"{_head(self.frame, self.kind)} {{{shown}}}"


class Language:
    """Encodes whatever a case wants to send; decodes what a module sends, by the letter."""

    def __init__(self, contract: Contract, codec: Codec) -> None:
        self.contract = contract
        self.codec = codec
        self._keys = {kind.name: {field.name: field.key for field in kind.fields} for kind in contract.kinds}
        self._codes = {kind.name: kind.code for kind in contract.kinds}
        self._names = {kind.code: kind.name for kind in contract.kinds}
        self._enums: dict[tuple[str, str], dict[int, str]] = {}
        for kind in contract.kinds:
            for field in kind.fields:
                if field.enum is not None:
                    self._enums[kind.name, field.name] = {
                        number: name for name, number in contract.enum_values(field.enum).items()
                    }

    # ------------------------------------------------------------ out

    def code(self, kind: str) -> int:
        """The number of a kind."""
        return self._codes[kind]

    def keys(self, kind: str) -> dict[str, int]:
        """Key of each field of a kind, by name."""
        return self._keys[kind]

    def number_of(self, enum: str, name: str) -> int:
        """The number of an enumeration's value."""
        return self.contract.enum_values(enum)[name]

    def body(self, kind: str, fields: Mapping[Any, Any]) -> bytes:
        """A canonical body; names of fields, or plain keys, in any order. Values are not checked.

        Enumerations may be given by name.
        """
        keys = self._keys[kind]
        values: dict[int, Any] = {}
        for name, value in fields.items():
            key = name if isinstance(name, int) else keys[name]
            values[key] = self._value(kind, name, value)
        return canonical({key: values[key] for key in sorted(values)})

    def _value(self, kind: str, name: str | int, value: Any) -> Any:
        if not isinstance(value, str):
            return value
        names = self._enums.get((kind, str(name)))
        if names is None:
            return value
        for number, known in names.items():
            if known == value:
                return number
        raise ValueError(f"{kind}.{name} has no value {value!r}; it has {', '.join(names.values())}")

    def pack(self, code: int, body: bytes, **header: Any) -> bytes:
        """A bare frame; see ``FrameCodec.pack`` for the header's fields."""
        return self.codec.frames.pack(code, body, **header)

    def stuff(self, frame: bytes) -> bytes:
        """A bare frame stuffed, without its delimiter."""
        return stuff(frame)

    # ------------------------------------------------------------ in

    def stream_decoder(self) -> StreamDecoder:
        return self.codec.stream_decoder()

    def split_part(self, part: bytes) -> list[bytes | Dropped]:
        return self.codec.split_part(part)

    def split(self, data: bytes) -> list[bytes]:
        """The sound bare frames among raw bytes that were sent, ended by delimiters or not stuffed at all."""
        found = [unit for unit in self.codec.split_part(b"\0" + data) if isinstance(unit, bytes)]
        frames = [unit for unit in found if isinstance(self.unpack(unit), Frame)]
        if not frames and isinstance(self.unpack(data), Frame):
            return [data]
        return frames

    def unpack(self, data: bytes) -> Frame | Dropped:
        return self.codec.frames.unpack(data)

    def read(self, data: bytes) -> Reading:
        """A bare frame in words and fields; enumerations by name, absent fields left out."""
        frame = self.unpack(data)
        if isinstance(frame, Dropped):
            return Reading(None, "", None, f"{frame.reason}: {frame.detail}", f"dropped: {frame.reason}")
        name = self._names.get(frame.kind)
        if name is None:
            kind = f"0x{frame.kind:02x}"
            head = _head(frame, f"kind {kind}")
            return Reading(frame, kind, None, "a kind that the contract does not have", head)
        dropped = self.codec.frames.check_length(frame)
        if dropped is not None:
            return Reading(frame, name, None, f"{dropped.reason}: {dropped.detail}", _head(frame, name))
        known = self.codec.kind(name)
        try:
            message = known.decode(frame.body, self.contract.is_multicast(frame.destination))
        except WireError as error:
            told = f"{_head(frame, name)} {error}; body {frame.body.hex()}"
            return Reading(frame, name, None, str(error), told)
        fields = {
            spec.name: self._named(name, spec.name, value)
            for spec in known.spec.fields
            if (value := getattr(message, spec.attribute)) is not None
        }
        return Reading(frame, name, fields, "")

    def _named(self, kind: str, field: str, value: Any) -> Any:
        names = self._enums.get((kind, field))
        return value if names is None else names[value]


def canonical(value: Any) -> bytes:
    """MessagePack in its shortest form; map keys in the order given."""
    packed: bytes = msgpack.packb(value, use_bin_type=True)
    return packed


def _head(frame: Frame, kind: str) -> str:
    odd = (
        ""
        if frame.version == 1 and not frame.flags
        else f" version {frame.version} flags 0x{frame.flags:02x}"
    )
    return f"{kind} #{frame.number} 0x{frame.source:x} to 0x{frame.destination:x} session {frame.session:08x}{odd}"


def _shown(value: Any) -> str:
    if isinstance(value, bytes):
        return value.hex()
    if isinstance(value, tuple):
        return "[" + ", ".join(_shown(item) for item in value) + "]"
    return str(value)
