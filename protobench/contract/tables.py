"""Models of the smaller files: index, limits, reasons, faults, capabilities, clauses, errors, notes."""

from __future__ import annotations

from typing import Annotated, Any, Literal

import pydantic as pd

from protobench.contract.base import U8, U16, Model, Name, Natural, Positive, Text

AreaCode = Annotated[str, pd.StringConstraints(pattern=r"^[A-Z]{3}$")]
ClauseId = Annotated[str, pd.StringConstraints(pattern=r"^[A-Z]{3}-[0-9]{2}$")]
DropStage = Literal["block", "frame", "address", "kind", "room"]
RefusalStage = Literal["version", "history", "form", "fence", "capability", "range", "state", "time", "queue"]


class About(Model):
    """What the contract is."""

    name: Text
    major: Annotated[int, pd.Field(ge=1, le=255)]
    minor: U8
    status: Literal["draft", "current", "superseded"]
    majors_supported: tuple[U8, ...]
    purpose: Text


class FileEntry(Model):
    """One file of the contract."""

    name: Text
    holds: Text


class IndexFile(Model):
    """``contract.toml``."""

    contract: About
    file: tuple[FileEntry, ...]


class Limit(Model):
    """A time, size or rate; ``min`` and ``max`` are equal when the contract fixes it."""

    name: Name
    unit: Literal["ms", "us", "1"]
    min: int
    max: int
    text: Text
    reason: Text

    @pd.model_validator(mode="before")
    @classmethod
    def _one_value_is_both_ends(cls, data: Any) -> Any:
        if isinstance(data, dict) and "value" in data:
            if "min" in data or "max" in data:
                raise ValueError("a limit has either a value, or min and max")
            data = {key: value for key, value in data.items() if key != "value"} | dict.fromkeys(
                ("min", "max"), data["value"]
            )
        return data

    @pd.model_validator(mode="after")
    def _ends_in_order(self) -> Limit:
        if self.min > self.max:
            raise ValueError(f"{self.name}: min {self.min} is above max {self.max}")
        return self

    @property
    def is_fixed(self) -> bool:
        """Whether there is only one value."""
        return self.min == self.max

    @property
    def value(self) -> int:
        """The one value; ValueError for a range."""
        if not self.is_fixed:
            raise ValueError(f"limit {self.name} is a range, {self.min}..{self.max}")
        return self.min


class LimitsFile(Model):
    """``limits.toml``."""

    limit: tuple[Limit, ...]


class Drop(Model):
    """A reason for dropping a frame; the order of the rows is the order of checking."""

    name: Name
    number: Annotated[int, pd.Field(ge=1, le=16)]
    stage: DropStage
    text: Text


class Refusal(Model):
    """A row of the refusal table; a reason with several rows tells them apart by ``row``."""

    name: Name
    number: Annotated[int, pd.Field(ge=1, le=255)]
    stage: RefusalStage
    row: Name | None = None
    carries: tuple[Name, ...] = ()
    silent: bool = False
    text: Text


class ReasonsFile(Model):
    """``reasons.toml``."""

    drop: tuple[Drop, ...] = pd.Field(min_length=1)
    refusal: tuple[Refusal, ...] = pd.Field(min_length=1)


class Fault(Model):
    """A fault code; ``class_`` and ``severity`` are names of the enumerations fault_class and severity."""

    name: Name
    code: Annotated[U16, pd.Field(ge=1, lt=0x8000)]
    class_: Name = pd.Field(alias="class")
    severity: Name
    value_unit: Text
    text: Text


class FaultsFile(Model):
    """``faults.toml``."""

    fault: tuple[Fault, ...]


class Capability(Model):
    """What a module may declare; ``number`` is its bit in description.capabilities."""

    name: Name
    number: Annotated[int, pd.Field(ge=0, le=31)]
    text: Text


class Item(Model):
    """An item of the conformance statement that follows from the description."""

    name: Name
    text: Text


class Profile(Model):
    """A named set of capabilities."""

    name: Name
    text: Text
    capabilities: tuple[Name, ...]


class Size(Model):
    """How many places a module has at least, and the memory that each costs in bytes."""

    name: Name
    min: Positive
    bytes_each: Positive
    text: Text


class CapabilitiesFile(Model):
    """``capabilities.toml``."""

    capability: tuple[Capability, ...]
    item: tuple[Item, ...]
    profile: Profile
    size: tuple[Size, ...]


class Area(Model):
    """A part of the contract that clauses belong to."""

    code: AreaCode
    title: Text


class Clause(Model):
    """One normative sentence. ``needs``: condition under which it applies, see ``condition``."""

    id: ClauseId
    area: AreaCode
    level: Literal["required", "recommended"]
    subject: Literal["module", "controller", "sender"]
    observable: bool
    needs: Text | None = None
    text: Text
    reason: Text | None = None


class ClausesFile(Model):
    """``clauses.toml``."""

    area: tuple[Area, ...]
    clause: tuple[Clause, ...]


class CommunicationError(Model):
    """What can happen to a frame, and the clause areas that answer it, by measure."""

    name: Name
    text: Text
    answered_by: dict[Name, tuple[AreaCode, ...]]
    open: Text | None = None


class ErrorsFile(Model):
    """``errors.toml``."""

    measures: tuple[Name, ...]
    error: tuple[CommunicationError, ...]


class Note(Model):
    """Advice to implementers; nothing normative."""

    id: Name
    title: Text
    text: Text


class Step(Model):
    """One frame of a worked exchange. ``fields`` by name; bytes as hexadecimal digits."""

    from_: Literal["controller", "module"] = pd.Field(alias="from")
    kind: Name
    number: Natural = 0
    lost: bool = False
    fields: dict[Name, int | bool | str]
    note: Text


class Chart(Model):
    """A worked exchange."""

    title: Text
    text: Text
    step: tuple[Step, ...]


class NotesFile(Model):
    """``notes.toml``."""

    note: tuple[Note, ...]
    chart: tuple[Chart, ...]
