"""How long the canonical body of a kind can be, from the bounds of its fields."""

from __future__ import annotations

from protobench.contract.kinds import Field, Kind, Shape
from protobench.contract.model import Contract

# Bytes of an integer's shortest MessagePack encoding, by the first value that no longer fits.
_ABOVE_ZERO = ((2**7, 1), (2**8, 2), (2**16, 3), (2**32, 5))
_BELOW_ZERO = ((-(2**5), 1), (-(2**7), 2), (-(2**15), 3), (-(2**31), 5))
KEY_SIZE = 1


def integer_size(value: int) -> int:
    """Return the bytes of an integer."""
    if value >= 0:
        return next((size for bound, size in _ABOVE_ZERO if value < bound), 9)
    return next((size for bound, size in _BELOW_ZERO if value >= bound), 9)


def container_size(count: int) -> int:
    """Return the bytes of the header of a map or an array."""
    return 1 if count < 16 else 3


def longest_value(contract: Contract, field: Field) -> int:
    """Return the bytes of a field's longest value, its key not counted."""
    if field.type == "bool":
        return 1
    if field.size is not None:
        return 2 + field.size
    if field.size_max is not None:
        return (1 if field.size_max < 32 else 2) + field.size_max
    if field.items_max is None:
        return _longest_integer(contract, field)
    if field.record is None:
        item = _longest_integer(contract, field)
    else:
        places = contract.records[field.record].fields
        item = container_size(len(places)) + sum(_longest_integer(contract, place) for place in places)
    return container_size(field.items_max) + field.items_max * item


def longest_body(contract: Contract, kind: Kind) -> int:
    """Return the bytes of a kind's longest body: every field there, each at its longest."""
    fields = sum(KEY_SIZE + longest_value(contract, field) for field in kind.fields)
    return container_size(len(kind.fields)) + fields


def _longest_integer(contract: Contract, shape: Shape) -> int:
    if shape.enum is not None:
        return max(integer_size(number) for number in contract.enum_values(shape.enum).values())
    return max(integer_size(value) for value in (shape.min or 0, shape.max or 0))
