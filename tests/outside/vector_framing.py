"""Vectors of framing and of what a receiver drops, on every sort of link."""

from __future__ import annotations

import struct
from collections.abc import Callable
from functools import partial

import google_crc32c
from vector_tools import (
    ANY_CONTROLLER,
    BROADCAST,
    CONTROLLER,
    GROUP,
    HALTED,
    MODULE,
    Area,
    body,
    cobs,
    drop,
    frame,
    meaning,
    pack,
    refusal,
    uncobs,
)

GOOD = frame("status", number=11)
SECOND = frame("time-exchange", body("time-exchange", t1=0), number=12)
GOOD_MEANS = meaning(GOOD, "status", {})
SECOND_MEANS = meaning(SECOND, "time-exchange", {"t1": 0})
FLIPPED = GOOD[:-1] + bytes([GOOD[-1] ^ 1])


def block(bare: bytes) -> bytes:
    """A frame as it stands in a stream."""
    return cobs(bare) + b"\0"


def padded(size: int) -> bytes:
    """A canonical body of ``size`` bytes, 7 or more, whose keys are all ignored: binaries of 3 bytes and content."""
    whole, rest = divmod(size - 7, 35)
    content = {50: bytes(min(rest, 32)), 51: bytes(max(rest - 32, 0))} | {
        120 + key: bytes(32) for key in range(whole)
    }
    made = pack(content)
    assert len(made) == size, (len(made), size)
    return made


def checks(area: Area) -> None:
    area.add("good", "The smallest frame with a body.", GOOD, GOOD_MEANS)
    fields = (
        "version",
        "kind",
        "flags",
        "length",
        "source",
        "source-end",
        "destination",
        "session",
        "number",
        "body",
    )
    for name, at in zip(
        (*fields, "check", "check-end"), (0, 1, 2, 3, 4, 7, 8, 12, 16, 20, 21, 24), strict=True
    ):
        broken = bytearray(GOOD)
        broken[at] ^= 0x40
        area.add(f"flip-{name}", f"One flipped bit at byte {at} is found.", bytes(broken), drop("crc"))
    swapped = GOOD[:-4] + GOOD[:-5:-1]
    area.add("check-little-endian", "The check sequence is big-endian.", swapped, drop("crc"))
    other = GOOD[:-4] + struct.pack(">I", google_crc32c.value(GOOD[:-4]) ^ 0xFFFFFFFF)
    area.add("check-not-inverted", "The check sequence is inverted at its end.", other, drop("crc"))
    area.add("check-zero", "A frame of zeros has no good check sequence.", bytes(25), drop("crc"))
    residue = GOOD + struct.pack("<I", google_crc32c.value(GOOD))
    area.add(
        "check-residue",
        "Four bytes more that make a little-endian check sequence do not make a good one.",
        residue,
        drop("crc"),
    )
    for size in (0, 1, 4, 20, 23):
        area.add(f"short-{size}", f"{size} bytes are no frame.", GOOD[:size], drop("too-short"))
    area.add(
        "short-sound",
        "Even with a good check sequence, 23 bytes are no frame.",
        _sound(19),
        drop("too-short"),
    )
    area.add(
        "empty-body",
        "24 bytes are a frame; a body of no bytes is malformed.",
        frame("status", b""),
        refusal("malformed"),
    )


def lengths(area: Area) -> None:
    longest = frame("status", padded(213))
    area.add(
        "longest",
        "The longest body that a sender may use: 213 bytes.",
        longest,
        meaning(longest, "status", {}),
    )
    area.add("body-214", "A body of 214 bytes is one too long.", frame("status", padded(214)), drop("length"))
    area.add(
        "frame-253",
        "The longest bare frame that is looked into, 253 bytes.",
        frame("status", padded(229)),
        drop("length"),
    )
    area.add("frame-254", "A bare frame of 254 bytes.", frame("status", padded(230)), drop("too-long"))
    area.add("frame-1000", "A datagram of 1000 bytes.", bytes([1]) * 1000, drop("too-long"))
    for length, name in ((0, "zero"), (2, "more"), (255, "most")):
        area.add(
            f"length-{name}",
            "The length field disagrees with the frame's size.",
            frame("status", length=length),
            drop("length"),
        )
    other_major = frame("status", version=2, length=9)
    area.add(
        "length-other-major",
        "The version is judged before the length field.",
        other_major,
        refusal("unsupported-version"),
    )


def streams(area: Area) -> None:
    add = partial(area.add, link="stream")
    add("one", "One frame.", block(GOOD), GOOD_MEANS)
    add(
        "delimiter-first",
        "A sender that was silent begins with a delimiter.",
        b"\0" + block(GOOD),
        GOOD_MEANS,
    )
    add("two", "Two frames back to back.", block(GOOD) + block(SECOND), GOOD_MEANS, SECOND_MEANS)
    add(
        "fill",
        "Empty blocks are fill.",
        b"\0\0\0" + block(GOOD) + b"\0\0" + block(SECOND) + b"\0",
        GOOD_MEANS,
        SECOND_MEANS,
    )
    add("fill-only", "Fill alone is nothing.", bytes(300))
    add(
        "bad-then-good",
        "A bad frame does not cost the good one after it.",
        block(FLIPPED) + block(GOOD),
        drop("crc"),
        GOOD_MEANS,
    )
    add(
        "text-then-good",
        "Log text on the link is no frame.",
        b"boot ok\r\n\0" + block(GOOD),
        drop("stuffing"),
        GOOD_MEANS,
    )
    add(
        "runs-past-end",
        "A code that points past the end of its block.",
        b"\x05\x11\x22\0" + block(GOOD),
        drop("stuffing"),
        GOOD_MEANS,
    )
    add(
        "code-255-short",
        "Code 255 with fewer than 254 bytes after it.",
        b"\xff" + b"\x01" * 40 + b"\0" + block(GOOD),
        drop("stuffing"),
        GOOD_MEANS,
    )
    add("one-byte", "The block 01 holds no bytes.", b"\x01\0" + block(GOOD), drop("too-short"), GOOD_MEANS)
    add("short", "23 bytes after unstuffing.", block(GOOD[:23]) + block(GOOD), drop("too-short"), GOOD_MEANS)
    cut = block(GOOD)[:12] + b"\0"
    assert uncobs(cut[:-1]) is None
    add(
        "cut",
        "A delimiter in the middle of a frame ends the block.",
        cut + block(SECOND),
        drop("stuffing"),
        SECOND_MEANS,
    )
    lost = cobs(GOOD) + block(SECOND)
    joined = uncobs(lost[:-1])
    assert joined is not None
    add(
        "lost-delimiter",
        "Two frames without a delimiter between them are one bad block.",
        lost + block(GOOD),
        drop("crc"),
        GOOD_MEANS,
    )
    _long_blocks(add)
    _gaps(add)


def _long_blocks(add: Callable[..., None]) -> None:
    widest = frame("status", padded(229))
    assert len(cobs(widest)) == 254
    add(
        "widest",
        "A block of 254 bytes is looked into.",
        block(widest) + block(GOOD),
        drop("length"),
        GOOD_MEANS,
    )
    add(
        "block-255",
        "A block of 255 bytes is too long.",
        b"\x01" * 255 + b"\0" + block(GOOD),
        drop("too-long"),
        GOOD_MEANS,
    )
    add(
        "block-10000",
        "A long block is counted once.",
        b"\x55" * 10000 + b"\0" + block(GOOD),
        drop("too-long"),
        GOOD_MEANS,
    )
    longest = frame("status", padded(213))
    add("longest", "The longest frame that a sender may use.", block(longest), meaning(longest, "status", {}))


def _gaps(add: Callable[..., None]) -> None:
    whole = block(GOOD)
    add("gap-short", "A gap of 150 ms inside a frame is bridged.", whole, GOOD_MEANS, gaps_ms=[[9, 150]])
    add("gap-many", "Each gap counts for itself.", whole, GOOD_MEANS, gaps_ms=[[3, 150], [9, 150], [20, 150]])
    add(
        "gap-before-delimiter",
        "A gap before the delimiter is a gap inside the frame.",
        whole,
        GOOD_MEANS,
        gaps_ms=[[len(whole) - 1, 150]],
    )
    add(
        "gap-long",
        "A gap of 1500 ms discards the half frame.",
        whole[:9] + b"\0" + block(SECOND),
        drop("half-frame"),
        SECOND_MEANS,
        gaps_ms=[[9, 1500]],
    )
    tail = whole[-4:-1]
    assert uncobs(tail) is None
    add(
        "gap-tail",
        "What follows a long gap begins a new block.",
        whole + block(SECOND),
        drop("half-frame"),
        drop("stuffing"),
        SECOND_MEANS,
        gaps_ms=[[len(whole) - 4, 1500]],
    )
    add(
        "gap-whole",
        "The half frame costs nothing of the frame after it.",
        whole[:20] + whole,
        drop("half-frame"),
        GOOD_MEANS,
        gaps_ms=[[20, 1500]],
    )
    add(
        "gap-between",
        "A gap between frames is no gap inside one.",
        whole + block(SECOND),
        GOOD_MEANS,
        SECOND_MEANS,
        gaps_ms=[[len(whole), 5000]],
    )
    add("gap-in-fill", "A gap in fill discards nothing.", b"\0\0" + whole, GOOD_MEANS, gaps_ms=[[1, 5000]])


def parts(area: Area) -> None:
    add = partial(area.add, link="part")
    add("part-bare", "A part that does not begin with 0x00 is one bare frame.", GOOD, GOOD_MEANS)
    add(
        "part-segment",
        "A part that begins with 0x00 holds many.",
        b"\0" + block(GOOD) + block(SECOND),
        GOOD_MEANS,
        SECOND_MEANS,
    )
    add("part-segment-fill", "Fill in a segment.", b"\0\0\0" + block(GOOD) + b"\0", GOOD_MEANS)
    add(
        "part-segment-half",
        "A segment keeps no half frame for the next part.",
        b"\0" + block(GOOD) + block(SECOND)[:9],
        GOOD_MEANS,
        drop("half-frame"),
    )
    add(
        "part-segment-unended",
        "A last frame without its delimiter is a half frame.",
        b"\0" + cobs(GOOD),
        drop("half-frame"),
    )
    add("part-delimiter", "A delimiter alone is fill.", b"\0")
    add(
        "part-stuffed-bare",
        "Stuffed bytes that do not begin with 0x00 are taken for a bare frame.",
        block(GOOD),
        drop("crc"),
    )
    add(
        "part-segment-bad-then-good",
        "A bad frame in a segment.",
        b"\0" + block(FLIPPED) + block(GOOD),
        drop("crc"),
        GOOD_MEANS,
    )
    add("part-empty", "An empty part is a frame of no bytes.", b"", drop("too-short"))


def _sound(size: int) -> bytes:
    content = bytes([1]) * size
    return content + struct.pack(">I", google_crc32c.value(content))


# ---------------------------------------------------------------- address and kind


def addresses(area: Area) -> None:
    others = {"unicast": 2, "unassigned": 0, "group": GROUP + 1, "any-controller": ANY_CONTROLLER}
    for name, address in others.items():
        area.add(
            f"other-{name}",
            "The destination does not include the module.",
            frame("status", destination=address),
            drop("other-address"),
        )
    area.add("halt-other", "A halt for another module.", frame("halt", destination=2), drop("other-address"))
    area.add(
        "own-source",
        "Another module uses this module's address.",
        frame("status", source=MODULE),
        drop("own-source"),
    )
    sources = {"zero": 0, "group": GROUP, "any-controller": ANY_CONTROLLER, "broadcast": BROADCAST}
    for name, address in sources.items():
        area.add(f"source-{name}", "Nobody to answer.", frame("status", source=address), drop("bad-source"))
    area.add(
        "order-other-own",
        "The destination is looked at before the source.",
        frame("status", source=MODULE, destination=2),
        drop("other-address"),
    )
    area.add(
        "order-own-kind",
        "The source is looked at before the kind.",
        frame("receipt", source=MODULE),
        drop("own-source"),
    )


def halts(area: Area) -> None:
    odd = {
        "version": frame("halt", version=9),
        "flags": frame("halt", flags=0xFF),
        "length": frame("halt", length=99),
        "no-body": frame("halt", b""),
        "malformed": frame("halt", b"\xc1\xc1"),
        "critical": frame("halt", pack({64: 1})),
        "window": frame("halt", pack({0: 9999})),
        "long": frame("halt", padded(229)),
        "source-zero": frame("halt", source=0),
        "source-own": frame("halt", source=MODULE),
        "source-broadcast": frame("halt", source=BROADCAST),
    }
    for name, bare in odd.items():
        purpose = "A halt with a good check sequence for the module is executed, whatever else is wrong."
        area.add(f"halt-{name}", purpose, bare, HALTED)
    area.add("halt-crc", "A halt with a bad check sequence is not.", frame("halt")[:-1] + b"\0", drop("crc"))


def kinds(area: Area) -> None:
    dropped = {
        "answer": "receipt",
        "unknown-answer": 0x5F,
        "event": "outcome",
        "unknown-event": 0x9F,
        "notice": 0x61,
        "last-notice": 0x7F,
        "reserved": 0xA0,
        "last-reserved": 0xEF,
        "kind-zero": 0x00,
    }
    for name, kind in dropped.items():
        area.add(
            f"not-{name}",
            "Neither a request nor a confirm; never answered.",
            frame(kind),
            drop("not-a-request"),
        )
    area.add(
        "not-answer-other-major",
        "An answer of another major version.",
        frame("receipt", version=2),
        drop("not-a-request"),
    )
    area.add(
        "not-confirm-other-major",
        "A confirm of another major version.",
        frame("confirm", body("confirm", epoch=3, event=1), version=2),
        drop("not-a-request"),
    )
    area.add(
        "not-answer-length",
        "The kind is looked at before the length field.",
        frame("receipt", length=9),
        drop("not-a-request"),
    )
    for code in (0x0B, 0x1F, 0x30, 0x3B):
        area.add(
            f"unknown-{code:02x}",
            "A read or command kind that 1.0 does not have.",
            frame(code),
            refusal("unknown-kind"),
        )
    for version in (0, 2, 255):
        area.add(
            f"version-{version}",
            "Another major version.",
            frame("status", version=version),
            refusal("unsupported-version"),
        )
    area.add(
        "version-command",
        "Another major version, a command.",
        frame("energize", pack({0: 3, 1: 1}), version=3),
        refusal("unsupported-version"),
    )
    for flags in (0x01, 0x10, 0x80, 0xFF):
        area.add(
            f"flags-{flags:02x}", "A reserved flag.", frame("status", flags=flags), refusal("not-understood")
        )


def rooms(area: Area) -> None:
    """Reasons that depend on what the module holds at the moment; the context says what."""
    bare = frame("status", number=21)
    area.add(
        "no-room",
        "No free place for the answer; the same bytes sent again are fresh.",
        bare,
        drop("no-room"),
        context={"free_answers": 0},
    )
    confirms = {
        "other-epoch": ({"epoch": 2, "event": 1}, CONTROLLER),
        "unknown-event": ({"epoch": 3, "event": 9}, CONTROLLER),
        "stranger": ({"epoch": 3, "event": 1}, 0x10002),
    }
    held = {"epoch": 3, "outcomes": [{"event": 1, "source": CONTROLLER, "session": 0x5EED0001}]}
    for name, (fields, source) in confirms.items():
        area.add(
            f"confirm-{name}",
            "A confirm that names no outcome this sender may confirm.",
            frame("confirm", body("confirm", **fields), source=source),
            drop("stale-confirm"),
            context=held,
        )
    area.add(
        "confirm-unreadable",
        "A confirm that cannot be read.",
        frame("confirm", b"\xc1"),
        drop("stale-confirm"),
        context=held,
    )


def make() -> list[Area]:
    bare = Area("frame", "Bare frames, and ZeroMQ parts: check sequence, sizes, length field.")
    for part in (checks, lengths, parts):
        part(bare)
    stream = Area(
        "stream", "COBS streams. gaps_ms: pairs of an offset in bytes and the pause before that byte in ms."
    )
    streams(stream)
    judging = Area(
        "judging", "What is dropped or refused for address, version, kind and flags, and which halts count."
    )
    for part in (addresses, halts, kinds, rooms):
        part(judging)
    return [bare, stream, judging]
