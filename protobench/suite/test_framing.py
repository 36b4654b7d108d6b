"""Framing: what is a frame, what is dropped, and that a bad frame costs nobody else."""

from __future__ import annotations

from protobench.judge import Failed
from protobench.suite.bench import Bench
from protobench.suite.case import case
from protobench.suite.tools import expect_drops, filler_body, garbage_blocks, sound_crc

LONGEST_BODY = 213
HALF_BRIDGE_MS = 200
HALF_DISCARD_MS = 1000


@case(
    "FRM.every-length",
    "valid",
    "A sound request is answered whatever the length of its body.",
    clauses=["FRM-01"],
)
def test_every_length(bench: Bench) -> None:
    for size in range(1, LONGEST_BODY + 1):
        answer = bench.a.ask("describe", body=filler_body(size))
        if answer.kind != "description":
            raise Failed(
                f"describe with a body of {size} bytes was not answered by a description", clause="FRM-01"
            )


@case(
    "FRM.flipped-bits",
    "invalid",
    "A frame with any one bit changed is dropped as crc and changes nothing.",
    clauses=["FRM-02", "FRM-18"],
)
def test_flipped_bits(bench: Bench) -> None:
    whole = bench.a.frame("status")
    with expect_drops(bench, {"crc": 8 * len(whole)}, "FRM-02"):
        for place in range(len(whole)):
            for bit in range(8):
                changed = bytearray(whole)
                changed[place] ^= 1 << bit
                if changed[0] == 0:
                    changed[0] = 0x81  # a part that begins with 0 would be a segment
                bench.port.send(bytes(changed))
            bench.a.silent(f"a frame with a changed bit in byte {place}", "FRM-18", quiet_ms=0)


@case(
    "FRM.crc-variants",
    "invalid",
    "A check sequence in the other byte order, over another span, or of another polynomial is not accepted.",
    clauses=["FRM-02", "FRM-18"],
)
def test_crc_variants(bench: Bench) -> None:
    whole = bench.a.frame("status")
    head, check = whole[:-4], whole[-4:]
    wrong = [
        head + check[::-1],
        head + bytes(4),
        head + b"\xff" * 4,
        head + bytes(byte ^ 0xFF for byte in check),
        head + sound_crc(bench, head[1:]),
        head + sound_crc(bench, head[:20]),
        head + sound_crc(bench, head + bytes(4)),
    ]
    with expect_drops(bench, {"crc": len(wrong)}, "FRM-02"):
        for frame in wrong:
            bench.port.send(frame)
        bench.a.silent("a frame with a wrong check sequence", "FRM-02")


@case(
    "FRM.too-short",
    "invalid",
    "Units shorter than a frame are dropped as too-short at every length, with a matching check sequence too.",
    clauses=["FRM-03"],
)
def test_too_short(bench: Bench) -> None:
    units = [bytes([0xA5] * size) for size in range(1, 5)]
    units += [bytes(head := b"\x01" * size) + sound_crc(bench, head) for size in range(1, 20)]
    with expect_drops(bench, {"too-short": len(units)}, "FRM-03"):
        for unit in units:
            bench.port.send(unit)
        bench.a.silent("a unit that is too short", "FRM-03")


@case(
    "FRM.empty-block",
    "invalid",
    "A block that unstuffs to nothing is too short; it is no fill.",
    clauses=["FRM-03", "FRM-07"],
    needs="stream",
)
def test_empty_block(bench: Bench) -> None:
    with expect_drops(bench, {"too-short": 3}, "FRM-03"):
        bench.port.send_raw(b"\x01\x00" * 3)
        bench.a.silent("an empty block", "FRM-03")


@case(
    "FRM.too-long",
    "invalid",
    "A block or unit over the limit is dropped as too-long, once, however long it is.",
    clauses=["FRM-04"],
)
def test_too_long(bench: Bench) -> None:
    sizes = (255, 256, 300, 1000, 5000) if bench.facts.has("stream") else (254, 255, 300, 1000, 1400)
    with expect_drops(bench, {"too-long": len(sizes)}, "FRM-04"):
        for size in sizes:
            if bench.facts.has("stream"):
                bench.port.send_raw(b"\x55" * size + b"\0")
            else:
                bench.port.send_raw(b"\x55" * size)
            bench.a.silent(f"{size} bytes without a delimiter", "FRM-04", quiet_ms=0)


@case(
    "FRM.too-long-sound",
    "invalid",
    "A unit of 254 to 300 bytes is dropped even where its check sequence matches; 253 bytes are not too long.",
    clauses=["FRM-04", "FRM-06"],
    needs="not gaps",
)
def test_too_long_sound(bench: Bench) -> None:
    whole = bench.a.frame("status")
    with expect_drops(bench, {"too-long": 3, "length": 1}, "FRM-04"):
        for size in (254, 255, 300, 253):
            head = whole[:20] + filler_body(size - 24)
            bench.port.send(head + sound_crc(bench, head))
            bench.a.silent(f"a unit of {size} bytes", "FRM-04", quiet_ms=0)


@case(
    "FRM.stuffing",
    "invalid",
    "A block whose codes run past its end is dropped as stuffing.",
    clauses=["FRM-05"],
    needs="stream",
)
def test_stuffing(bench: Bench) -> None:
    stuffed = bench.language.stuff(bench.a.frame("status"))
    blocks = [b"\x02", b"\x05\x11\x22\x33", b"\x03\x11", b"\xff\x11", bytes([len(stuffed) + 1]) + stuffed[1:]]
    blocks += [stuffed[:cut] + bytes([0xFE]) + stuffed[cut + 1 :] for cut in _codes(stuffed)[1:]]
    with expect_drops(bench, {"stuffing": len(blocks)}, "FRM-05"):
        for block in blocks:
            bench.port.send_raw(block + b"\0")
        bench.a.silent("a block that is not COBS", "FRM-05")


def _codes(stuffed: bytes) -> list[int]:
    """Places of the code bytes."""
    places, at = [], 0
    while at < len(stuffed):
        places.append(at)
        at += stuffed[at]
    return places


@case(
    "FRM.length-field",
    "invalid",
    "A length field that disagrees with the frame's size drops the frame as length.",
    clauses=["FRM-06"],
)
def test_length_field(bench: Bench) -> None:
    lies = [0, 2, 3, 213, 214, 255]
    with expect_drops(bench, {"length": len(lies) + 2}, "FRM-06"):
        for lie in lies:
            bench.port.send(bench.a.frame("status", body=b"\x80", body_length=lie))
        for size in (214, 229):
            bench.port.send(bench.a.frame("describe", body=filler_body(size)))
        bench.a.silent("a frame with a wrong length field", "FRM-06")


@case(
    "FRM.fill",
    "valid",
    "Empty blocks before, between and after frames are not answered and not counted.",
    clauses=["FRM-07"],
    needs="stream",
)
def test_fill(bench: Bench) -> None:
    sound = bench.language.stuff(bench.a.frame("status", number=7))
    with expect_drops(bench, {}, "FRM-07"):
        bench.port.send_raw(b"\0" * 50 + sound + b"\0" * 300)
        received = bench.port.wait_for(lambda r: r.frame.number == 7, bench.a.patience_ms)
        if received is None:
            raise Failed("a sound frame among fill was not answered", clause="FRM-07")
        bench.a.silent("fill", "FRM-07")


@case(
    "FRM.good-after-bad",
    "invalid",
    "After any bytes ended by a delimiter the next sound frame is answered.",
    clauses=["FRM-09"],
)
def test_good_after_bad(bench: Bench) -> None:
    for bad in garbage_blocks(bench, 60):
        if bench.facts.has("stream"):
            good = bench.a.frame("status")
            bench.port.send_raw(bad + b"\0" + bench.language.stuff(good) + b"\0", lead=False)
            sent = bench.a.sent(good, bench.port.now_ns)
        else:
            bench.port.send_raw(bad)
            sent = bench.a.send("status")
        if bench.a.answer(sent) is None:
            raise Failed(f"the sound frame after {bad[:40].hex(' ')} was not answered", clause="FRM-09")


@case(
    "FRM.half-bridged",
    "valid",
    "A gap shorter than 200 ms inside a frame is bridged.",
    clauses=["FRM-10"],
    needs="gaps",
)
def test_half_bridged(bench: Bench) -> None:
    gap_ms = HALF_BRIDGE_MS - 1 if bench.facts.has("virtual") else HALF_BRIDGE_MS - 80
    for share in (0.2, 0.8):
        frame = bench.a.frame("status")
        block = bench.language.stuff(frame) + b"\0"
        cut = max(1, int(len(block) * share))
        bench.port.send_raw(block[:cut])
        bench.port.wait_ms(gap_ms)
        bench.port.note_sent(frame, bench.language.read(frame), bench.port.now_ns)
        time_ns = bench.port.send_raw(block[cut:], lead=False)
        if bench.a.answer(bench.a.sent(frame, time_ns)) is None:
            raise Failed(f"a frame with a gap of {gap_ms} ms was not answered", clause="FRM-10")


@case(
    "FRM.half-discarded",
    "invalid",
    "A gap longer than 1 s inside a frame discards the half frame; what follows begins a new block.",
    clauses=["FRM-11", "FRM-09"],
    needs="gaps",
)
def test_half_discarded(bench: Bench) -> None:
    block = bench.language.stuff(bench.a.frame("status"))
    with expect_drops(bench, {"half-frame": 1}, "FRM-11"):
        bench.port.send_raw(block[: len(block) // 2])
        bench.port.wait_ms(HALF_DISCARD_MS + (1 if bench.facts.has("virtual") else 100))
        frame = bench.a.frame("status")
        bench.port.send_raw(bench.language.stuff(frame) + b"\0", lead=False)
        if bench.a.answer(bench.a.sent(frame, bench.port.now_ns)) is None:
            raise Failed("the frame after a discarded half frame was not answered", clause="FRM-11")


@case(
    "FRM.counted-once",
    "invalid",
    "Each dropped frame counts once, under the first reason that fits.",
    clauses=["FRM-12"],
)
def test_counted_once(bench: Bench) -> None:
    a = bench.a
    wanted = {
        "crc": 1,
        "other-address": 2,
        "bad-source": 2,
        "not-a-request": 2,
        "length": 1,
        "stale-confirm": 1,
    }
    short = a.frame("status")[:12]
    with expect_drops(bench, wanted | {"too-short": 1}, "FRM-12"):
        whole = a.frame("status")
        bench.port.send(whole[:-1] + bytes([whole[-1] ^ 1]))
        bench.port.send(short[:-4] + sound_crc(bench, short[:-4]))
        a.send("status", to=bench.other_address())
        a.send("status", to=bench.other_address(), source=0, version=2)
        a.send("status", source=0)
        a.send("status", source=bench.broadcast, version=9)
        a.send(0x41, body=b"\xc1")
        a.send(0x83, version=2)
        bench.port.send(a.frame("status", body=b"\xc1", body_length=9))
        a.send("confirm", epoch=a.epoch, event=0xFFFFFFF0)
        a.silent("a dropped frame", "FRM-12")


@case(
    "FRM.counters-saturate",
    "valid",
    "Counters stop at 65535.",
    clauses=["FRM-13"],
    needs="assist",
)
def test_counters_saturate(bench: Bench) -> None:
    bench.a.assist("preset", item="counters", value=65534)
    for _ in range(3):
        bench.port.send(bench.a.frame("status")[:-4] + b"\x01\x02\x03\x04")
        bench.a.send("energize", to=bench.broadcast)
    bench.a.silent("a dropped frame", "FRM-13")
    drops, silent = bench.counters()
    bench.a.assist("preset", item="counters", value=0)
    after, silent_after = bench.counters()
    if drops["crc"] != 65535 or drops["half-frame"] != 65534 or silent != 65535:
        raise Failed(
            f"counters preset to 65534, three more: crc {drops['crc']}, silent {silent}", clause="FRM-13"
        )
    if any(after.values()) or silent_after:
        raise Failed("counters preset to 0 do not read 0", clause="AST-03")


@case(
    "FRM.reading-not-counted",
    "valid",
    "Reading the counters changes none of them.",
    clauses=["FRM-13"],
)
def test_reading_not_counted(bench: Bench) -> None:
    bench.port.send(bench.a.frame("status")[:-1])
    bench.a.send("status", to=bench.broadcast)
    first = bench.counters()
    for _ in range(5):
        if bench.counters() != first:
            raise Failed("a counter changed by being read", clause="FRM-13")
    if not first[1] or not any(first[0].values()):
        raise Failed("a dropped frame and a silent refusal were not counted", clause="FRM-12")


@case(
    "FRM.back-to-back",
    "valid",
    "Frames that arrive in one piece are each answered, in order.",
    clauses=["FRM-17", "ACK-16"],
)
def test_back_to_back(bench: Bench) -> None:
    frames = [bench.a.frame("time-exchange", t1=place) for place in range(4)]
    time_ns = bench.port.send(*frames)
    for frame in frames:
        bench.a.answered(bench.a.sent(frame, time_ns), "FRM-17")
    order = [bench.a.frame("time-exchange", t1=place) for place in range(4)]
    time_ns = bench.port.send(*order)
    numbers = [bench.a.sent(frame, time_ns).number for frame in order]
    bench.port.wait_ms(bench.a.patience_ms)
    came = [received.frame.number for received in bench.port.take_all(lambda r: r.kind == "time-answer")]
    if came != numbers:
        raise Failed(f"requests {numbers} were answered in the order {came}", clause="ACK-16")


@case(
    "FRM.cut-anywhere",
    "valid",
    "A frame cut in two at any place, and one that comes byte by byte, is answered.",
    clauses=["FRM-17"],
    needs="gaps",
)
def test_cut_anywhere(bench: Bench) -> None:
    size = len(bench.language.stuff(bench.a.frame("status"))) + 1
    for cut in [*range(1, size), 0]:
        frame = bench.a.frame("status")
        block = bench.language.stuff(frame) + b"\0"
        pieces = [block[:cut], block[cut:]] if cut else [bytes([byte]) for byte in block]
        bench.port.note_sent(frame, bench.language.read(frame), bench.port.now_ns)
        for piece in pieces:
            time_ns = bench.port.send_raw(piece, lead=False)
        if bench.a.answer(bench.a.sent(frame, time_ns)) is None:
            raise Failed(f"a frame in pieces (cut at {cut}) was not answered", clause="FRM-17")


@case(
    "FRM.nothing-but-frames",
    "valid",
    "Through a restart and a fault nothing but sound frames is on the link.",
    clauses=["FRM-14", "FRM-16"],
    needs="assist",
)
def test_nothing_but_frames(bench: Bench) -> None:
    bench.a.restart("watchdog")
    bench.a.assist("raise", code=bench.fault_code("winding-hot"))
    bench.port.wait_ms(300)


@case(
    "FRM.module-frames",
    "valid",
    "Every answer of every read is a sound frame with a canonical body.",
    clauses=["FRM-16"],
)
def test_module_frames(bench: Bench) -> None:
    for kind in ("describe", "status", "probe", "read-counters", "read-faults", "read-motions"):
        bench.a.read(kind)
    bench.a.read("time-exchange", t1=0x80000000)
    for name in bench.facts.motions:
        bench.a.read("describe-motion", motion=name)
