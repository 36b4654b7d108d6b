"""The wire: check sequence, stuffing, canonical bodies, frames, streams and message objects of a contract."""

from protobench.wire.body import pack_body, unpack_body
from protobench.wire.codec import Codec, load_codec
from protobench.wire.crc import make_crc
from protobench.wire.errors import BodyError, Dropped, EncodingError, FieldError, FieldRule, WireError
from protobench.wire.explain import Explanation, Line, explain_body, explain_frame
from protobench.wire.form import BodyLimits, Rule, check_form
from protobench.wire.frames import Frame, FrameCodec
from protobench.wire.messages import Examined, Message, MessageKind
from protobench.wire.serial import serial_add, serial_compare, serial_distance
from protobench.wire.stream import StreamDecoder, StreamLimits, split_part
from protobench.wire.stuffing import DELIMITER, StuffingError, stuff, unstuff
from protobench.wire.timing import ClockReading, clock_offset_delay

__all__ = [
    "DELIMITER",
    "BodyError",
    "BodyLimits",
    "ClockReading",
    "Codec",
    "Dropped",
    "EncodingError",
    "Examined",
    "Explanation",
    "FieldError",
    "FieldRule",
    "Frame",
    "FrameCodec",
    "Line",
    "Message",
    "MessageKind",
    "Rule",
    "StreamDecoder",
    "StreamLimits",
    "StuffingError",
    "WireError",
    "check_form",
    "clock_offset_delay",
    "explain_body",
    "explain_frame",
    "load_codec",
    "make_crc",
    "pack_body",
    "serial_add",
    "serial_compare",
    "serial_distance",
    "split_part",
    "stuff",
    "unpack_body",
    "unstuff",
]
