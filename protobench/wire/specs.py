"""What the codec needs to know of a message kind, in the shape in which it needs it."""

from __future__ import annotations

import keyword
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from enum import StrEnum


class FieldType(StrEnum):
    """Types that a field can have; ``records`` is a list of fixed-length lists."""

    UINT = "uint"
    INT = "int"
    ENUM = "enum"
    BOOL = "bool"
    BYTES = "bytes"
    TEXT = "text"
    LIST = "list"
    RECORDS = "records"


class Presence(StrEnum):
    """When a field must be there; ``unicast`` fields are not examined in a frame to many."""

    ALWAYS = "always"
    UNICAST = "unicast"
    OPTIONAL = "optional"


NUMERIC = (FieldType.UINT, FieldType.INT, FieldType.ENUM)


@dataclass(frozen=True, slots=True)
class FieldSpec:
    """One field of a kind or of a record. In a record there is no key; it is the field's place.

    ``low`` and ``high`` bound an integer, or each integer of a list. ``values`` maps the numbers of an
    enumeration to their names. ``size_min`` and ``size_max`` bound what has a length: bytes, characters,
    items or records.
    """

    key: int
    name: str
    type: FieldType
    unit: str = "1"
    presence: Presence = Presence.ALWAYS
    default: object = None
    low: int = 0
    high: int = 0
    values: Mapping[int, str] = field(default_factory=dict)
    size_min: int = 0
    size_max: int = 0
    record: RecordSpec | None = None

    @property
    def attribute(self) -> str:
        """The field's name in Python."""
        return attribute_name(self.name)

    @property
    def wanted(self) -> str:
        """Type and range in words, for errors."""
        if self.type is FieldType.ENUM:
            return "one of " + ", ".join(f"{number} {name}" for number, name in sorted(self.values.items()))
        if self.type in NUMERIC:
            return f"an integer {self.low}..{self.high}"
        if self.type is FieldType.BOOL:
            return "true or false"
        size = f"{self.size_min}" if self.size_min == self.size_max else f"{self.size_min}..{self.size_max}"
        if self.type is FieldType.BYTES:
            return f"{size} bytes"
        if self.type is FieldType.TEXT:
            return f"{size} printable ASCII characters"
        if self.record is None:
            return f"{size} integers {self.low}..{self.high}"
        return f"{size} lists of ({', '.join(part.name for part in self.record.fields)})"


@dataclass(frozen=True, slots=True)
class RecordSpec:
    """A fixed-length list; its fields are integers."""

    name: str
    fields: Sequence[FieldSpec]


@dataclass(frozen=True, slots=True)
class KindSpec:
    """One message kind: its code, the class it belongs to, its fields by ascending key."""

    name: str
    code: int
    group: str
    fields: Sequence[FieldSpec]
    critical_first: int
    private_first: int

    def is_critical(self, key: int) -> bool:
        """Whether an unknown ``key`` must be understood."""
        return self.critical_first <= key < self.private_first


def attribute_name(name: str) -> str:
    """Return a contract name as a Python name: ``take-lease`` is ``take_lease``, ``class`` is ``class_``."""
    plain = name.replace("-", "_")
    return plain + "_" if keyword.iskeyword(plain) else plain


def class_name(name: str) -> str:
    """Return a contract name as a class name: ``take-lease`` is ``TakeLease``."""
    return "".join(part.capitalize() for part in name.replace("_", "-").split("-"))
