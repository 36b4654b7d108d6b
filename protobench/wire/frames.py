"""Frames: header, body and check sequence, the same bytes on every link."""

from __future__ import annotations

import struct
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

from protobench.wire.crc import CrcFunction
from protobench.wire.errors import Dropped, EncodingError


class Frame:
    """One frame with a good check sequence. Nothing else about it has been judged.

    ``body_length`` is what the header says; ``body`` is what stands between header and check sequence.
    Whether the two agree is asked after the version is known: :meth:`FrameCodec.check_length`.
    """

    __slots__ = (
        "body",
        "body_length",
        "destination",
        "flags",
        "kind",
        "number",
        "session",
        "source",
        "version",
    )

    version: int
    kind: int
    flags: int
    body_length: int
    source: int
    destination: int
    session: int
    number: int
    body: bytes

    def __repr__(self) -> str:
        fields = ", ".join(f"{name}={getattr(self, name)!r}" for name in FIELD_NAMES)
        return f"Frame({fields}, body={self.body.hex()})"

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, Frame):
            return NotImplemented
        return self.body == other.body and all(getattr(self, n) == getattr(other, n) for n in FIELD_NAMES)

    __hash__ = None  # type: ignore[assignment]  # mutable


FIELD_NAMES = ("version", "kind", "flags", "body_length", "source", "destination", "session", "number")
_FORMATS = {1: "B", 2: "H", 4: "I"}


@dataclass(frozen=True, slots=True)
class HeaderField:
    """Where one field stands in the header: offset and size in bytes."""

    name: str
    offset: int
    size: int


@dataclass(frozen=True, slots=True)
class FrameLayout:
    """Sizes in bytes, and the header's fields in order of offset."""

    fields: Sequence[HeaderField]
    header_size: int
    check_size: int
    frame_size_min: int
    frame_size_max: int
    body_size_max: int
    version: int

    def struct_format(self) -> str:
        """Return the header as a big-endian struct format; ValueError for a gap or an overlap."""
        end = 0
        for field in self.fields:
            if field.offset != end:
                raise ValueError(f"header field {field.name} begins at {field.offset}, not at {end}")
            end += field.size
        names = tuple(field.name for field in self.fields)
        if end != self.header_size or names != FIELD_NAMES:
            raise ValueError(f"header of {self.header_size} bytes has fields {names} of {end} bytes")
        return ">" + "".join(_FORMATS[field.size] for field in self.fields)


class FrameCodec:
    """Packs and unpacks bare frames of one layout with one check sequence."""

    def __init__(self, layout: FrameLayout, crc: CrcFunction) -> None:
        self.layout = layout
        self.crc = crc
        self.header = struct.Struct(layout.struct_format())
        self._check = struct.Struct(">" + _FORMATS[layout.check_size])
        self.unpack = _make_unpack(layout, self.header, self._check, crc)

    def pack(
        self,
        kind: int,
        body: bytes,
        *,
        source: int,
        destination: int,
        session: int,
        number: int,
        flags: int = 0,
        version: int | None = None,
        body_length: int | None = None,
    ) -> bytes:
        """Return one bare frame; ``version`` and ``body_length`` are the true ones unless a test wants a lie.

        Raises EncodingError for a header value that does not fit, and for a body that would make the frame
        longer than any receiver takes; a body longer than a sender of this version may send is the caller's
        business.
        """
        layout = self.layout
        if len(body) > layout.frame_size_max - layout.frame_size_min:
            raise EncodingError("frame", "body", body, f"{len(body)} bytes do not fit in a frame")
        if version is None:
            version = layout.version
        if body_length is None:
            body_length = len(body)
        try:
            header = self.header.pack(version, kind, flags, body_length, source, destination, session, number)
        except struct.error as error:
            values = (version, kind, flags, body_length, source, destination, session, number)
            raise _misfit(layout, values, error) from None
        data = header + body
        return data + self._check.pack(self.crc(data))

    def check_length(self, frame: Frame) -> Dropped | None:
        """Return why the frame is dropped for its length field, or None when the field is right."""
        found = len(frame.body)
        if frame.body_length == found and found <= self.layout.body_size_max:
            return None
        most = self.layout.body_size_max
        detail = f"length field {frame.body_length}, body of {found} bytes, at most {most}"
        return Dropped("length", detail, frame.body)


def _misfit(layout: FrameLayout, values: Sequence[object], error: struct.error) -> EncodingError:
    for field, value in zip(layout.fields, values, strict=True):
        most = (1 << 8 * field.size) - 1
        if not isinstance(value, int) or not 0 <= value <= most:
            return EncodingError("frame", field.name, value, f"an integer 0..{most}")
    return EncodingError("frame", "", tuple(values), str(error))


_UNPACK = """
def unpack(data):
    size = len(data)
    if {frame_size_min} <= size <= {frame_size_max}:
        covered = data[:-{check_size}]
        if read_check(data, size - {check_size})[0] == crc(covered):
            frame = new(Frame)
            {targets} = read_header(data)
            frame.body = covered[{header_size}:]
            return frame
    return drop(data)
"""


def _make_unpack(
    layout: FrameLayout, header: struct.Struct, check: struct.Struct, crc: CrcFunction
) -> Callable[[bytes], Frame | Dropped]:
    """Return a function from bare bytes to a Frame, or to Dropped with reason too-long, too-short or crc."""

    def drop(data: bytes) -> Dropped:
        size = len(data)
        if size > layout.frame_size_max:
            detail = f"{size} bytes, at most {layout.frame_size_max}"
            return Dropped("too-long", detail, data[: layout.frame_size_max + 1])
        if size < layout.frame_size_min:
            return Dropped("too-short", f"{size} bytes, at least {layout.frame_size_min}", data)
        told = check.unpack_from(data, size - layout.check_size)[0]
        found = crc(data[: -layout.check_size])
        return Dropped("crc", f"frame says {told:08x}, its bytes make {found:08x}", data)

    names: dict[str, Any] = {
        "Frame": Frame,
        "new": object.__new__,
        "crc": crc,
        "drop": drop,
        "read_header": header.unpack_from,
        "read_check": check.unpack_from,
    }
    source = _UNPACK.format(
        targets=", ".join(f"frame.{field.name}" for field in layout.fields),
        frame_size_min=layout.frame_size_min,
        frame_size_max=layout.frame_size_max,
        check_size=layout.check_size,
        header_size=layout.header_size,
    )
    exec(compile(source, "<frame layout>", "exec"), names)  # noqa: S102  # our own template, filled from the contract
    unpack: Callable[[bytes], Frame | Dropped] = names["unpack"]
    return unpack
