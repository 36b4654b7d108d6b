"""Frames: header, body and check sequence, the same bytes on every link."""

from __future__ import annotations

import struct
from collections.abc import Callable, Sequence
from dataclasses import dataclass

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
    """Packs and unpacks bare frames of one layout with one check sequence.

    ``unpack(bare)`` → Frame, or Dropped with reason too-long, too-short or crc.
    """

    def __init__(self, layout: FrameLayout, crc: CrcFunction) -> None:
        self.layout = layout
        self.crc = crc
        self.pack_header = struct.Struct(layout.struct_format()).pack
        self.pack_check = struct.Struct(">" + _FORMATS[layout.check_size]).pack
        self.unpack = self._make_unpack()

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
        """Return any frame with a good check sequence, around any body, however long.

        ``version`` and ``body_length`` are the true ones unless given. EncodingError names a header field
        that cannot hold its value.
        """
        if version is None:
            version = self.layout.version
        if body_length is None:
            body_length = len(body)
        header = (version, kind, flags, body_length, source, destination, session, number)
        try:
            data = self.pack_header(*header) + body
        except struct.error as error:
            raise self._misfit(header, error) from None
        return data + self.pack_check(self.crc(data))

    def check_length(self, frame: Frame) -> Dropped | None:
        """Return why the frame is dropped for its length field, or None when the field is right."""
        found = len(frame.body)
        most = self.layout.body_size_max
        if frame.body_length == found and found <= most:
            return None
        return Dropped(
            "length", f"length field {frame.body_length}, body of {found} bytes, at most {most}", frame.body
        )

    def _misfit(self, values: Sequence[object], error: struct.error) -> EncodingError:
        for field, value in zip(self.layout.fields, values, strict=True):
            most = (1 << 8 * field.size) - 1
            if not isinstance(value, int) or not 0 <= value <= most:
                return EncodingError("frame", field.name, value, f"wanted an integer 0..{most}")
        return EncodingError("frame", "", tuple(values), str(error))

    def _make_unpack(self) -> Callable[[bytes], Frame | Dropped]:
        # One reader for each size of a frame: header, body and check sequence in one call.
        layout, crc = self.layout, self.crc
        header, check = layout.struct_format(), _FORMATS[layout.check_size]
        sizes = range(layout.frame_size_min, layout.frame_size_max + 1)
        overhead = layout.header_size + layout.check_size
        readers = {size: struct.Struct(f"{header}{size - overhead}s{check}").unpack for size in sizes}
        check_size = layout.check_size

        def unpack(data: bytes) -> Frame | Dropped:
            reader = readers.get(len(data))
            if reader is None:
                return self._drop_size(data)
            frame = Frame()
            (
                frame.version,
                frame.kind,
                frame.flags,
                frame.body_length,
                frame.source,
                frame.destination,
                frame.session,
                frame.number,
                frame.body,
                told,
            ) = reader(data)
            found = crc(data[:-check_size])
            if found == told:
                return frame
            return Dropped("crc", f"frame says {told:08x}, its bytes make {found:08x}", data)

        return unpack

    def _drop_size(self, data: bytes) -> Dropped:
        size, least, most = len(data), self.layout.frame_size_min, self.layout.frame_size_max
        if size > most:
            return Dropped("too-long", f"{size} bytes, at most {most}", data[: most + 1])
        return Dropped("too-short", f"{size} bytes, at least {least}", data)
