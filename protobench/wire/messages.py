"""Message objects: one light class a kind, with the functions that turn it into a body and back."""

from __future__ import annotations

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
from protobench.wire.specs import KindSpec, Presence, RecordSpec, class_name

# Whatever unpacking, or looking into a body that is no map of the kind, can raise; the careful way says why.
_FAILURES = (ValueError, TypeError, LookupError, AttributeError, OverflowError, msgpack.UnpackException)

RecordClass = type[Any]


class Message:
    """Base of all message classes; fields are attributes named as in the contract, ``class`` being ``class_``.

    A field that is absent is its default, or None where it has none. Sequences are tuples, records named
    tuples, enumerations plain integers. Nothing is checked before the message is encoded.
    """

    __slots__ = ()
    KIND: ClassVar[MessageKind]

    if TYPE_CHECKING:

        def __getattr__(self, name: str) -> Any: ...

    def __repr__(self) -> str:
        fields = ", ".join(
            f"{spec.attribute}={getattr(self, spec.attribute)!r}" for spec in self.KIND.spec.fields
        )
        return f"{type(self).__name__}({fields})"

    def __eq__(self, other: object) -> bool:
        if type(self) is not type(other):
            return NotImplemented
        return all(
            getattr(self, spec.attribute) == getattr(other, spec.attribute) for spec in self.KIND.spec.fields
        )

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
    """One kind: its description, its class and its codec.

    ``encode(message)`` returns the canonical body and raises EncodingError; a field that equals its default
    is left out. ``decode(body, many=False)`` returns a message and raises BodyError or the first FieldError
    in the order of judging; ``many`` says that the frame went to a group or to all.
    """

    def __init__(self, spec: KindSpec, limits: BodyLimits, records: Mapping[str, RecordClass]) -> None:
        self.spec = spec
        self.name = spec.name
        self.code = spec.code
        self._limits = limits
        self._records = records
        self._fields = {field.attribute: field for field in spec.fields}
        self.message_class = self._make_class()
        self.encode: Callable[[Message], bytes]
        self.decode: Callable[..., Message]
        self._make_functions()

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

    def _careful_encode(self, message: Message) -> bytes:
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

    def _make_class(self) -> type[Message]:
        names: codegen.Namespace = {}
        init = codegen.build(
            codegen.init_source(self.spec.fields), names, "__init__", f"<message {self.name}>"
        )
        body = {
            "__slots__": tuple(self._fields),
            "__init__": init,
            "KIND": self,
            "__doc__": f"Message {self.name}.",
        }
        return type(class_name(self.name), (Message,), body)

    def _make_functions(self) -> None:
        packer = msgpack.Packer(autoreset=True)
        names: codegen.Namespace = {
            "pack": packer.pack,
            "unpack": msgpack.unpackb,
            "new": object.__new__,
            "Message": self.message_class,
            "records": self._records,
            "failures": _FAILURES,
            "careful_encode": self._careful_encode,
            "careful_decode": self._careful_decode,
        }
        origin = f"<message {self.name}>"
        self.encode = codegen.build(codegen.encode_source(self.spec, names), names, "encode", origin)
        self.decode = codegen.build(codegen.decode_source(self.spec, names), names, "decode", origin)


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
