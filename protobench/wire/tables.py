"""From the contract's tables to what the codecs are made of."""

from __future__ import annotations

from collections.abc import Mapping

from protobench.contract import Contract
from protobench.contract import Field as ContractField
from protobench.contract import Kind as ContractKind
from protobench.contract import RecordField as ContractRecordField
from protobench.wire.crc import CrcFunction, make_crc
from protobench.wire.form import BodyLimits
from protobench.wire.frames import FrameLayout, HeaderField
from protobench.wire.specs import FieldSpec, FieldType, KindSpec, Presence, RecordSpec
from protobench.wire.stream import StreamLimits

_NS_PER_MS = 1_000_000


def crc_of(contract: Contract) -> CrcFunction:
    """Return the contract's check sequence."""
    check = contract.frame.check
    return make_crc(
        width=check.width,
        polynomial=check.polynomial,
        initial=check.initial,
        reflected=check.reflected,
        final_xor=check.final_xor,
    )


def layout_of(contract: Contract) -> FrameLayout:
    """Return the contract's frame layout."""
    layout = contract.frame.layout
    return FrameLayout(
        fields=tuple(HeaderField(field.name, field.offset, field.size) for field in layout.field),
        header_size=layout.header_size,
        check_size=layout.check_size,
        frame_size_min=layout.frame_size_min,
        frame_size_max=layout.frame_size_max,
        body_size_max=layout.body_size_max,
        version=layout.version,
    )


def body_limits_of(contract: Contract) -> BodyLimits:
    """Return the bounds of the contract's bodies."""
    body = contract.frame.body
    return BodyLimits(
        size_max=contract.frame.layout.body_size_max,
        depth_max=body.depth_max,
        pairs_max=body.pairs_max,
        items_max=body.items_max,
        string_size_max=body.string_size_max,
        binary_size_max=body.binary_size_max,
        key_max=body.key_last,
    )


def stream_limits_of(contract: Contract) -> StreamLimits:
    """Return the bounds of the contract's streams."""
    return StreamLimits(
        block_size_max=contract.frame.layout.stuffed_size_max,
        discard_gap_ns=int(contract.limit("half_frame_discard").value) * _NS_PER_MS,
    )


def records_of(contract: Contract) -> dict[str, RecordSpec]:
    """Return the contract's records by name."""
    return {
        name: RecordSpec(
            name, tuple(_record_field(contract, place, field) for place, field in enumerate(record.fields))
        )
        for name, record in contract.records.items()
    }


def kinds_of(contract: Contract, records: Mapping[str, RecordSpec]) -> list[KindSpec]:
    """Return the contract's message kinds, in its order."""
    return [_kind(contract, kind, records) for kind in contract.kinds]


def _kind(contract: Contract, kind: ContractKind, records: Mapping[str, RecordSpec]) -> KindSpec:
    body = contract.frame.body
    return KindSpec(
        name=kind.name,
        code=kind.code,
        group=kind.class_,
        fields=tuple(
            _field(contract, field, records) for field in sorted(kind.fields, key=lambda field: field.key)
        ),
        critical_first=body.critical_first,
        private_first=body.private_first,
    )


def _field(contract: Contract, field: ContractField, records: Mapping[str, RecordSpec]) -> FieldSpec:
    size_min, size_max = _sizes(field)
    return FieldSpec(
        key=field.key,
        name=field.name,
        type=FieldType(field.type),
        unit=field.unit or "1",
        presence=Presence(field.required),
        default=field.default,
        low=field.min or 0,
        high=field.max or 0,
        values=_enumeration(contract, field.enum),
        size_min=size_min,
        size_max=size_max,
        record=records[field.record] if field.record else None,
    )


def _record_field(contract: Contract, place: int, field: ContractRecordField) -> FieldSpec:
    return FieldSpec(
        key=place,
        name=field.name,
        type=FieldType(field.type),
        unit=field.unit or "1",
        low=field.min or 0,
        high=field.max or 0,
        values=_enumeration(contract, field.enum),
    )


def _sizes(field: ContractField) -> tuple[int, int]:
    """Return the least and greatest length of what has one."""
    if field.size is not None:
        return field.size, field.size
    if field.size_max is not None:
        return 0, field.size_max
    return field.items_min or 0, field.items_max or 0


def _enumeration(contract: Contract, name: str | None) -> Mapping[int, str]:
    return {} if name is None else contract.enum_names(name)
