"""Models of ``kinds.toml``: enumerations, records, message kinds and their fields."""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType
from typing import Any, Literal, Self

import pydantic as pd

from protobench.contract.base import U8, Model, Name, Natural, Positive, Text

ScalarType = Literal["uint", "int", "enum"]
FieldType = Literal["uint", "int", "bool", "bytes", "text", "enum", "list", "records"]
KindClass = Literal["read", "command", "answer", "notice", "event"]
Fence = Literal["none", "take", "full", "many", "epoch"]

INTEGER_FIRST, INTEGER_LAST = -(2**63), 2**64 - 1

# What a field of each type must state, and what it may state besides.
_MUST: Mapping[str, frozenset[str]] = {
    "uint": frozenset({"min", "max", "unit"}),
    "int": frozenset({"min", "max", "unit"}),
    "bool": frozenset(),
    "bytes": frozenset({"size"}),
    "text": frozenset({"size_max"}),
    "enum": frozenset({"enum"}),
    "list": frozenset({"min", "max", "unit", "items_min", "items_max"}),
    "records": frozenset({"record", "items_max"}),
}
_SHAPE = frozenset({"min", "max", "unit", "size", "size_max", "enum", "items_min", "items_max", "record"})


class Enumeration(Model):
    """Named numbers."""

    text: Text
    values: dict[Name, Natural]

    @pd.field_validator("values")
    @classmethod
    def _numbers_once(cls, values: dict[str, int]) -> dict[str, int]:
        if not values:
            raise ValueError("an enumeration needs a value")
        for name, number in values.items():
            first = next(other for other, value in values.items() if value == number)
            if first != name:
                raise ValueError(f"{name} and {first} both have the number {number}")
        return values

    @property
    def names(self) -> Mapping[int, str]:
        """Name of each number."""
        return MappingProxyType({number: name for name, number in self.values.items()})


class Shape(Model):
    """Type and range of a value; which of the rest is given depends on the type. Sizes in bytes."""

    name: Name
    type: FieldType
    unit: Text | None = None
    min: int | None = pd.Field(default=None, ge=INTEGER_FIRST, le=INTEGER_LAST)
    max: int | None = pd.Field(default=None, ge=INTEGER_FIRST, le=INTEGER_LAST)
    enum: Name | None = None

    @pd.model_validator(mode="after")
    def _shape_fits_type(self) -> Self:
        given = {name for name in _SHAPE if getattr(self, name, None) is not None}
        must = _MUST[self.type]
        if missing := sorted(must - given):
            raise ValueError(f"{self.name}: type {self.type} needs {', '.join(missing)}")
        may = must | ({"items_min"} if self.type == "records" else set())
        if surplus := sorted(given - may):
            raise ValueError(f"{self.name}: type {self.type} has no {', '.join(surplus)}")
        if self.min is not None and self.max is not None and self.min > self.max:
            raise ValueError(f"{self.name}: min {self.min} is above max {self.max}")
        if self.type == "uint" and self.min is not None and self.min < 0:
            raise ValueError(f"{self.name}: min {self.min} of an unsigned integer is below 0")
        return self


class RecordField(Shape):
    """One place of a record."""

    type: ScalarType


class Record(Model):
    """A list of fixed length whose places have a meaning each."""

    text: Text
    fields: tuple[RecordField, ...]


class Field(Shape):
    """One field of a kind. ``required`` "unicast": in a frame to many it is not examined."""

    key: Natural
    required: Literal["always", "unicast", "optional"]
    default: int | bool | None = None
    size: Positive | None = None
    size_max: Positive | None = None
    items_min: Natural | None = None
    items_max: Positive | None = None
    record: Name | None = None
    text: Text

    @pd.model_validator(mode="after")
    def _default_fits(self) -> Self:
        if self.items_min is not None and self.items_max is not None and self.items_min > self.items_max:
            raise ValueError(f"{self.name}: items_min {self.items_min} is above items_max {self.items_max}")
        if self.default is None:
            return self
        if self.required != "optional":
            raise ValueError(f"{self.name}: only an optional field has a default")
        wanted: type[Any] = bool if self.type == "bool" else int
        if type(self.default) is not wanted or self.type not in ("bool", "uint", "int", "enum"):
            raise ValueError(f"{self.name}: default {self.default!r} is no {self.type}")
        if self.min is not None and self.max is not None and not self.min <= self.default <= self.max:
            raise ValueError(f"{self.name}: default {self.default} lies outside {self.min}..{self.max}")
        return self


class Kind(Model):
    """One message kind. ``answer``, ``many``, ``needs`` and ``fence`` as the head of the file says."""

    name: Name
    code: U8
    class_: KindClass = pd.Field(alias="class")
    answer: Name | None = None
    many: bool = False
    fence: Fence | None = None
    needs: Name | None = None
    text: Text
    fields: tuple[Field, ...]

    @pd.model_validator(mode="after")
    def _fits_class(self) -> Self:
        if (self.answer is not None) != self.is_request:
            raise ValueError(f"{self.name}: a read or a command has an answer, nothing else has")
        if (self.fence is not None) != (self.class_ == "command"):
            raise ValueError(f"{self.name}: a command has a fence, nothing else has")
        for what in ("key", "name"):
            seen: set[object] = set()
            for field in self.fields:
                if getattr(field, what) in seen:
                    raise ValueError(f"{self.name}: two fields have the {what} {getattr(field, what)!r}")
                seen.add(getattr(field, what))
        return self

    @property
    def is_request(self) -> bool:
        """Whether it is answered."""
        return self.class_ in ("read", "command")

    def field(self, name: str) -> Field:
        """Return the field of this name; KeyError when there is none."""
        for field in self.fields:
            if field.name == name:
                return field
        raise KeyError(f"{self.name} has no field {name!r}")


class KindsFile(Model):
    """``kinds.toml``."""

    enum: dict[Name, Enumeration]
    record: dict[Name, Record]
    kind: tuple[Kind, ...] = pd.Field(min_length=1)
