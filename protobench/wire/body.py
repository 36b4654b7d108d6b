"""Bodies as plain values: canonical MessagePack maps, both ways."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import msgpack

from protobench.wire.errors import BodyError, EncodingError
from protobench.wire.form import BodyLimits, check_form


def unpack_body(body: bytes, limits: BodyLimits) -> dict[int, Any]:
    """Return the map that ``body`` encodes, keys ascending; arrays come as tuples.

    Raises BodyError for anything that is not canonical; then nothing has been allocated for it.
    """
    check_form(body, limits)
    values: dict[int, Any] = msgpack.unpackb(body, strict_map_key=False, use_list=False)
    return values


def pack_body(values: Mapping[int, Any], limits: BodyLimits) -> bytes:
    """Return the canonical encoding of a map of integers, booleans, strings, bytes, sequences and maps.

    Maps are sorted. Raises EncodingError for what has no canonical encoding within the limits.
    """
    try:
        packed: bytes = msgpack.packb(_sorted(values))
        check_form(packed, limits)
    except BodyError as error:
        raise EncodingError("body", "", values, str(error)) from None
    except (TypeError, ValueError, OverflowError, RecursionError) as error:
        raise EncodingError("body", "", values, f"no MessagePack map can hold it ({error})") from None
    return packed


def _sorted(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {key: _sorted(value[key]) for key in sorted(value)}
    if isinstance(value, list | tuple):
        return [_sorted(item) for item in value]
    return value
