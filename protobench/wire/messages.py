"""Message objects: one light class a kind, with the functions that turn it into a body and back."""

from __future__ import annotations

import re
import struct
from collections import namedtuple
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, ClassVar

import msgpack

from protobench.wire import codegen
from protobench.wire.body import unpack_body
from protobench.wire.errors import EncodingError, FieldError
from protobench.wire.examine import examine, has_type, in_range
from protobench.wire.form import BodyLimits
from protobench.wire.frames import FrameCodec
from protobench.wire.patterns import kind_pattern
from protobench.wire.specs import KindSpec, Presence, RecordSpec, class_name

# Whatever unpacking, or looking into a body that is no map of the kind, can raise; the careful way says why.
_FAILURES = (ValueError, TypeError, LookupError, AttributeError, OverflowError, struct.error)

RecordClass = type[Any]


class Message:
    """Base of all message classes; fields are attributes named as in the contract, ``class`` as ``class_``.

    A field that is absent is its default, or None where it has none. Sequences are tuples, records named
    tuples, enumerations plain integers. Nothing is checked before the message is encoded; a field that equals
    its default is then left out.
    """

    __slots__ = ()
    KIND: ClassVar[MessageKind]

    if TYPE_CHECKING:

        def __getattr__(self, name: str) -> Any: ...

        def to_body(self) -> bytes:
            """Return the canonical body; EncodingError names the field that cannot be sent."""

        def to_frame(self, source: int, destination: int, session: int, number: int) -> bytes:
            """Return the bare frame that carries this message; raises EncodingError."""

    def __repr__(self) -> str:
        fields = ", ".join(
            f"{spec.attribute}={getattr(self, spec.attribute)!r}" for spec in self.KIND.spec.fields
        )
        return f"{type(self).__name__}({fields})"

    def __eq__(self, other: object) -> bool:
        if type(self) is not type(other):
            return NotImplemented
        fields = self.KIND.spec.fields
        return all(getattr(self, spec.attribute) == getattr(other, spec.attribute) for spec in fields)

    __hash__ = None  # type: ignore[assignment]  # mutable


@dataclass(frozen=True, slots=True)
class Examined:
    """A canonical body, looked at in full.

    ``message``: what could be read, see :class:`protobench.wire.examine.Findings`; ``problems``: empty when
    the message is good, else what is wrong in the order of judging; ``ignored``: unknown keys that may be
    ignored.
    """

    message: Message
    problems: tuple[FieldError, ...]
    ignored: dict[int, Any]


class MessageKind:
    """One kind: its description, its message class and its decoder.

    ``decode(body, many=False)`` returns a message and raises BodyError or the first FieldError in the order
    of judging; ``many`` says that the frame went to a group or to all.
    """

    def __init__(
        self, spec: KindSpec, frames: FrameCodec, limits: BodyLimits, records: Mapping[str, RecordClass]
    ) -> None:
        self.spec = spec
        self.name = spec.name
        self.code = spec.code
        self._frames = frames
        self._limits = limits
        self._records = records
        self._fields = {field.attribute: field for field in spec.fields}
        self._names = self._names_in_view()
        self.message_class = self._make_class()
        self._names["Message"] = self.message_class
        self.decode: Callable[..., Message] = self._build(codegen.decode_source(spec), "decode")

    def __repr__(self) -> str:
        return f"MessageKind({self.name!r}, {self.code:#04x})"

    def new(self, **fields: object) -> Message:
        """Return a message with these fields; TypeError for an unknown name or a required one left out.

        Lists are taken for tuples, and rows of records may be any sequence. Values are checked when it is
        encoded.
        """
        return self.message_class(**{name: self._plain(name, value) for name, value in fields.items()})

    def examine(self, body: bytes, many: bool = False) -> Examined:
        """Read ``body`` in full whatever its fields hold; raises BodyError when it is not canonical."""
        findings = examine(self.spec, unpack_body(body, self._limits), many)
        message = object.__new__(self.message_class)
        for name, value in findings.values.items():
            setattr(message, name, self._plain(name, value))
        return Examined(message, findings.problems, findings.ignored)

    def _careful_decode(self, body: bytes, many: bool) -> Message:
        examined = self.examine(body, many)
        if examined.problems:
            raise examined.problems[0]
        return examined.message

    def _careful_body(self, message: Message) -> bytes:
        """Say which field cannot be sent. Integers of another type, such as an IntEnum's, are made plain."""
        values: dict[int, Any] = {}
        for spec in self.spec.fields:
            value = _plain_integers(self._plain(spec.attribute, getattr(message, spec.attribute)))
            if value is None and spec.presence is not Presence.ALWAYS:
                continue
            if not has_type(spec, value) or not in_range(spec, value):
                raise EncodingError(self.name, spec.name, value, f"wanted {spec.wanted}")
            if spec.presence is Presence.ALWAYS or value != spec.default:
                values[spec.key] = value
        packed: bytes = msgpack.packb(values)
        return packed

    def _plain(self, name: str, value: Any) -> Any:
        """Return a list as a tuple, and rows as the records they are, where that can be."""
        spec = self._fields.get(name)
        if spec is None or not isinstance(value, list | tuple):
            return value
        if spec.record is None:
            return tuple(value)
        record = self._records[spec.record.name]
        size = len(spec.record.fields)
        return tuple(
            record._make(row) if isinstance(row, list | tuple) and len(row) == size else row for row in value
        )

    def _careful_frame(
        self, message: Message, source: int, destination: int, session: int, number: int
    ) -> bytes:
        body = self._careful_body(message)
        return self._frames.pack(
            self.code, body, source=source, destination=destination, session=session, number=number
        )

    def _make_class(self) -> type[Message]:
        version = self._frames.layout.version
        namespace = {
            "__slots__": tuple(self._fields),
            "__doc__": f"Message {self.name}.",
            "__init__": self._build(codegen.init_source(self.spec.fields), "__init__"),
            "to_body": self._build(codegen.to_body_source(self.spec), "to_body"),
            "to_frame": self._build(codegen.to_frame_source(self.spec, version), "to_frame"),
            "KIND": self,
        }
        return type(class_name(self.name), (Message,), namespace)

    def _build(self, source: str, wanted: str) -> Any:
        return codegen.build(source, self._names, wanted, f"<message {self.name}>")

    def _names_in_view(self) -> codegen.Namespace:
        names: codegen.Namespace = {
            "pack": msgpack.Packer(autoreset=True).pack,
            "unpack": msgpack.unpackb,
            "match": re.compile(kind_pattern(self.spec), re.DOTALL).fullmatch,
            "new": object.__new__,
            "pack_header": self._frames.pack_header,
            "pack_check": self._frames.pack_check,
            "crc": self._frames.crc,
            "failures": _FAILURES,
            "careful_body": self._careful_body,
            "careful_frame": self._careful_frame,
            "careful_decode": self._careful_decode,
        }
        for field in self.spec.fields:
            if field.record is not None:
                names[f"rows_{field.attribute}"] = self._records[field.record.name]._make
        return names


def make_record(spec: RecordSpec) -> RecordClass:
    """Return a named tuple class for the rows of a record."""
    return namedtuple(class_name(spec.name), [field.attribute for field in spec.fields])


def _plain_integers(value: Any) -> Any:
    if isinstance(value, bool):
        return value
    if isinstance(value, int):
        return int(value)
    if type(value) is tuple:
        return tuple(_plain_integers(item) for item in value)
    if isinstance(value, tuple):
        return type(value)(*(_plain_integers(item) for item in value))
    return value
