"""Models of ``frame.toml``: layout, check sequence, stuffing, addresses, kind ranges, body form, links."""

from __future__ import annotations

import itertools
from typing import Literal, Self

import pydantic as pd

from protobench.contract.base import U8, U32, Model, Name, Natural, Positive, Text

KindRange = tuple[U8, U8]


class HeaderField(Model):
    """One field of the frame's header; ``offset`` and ``size`` in bytes."""

    name: Name
    offset: Natural
    size: Positive
    text: Text
    reason: Text


class Layout(Model):
    """Sizes in bytes. ``body_size_max`` is what a sender of this version may use."""

    byte_order: Literal["big"]
    header_size: Positive
    check_size: Positive
    frame_size_min: Positive
    frame_size_max: Positive
    authenticator_reserve: Natural
    body_size_max: Positive
    stuffed_size_max: Positive
    version: U8
    field: tuple[HeaderField, ...]

    @pd.model_validator(mode="after")
    def _sizes_agree(self) -> Self:
        place = 0
        for field in self.field:
            if field.offset != place:
                raise ValueError(f"{field.name} stands at {field.offset}; the one before it ends at {place}")
            place += field.size
        expected = {
            "header_size": place,
            "frame_size_min": self.header_size + self.check_size,
            "body_size_max": self.frame_size_max - self.frame_size_min - self.authenticator_reserve,
            "stuffed_size_max": self.frame_size_max + self.frame_size_max // 254 + 1,
        }
        for name, value in expected.items():
            if getattr(self, name) != value:
                raise ValueError(f"{name} is {getattr(self, name)}; the other sizes give {value}")
        return self

    def offset(self, name: str) -> int:
        """Return the offset of a header field; KeyError when there is none of this name."""
        for field in self.field:
            if field.name == name:
                return field.offset
        raise KeyError(f"the header has no field {name!r}")


class Check(Model):
    """The check sequence, by the parameters of the CRC catalogue."""

    name: Text
    also_known_as: Text
    width: Literal[32]
    polynomial: U32
    initial: U32
    reflected: bool
    final_xor: U32
    check_value: U32
    byte_order: Literal["big"]
    covers: Text
    hamming_distance: Positive
    reason: Text


class Stuffing(Model):
    """How a frame stands in a stream."""

    name: Literal["COBS"]
    delimiter: U8
    reason: Text


class Addresses(Model):
    """First and last addresses of each range, and the single ones."""

    unassigned: U32
    unicast_first: U32
    unicast_last: U32
    group_first: U32
    group_last: U32
    any_controller: U32
    broadcast: U32
    reason: Text

    @pd.model_validator(mode="after")
    def _ranges_are_apart(self) -> Self:
        rising = [getattr(self, name) for name in type(self).model_fields if name != "reason"]
        if any(low >= high for low, high in itertools.pairwise(rising)):
            raise ValueError(f"the addresses must rise in the order of their keys, they are {rising}")
        return self

    def is_unicast(self, address: int) -> bool:
        """Whether the address can be one module's or one controller's."""
        return self.unicast_first <= address <= self.unicast_last

    def is_multicast(self, address: int) -> bool:
        """Whether the address is a group's or broadcast."""
        return self.group_first <= address <= self.group_last or address == self.broadcast


class KindRanges(Model):
    """First and last code of each class of kinds."""

    read: KindRange
    command: KindRange
    command_private: KindRange
    answer: KindRange
    notice: KindRange
    event: KindRange
    reserved: KindRange
    private: KindRange

    @pd.model_validator(mode="after")
    def _whole_without_overlap(self) -> Self:
        place = 1
        for name, (first, last) in self.items():
            if first != place or last < first:
                raise ValueError(f"{name} is {first}..{last}; it must begin at {place} and not end before")
            place = last + 1
        if place != 0x100:
            raise ValueError(f"the ranges end at {place - 1}; they must end at 255")
        return self

    def items(self) -> list[tuple[str, KindRange]]:
        """Name and range, by ascending code."""
        return [(name, getattr(self, name)) for name in type(self).model_fields]

    def of(self, code: int) -> str:
        """Return the name of the range a code lies in; ``unused`` for 0, which no frame may have."""
        return next((name for name, (first, last) in self.items() if first <= code <= last), "unused")


class BodyForm(Model):
    """Bounds of every body."""

    format: Text
    key_first: Natural
    key_last: Positive
    critical_first: Positive
    private_first: Positive
    depth_max: Positive
    pairs_max: Positive
    items_max: Positive
    string_size_max: Positive
    binary_size_max: Positive
    rules: tuple[Text, ...]
    reason: Text

    @pd.model_validator(mode="after")
    def _keys_rise(self) -> Self:
        if not self.key_first < self.critical_first < self.private_first <= self.key_last:
            raise ValueError("key_first, critical_first, private_first and key_last must rise in this order")
        return self


class Binding(Model):
    """How frames travel on one sort of link."""

    name: Name
    links: tuple[Text, ...]
    text: Text


class FrameFile(Model):
    """``frame.toml``."""

    layout: Layout
    check: Check
    stuffing: Stuffing
    addresses: Addresses
    kind_ranges: KindRanges
    body: BodyForm
    binding: tuple[Binding, ...]
