"""The contract as one object: its tables, and look-ups by name, number and id."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any, TypeVar

from protobench.contract.frame import Addresses, FrameFile
from protobench.contract.kinds import Enumeration, Kind, KindsFile, Record
from protobench.contract.states import StatesFile, StateTable
from protobench.contract.tables import (
    Area,
    CapabilitiesFile,
    Capability,
    Chart,
    Clause,
    ClausesFile,
    Drop,
    ErrorsFile,
    Fault,
    FaultsFile,
    IndexFile,
    Item,
    Limit,
    LimitsFile,
    Note,
    NotesFile,
    ReasonsFile,
    Refusal,
    Size,
)

REFUSAL_ENUM = "refusal"
Key = TypeVar("Key")
Value = TypeVar("Value")


@dataclass(frozen=True, slots=True)
class Files:
    """The files of one version, as read."""

    contract: IndexFile
    frame: FrameFile
    limits: LimitsFile
    kinds: KindsFile
    reasons: ReasonsFile
    states: StatesFile
    faults: FaultsFile
    capabilities: CapabilitiesFile
    clauses: ClausesFile
    errors: ErrorsFile
    notes: NotesFile


class Contract:
    """One version of the contract. Made by ``load_contract``; never changed.

    Look-ups raise KeyError that says what was looked for. Sequences are in the order of the files.
    """

    def __init__(self, files: Files) -> None:
        self.files = files
        about = files.contract.contract
        self.name = about.name
        self.major = about.major
        self.minor = about.minor
        self.version = f"{about.major}.{about.minor}"
        self.purpose = about.purpose
        self.frame: FrameFile = files.frame
        self.addresses: Addresses = files.frame.addresses
        self.kinds: tuple[Kind, ...] = files.kinds.kind
        self.records: Mapping[str, Record] = MappingProxyType(files.kinds.record)
        self.drops: tuple[Drop, ...] = files.reasons.drop
        self.refusals: tuple[Refusal, ...] = files.reasons.refusal
        self.faults: tuple[Fault, ...] = files.faults.fault
        self.capabilities: tuple[Capability, ...] = files.capabilities.capability
        self.items: tuple[Item, ...] = files.capabilities.item
        self.sizes: tuple[Size, ...] = files.capabilities.size
        self.areas: tuple[Area, ...] = files.clauses.area
        self.clauses: tuple[Clause, ...] = files.clauses.clause
        self.errors: ErrorsFile = files.errors
        self.notes: tuple[Note, ...] = files.notes.note
        self.charts: tuple[Chart, ...] = files.notes.chart
        self.states = StateTable(files.states)
        self.limits: Mapping[str, Limit] = _by("name", files.limits.limit)
        self.enums: Mapping[str, Enumeration] = MappingProxyType(
            {**files.kinds.enum, REFUSAL_ENUM: _refusal_enum(self.refusals)}
        )
        self._kinds = _by("name", self.kinds)
        self._codes = _by("code", self.kinds)
        self._ranges = dict(self.frame.kind_ranges.items())
        self._drops = _by("name", self.drops)
        self._drop_numbers = _by("number", self.drops)
        self._faults = _by("name", self.faults)
        self._fault_codes = _by("code", self.faults)
        self._capabilities = _by("name", self.capabilities)
        self._clauses = _by("id", self.clauses)

    def __repr__(self) -> str:
        return f"<{self.name} {self.version}>"

    # ------------------------------------------------------------ kinds

    def kind(self, name: str) -> Kind:
        """Return the message kind of this name."""
        return _found(self._kinds, name, "kind")

    def kind_by_code(self, code: int) -> Kind:
        """Return the message kind of this code."""
        return _found(self._codes, code, "kind of code")

    def kind_range(self, name: str) -> tuple[int, int]:
        """Return the first and last code of a range of ``frame.kind_ranges``."""
        return _found(self._ranges, name, "kind range")

    def enum_values(self, name: str) -> Mapping[str, int]:
        """Return the numbers of an enumeration, by name; ``refusal`` is the one of receipt.reason."""
        return MappingProxyType(_found(self.enums, name, "enumeration").values)

    def enum_names(self, name: str) -> Mapping[int, str]:
        """Return the names of an enumeration, by number."""
        return _found(self.enums, name, "enumeration").names

    def is_multicast(self, address: int) -> bool:
        """Whether the address is a group's or broadcast: "many" in the contract's words."""
        return self.addresses.is_multicast(address)

    # ------------------------------------------------------------ the other tables

    def limit(self, name: str) -> Limit:
        """Return the limit of this name."""
        return _found(self.limits, name, "limit")

    def drop(self, name: str) -> Drop:
        """Return the drop reason of this name."""
        return _found(self._drops, name, "drop reason")

    def drop_by_number(self, number: int) -> Drop:
        """Return the drop reason of this number."""
        return _found(self._drop_numbers, number, "drop reason of number")

    def refusal_rows(self, name: str) -> tuple[Refusal, ...]:
        """Return the rows of a refusal reason, in the order of judging."""
        rows = tuple(row for row in self.refusals if row.name == name)
        if not rows:
            raise KeyError(f"the contract has no refusal {name!r}")
        return rows

    def fault(self, name: str) -> Fault:
        """Return the fault of this name."""
        return _found(self._faults, name, "fault")

    def fault_by_code(self, code: int) -> Fault:
        """Return the fault of this code."""
        return _found(self._fault_codes, code, "fault of code")

    def capability(self, name: str) -> Capability:
        """Return the capability of this name."""
        return _found(self._capabilities, name, "capability")

    def clause(self, clause_id: str) -> Clause:
        """Return the clause of this id."""
        return _found(self._clauses, clause_id, "clause")

    @property
    def condition_names(self) -> frozenset[str]:
        """The names that a clause's condition can use."""
        return frozenset(row.name for row in self.capabilities) | {row.name for row in self.items}


def _refusal_enum(refusals: Iterable[Refusal]) -> Enumeration:
    """The enumeration of receipt.reason, by ascending number."""
    rows = sorted({(row.number, row.name) for row in refusals})
    values = {name: number for number, name in rows}
    return Enumeration(text="Why a request is refused (reasons.toml).", values=values)


def _by(attribute: str, rows: Iterable[Value]) -> Mapping[Any, Value]:
    return MappingProxyType({getattr(row, attribute): row for row in rows})


def _found(table: Mapping[Key, Value], key: Key, what: str) -> Value:
    try:
        return table[key]
    except KeyError:
        raise KeyError(f"the contract has no {what} {key!r}") from None
