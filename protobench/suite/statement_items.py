"""The items of a conformance statement, from the contract's tables: names, types and ranges stand there alone."""

from __future__ import annotations

import functools
from collections.abc import Iterator, Mapping
from dataclasses import dataclass

from protobench.contract import Contract
from protobench.contract.kinds import Field, Kind

CHANGING = ("epoch", "lease")  # what describe tells that is no property of the build
LISTED = ("capabilities", "motions")  # stated by name, not as bits
IDENTITY = ("hardware_id", "build", "majors", "minor", "nature", "faces")
LIMITS = {
    "receipt_ms": "receipt_time",
    "starting_ms": "starting_time",
    "stop_ms": "stop_time",
    "longest_ms": "motion_time_longest",
}
TIMES_CLAUSE, TRUE_CLAUSE, MOTION_CLAUSE = "DSC-06", "DSC-01", "DSC-02"


@dataclass(frozen=True, slots=True)
class Item:
    """One item of a table of the form.

    ``type``: uint, int, enum, bytes or list, as in the contract. ``low`` and ``high``: least and greatest value, of
    each number of a list. ``values``: names of an enumeration. ``size``: bytes, or most numbers of a list.
    ``described``: the module tells it over the wire. ``limit``: the limit of the contract that bounds it.
    ``clause``: broken by a value out of range, or by a module that tells another.
    """

    name: str
    type: str
    text: str
    clause: str
    unit: str = ""
    low: int | None = None
    high: int | None = None
    values: tuple[str, ...] = ()
    size: int | None = None
    described: bool = True
    limit: str | None = None

    @property
    def range_words(self) -> str:
        """What may stand there, in words."""
        if self.type == "enum":
            return f"one of {', '.join(self.values)}"
        if self.type == "bytes":
            return f"{self.size} bytes, as {2 * (self.size or 0)} hexadecimal digits"
        unit = f" {self.unit}" if self.unit not in ("", "1") else ""
        high = "" if self.high is None else str(self.high)
        words = f"{self.low} or more" if not high else f"{self.low}..{high}"
        return f"at most {self.size} numbers, each {words}" if self.type == "list" else words + unit


@functools.cache
def item_tables(contract: Contract) -> Mapping[str, tuple[Item, ...]]:
    """The tables ``module``, ``sizes``, ``times`` and ``motion`` (one for each motion), with their items in order."""
    described = [f for f in contract.kind("description").fields if f.name not in (*CHANGING, *LISTED)]
    rest = [field for field in described if field.name not in IDENTITY]
    by_name = {field.name: field for field in described}
    addresses = contract.addresses
    address = Item(
        "address",
        "uint",
        "Address of the module.",
        "ADR-01",
        "",
        addresses.unicast_first,
        addresses.unicast_last,
    )
    return {
        "module": (address, *(_item(contract, by_name[name], TRUE_CLAUSE) for name in IDENTITY)),
        "sizes": (
            *(_item(contract, field, TIMES_CLAUSE) for field in rest if field.unit == "1"),
            *_undescribed_sizes(contract),
        ),
        "times": tuple(_item(contract, field, TIMES_CLAUSE) for field in rest if field.unit in ("ms", "us")),
        "motion": tuple(
            _item(contract, field, TIMES_CLAUSE if field.unit == "ms" else MOTION_CLAUSE)
            for field in contract.kind("motion-description").fields
            if field.name != "motion"
        ),
    }


def requests(contract: Contract) -> tuple[Kind, ...]:
    """The kinds of request that a module answers."""
    return tuple(kind for kind in contract.kinds if kind.is_request)


def _item(contract: Contract, field: Field, clause: str) -> Item:
    low, high, limit_name = field.min, field.max, LIMITS.get(field.name)
    least = {size.name: size.min for size in contract.sizes}.get(field.name)
    if least is not None and low is not None:
        low = max(low, least)
    if limit_name is not None and low is not None and high is not None:
        limit = contract.limit(limit_name)
        low, high = max(low, limit.min), min(high, limit.max)
    return Item(
        field.name,
        field.type,
        field.text,
        clause,
        field.unit or "",
        low,
        high,
        tuple(contract.enum_values(field.enum)) if field.enum else (),
        field.size if field.type == "bytes" else field.items_max,
        limit=limit_name,
    )


def _undescribed_sizes(contract: Contract) -> Iterator[Item]:
    """Sizes that the module does not tell: what waits for a stated start, and buffers."""
    (waiting,) = [field for field in contract.kind("status-report").fields if field.name == "scheduled"]
    yield Item(
        "scheduled", "uint", "Motions that can wait for a stated start; 0 without the capability.",
        TRUE_CLAUSE, "1", waiting.min, waiting.max, described=False,
    )  # fmt: skip
    told = {field.name for field in contract.kind("description").fields}
    for size in contract.sizes:
        if size.name not in told:
            yield Item(size.name, "uint", size.text, TIMES_CLAUSE, "1", size.min, described=False)
