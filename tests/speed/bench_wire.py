"""How fast the wire is beside the library calls it is made of.

Run it as a program: ``python tests/speed/bench_wire.py``. Only the ratios mean anything: they are medians of
rounds in which the two sides take turns. Results go to standard output.
"""

from __future__ import annotations

import random
import statistics
import struct
import sys
import time
from collections.abc import Callable
from typing import NamedTuple

import msgpack
from cobs import cobs

from protobench.wire import Codec, Dropped, Frame, Message, load_codec

Work = Callable[[], object]


class Ratio(NamedTuple):
    """Nanoseconds of ours and of what it is measured against, for one frame, and their median ratio."""

    name: str
    ours_ns: float
    theirs_ns: float
    ratio: float


def compare(name: str, ours: Work, theirs: Work, *, rounds: int, calls: int, frames: int = 1) -> Ratio:
    """Let the two take turns; ``frames``: how many frames one call handles."""
    times: tuple[list[float], list[float]] = ([], [])
    for _ in range(rounds):
        for side, work in enumerate((ours, theirs)):
            begin = time.perf_counter_ns()
            for _ in range(calls):
                work()
            times[side].append((time.perf_counter_ns() - begin) / calls / frames)
    ratio = statistics.median(a / b for a, b in zip(*times, strict=True))
    return Ratio(name, statistics.median(times[0]), statistics.median(times[1]), ratio)


def messages(codec: Codec) -> dict[str, Message]:
    """A small answer, a request of five integers, and the longest report."""
    status = dict.fromkeys((spec.attribute for spec in codec.kind("status-report").spec.fields), 1)
    status |= dict.fromkeys(("halt_latch", "fault_latch", "position_known"), True)
    status |= {
        "faces": ((1, 70_000, 2),) * 6,
        "temperatures": (251, 233),
        "clock": 70_000,
        "position": -45_000,
    }
    return {
        "time-answer": codec.new("time-answer", t1=70_000, t2=80_000, t3=90_000),
        "move": codec.new("move", epoch=7, lease=70_000, motion=1, magnitude=-45_000, face=3),
        "status-report": codec.new("status-report", **status),
    }


def there_and_back(codec: Codec, name: str, message: Message, *, rounds: int, calls: int) -> Ratio:
    """Encode a checked message to a block and decode it, against the same steps as bare library calls."""
    unpack, kinds = codec.frames.unpack, codec.kinds_by_code

    def ours() -> Message:
        block = cobs.encode(message.to_frame(1, 2, 3, 4))
        frame = unpack(cobs.decode(block))
        if isinstance(frame, Dropped) or frame.body_length != len(frame.body):
            raise AssertionError(frame)
        return kinds[frame.kind].decode(frame.body)

    header = struct.Struct(codec.frames.layout.struct_format())
    pack, unpackb, crc = msgpack.Packer(autoreset=True).pack, msgpack.unpackb, codec.crc
    body = message.to_body()
    values = unpackb(body, strict_map_key=False)
    bare = message.to_frame(1, 2, 3, 4)
    covered, block, head = bare[:-4], cobs.encode(bare), bare[:20]

    def theirs() -> None:
        pack(values)
        header.pack(1, 2, 0, 4, 1, 2, 3, 4)
        crc(covered)
        cobs.encode(bare)
        cobs.decode(block)
        crc(covered)
        header.unpack(head)
        unpackb(body, strict_map_key=False)

    if ours() != message:
        raise AssertionError(name)
    return compare(
        f"{name}, {len(bare)} bytes: encode + decode / primitives", ours, theirs, rounds=rounds, calls=calls
    )


def stream(codec: Codec, *, frames: int, rounds: int, unpacked: bool) -> Ratio:
    """The stream decoder against a bare split; with ``unpacked`` both sides also unpack each frame."""
    rng = random.Random(1)
    message = messages(codec)["move"]
    data = b"".join(codec.stuff(message.to_frame(1, 2, 3, rng.getrandbits(32))) for _ in range(frames))
    pieces = [data[at : at + 4096] for at in range(0, len(data), 4096)]
    unpack = codec.frames.unpack

    def ours() -> int:
        decoder = codec.stream_decoder()
        count = 0
        for piece in pieces:
            for item in decoder.feed(piece, 0):
                if not unpacked or (isinstance(item, bytes) and isinstance(unpack(item), Frame)):
                    count += 1
        return count

    def theirs() -> int:
        tail = b""
        count = 0
        for piece in pieces:
            blocks = (tail + piece).split(b"\0")
            tail = blocks.pop()
            for bare in [cobs.decode(block) for block in blocks]:
                if not unpacked or isinstance(unpack(bare), Frame):
                    count += 1
        return count

    if not ours() == theirs() == frames:
        raise AssertionError("the two sides do not see the same frames")
    name = "stream decoder + unpack / split + unpack" if unpacked else "stream decoder / split + unstuff"
    return compare(name, ours, theirs, rounds=rounds, calls=1, frames=frames)


def run(*, rounds: int, calls: int, frames: int) -> list[Ratio]:
    """Return all ratios; times smaller than 1 are better for us in all of them."""
    codec = load_codec()
    found = [
        there_and_back(codec, name, message, rounds=rounds, calls=calls)
        for name, message in messages(codec).items()
    ]
    found += [stream(codec, frames=frames, rounds=rounds, unpacked=unpacked) for unpacked in (False, True)]
    return found


def main() -> None:
    for ratio in run(rounds=25, calls=4000, frames=20_000):
        sys.stdout.write(
            f"{ratio.name:62} {ratio.ours_ns:7.0f} ns {ratio.theirs_ns:7.0f} ns {ratio.ratio:6.2f}\n"
        )


if __name__ == "__main__":
    main()
