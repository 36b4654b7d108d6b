"""Load: whatever peers send, the module answers soundly afterwards and halts during it."""

from __future__ import annotations

from protobench.judge import Failed
from protobench.suite.bench import CONTROLLER_A, Bench
from protobench.suite.case import case
from protobench.suite.language import canonical
from protobench.suite.robust.campaign import play_counted
from protobench.suite.robust.player import Tally
from protobench.suite.robust.steps import Grammar
from protobench.suite.tools import garbage_blocks, same_groups_after

FLOOD = 400


@case(
    "LOD.garbage",
    "invalid",
    "After a flood of garbage a sound request is answered.",
    clauses=["LOD-01", "LOD-02", "FRM-09"],
)
def test_garbage(bench: Bench) -> None:
    for block in garbage_blocks(bench, FLOOD):
        bench.port.send_raw(block + b"\0" if bench.facts.has("stream") else block)
    bench.port.wait_ms(50)
    bench.port.inbox.clear()
    if bench.a.answer(bench.a.send("describe"), 1000 + bench.port.u_ms) is None:
        raise Failed("no answer after a flood of garbage", clause="LOD-01")


@case(
    "LOD.random-requests",
    "invalid",
    "Sound frames with random kinds and bodies are each answered once or dropped, and harm nothing.",
    clauses=["LOD-02", "LOD-01", "ACK-01"],
)
def test_random_requests(bench: Bench) -> None:
    a = bench.a
    excluded = {bench.language.code("assist"), 0x3C, 0x3D, 0x3E, 0x3F}
    for place in range(FLOOD):
        kind = bench.rng.randrange(1, 0xF0)
        if kind in excluded:
            continue
        sent = a.send(kind, body=_random_body(bench), flags=bench.rng.choice((0, 0, 0, 1, 128)))
        if kind <= 0x3B and a.answer(sent) is None:
            raise Failed(f"request {place}, kind 0x{kind:02x}, was not answered", clause="ACK-01")
    a.silent("what is no request", "LOD-01")
    a.status()


def _random_body(bench: Bench) -> bytes:
    rng = bench.rng
    if rng.random() < 0.4:
        return bytes(rng.randrange(256) for _ in range(rng.randrange(0, 40)))
    values = [
        0,
        1,
        5,
        127,
        500,
        1000,
        65_536,
        2**32 - 1,
        2**32,
        -1,
        -90_000,
        True,
        "x",
        b"\x00" * 8,
        [1],
        [],
        {0: 1},
    ]
    keys = sorted(rng.sample(range(12), rng.randrange(0, 8)))
    fields = {key: rng.choice(values) for key in keys}
    if rng.random() < 0.7:
        fields[0], fields[1] = bench.a.epoch, bench.a.lease
    return canonical({key: fields[key] for key in sorted(fields)})


@case(
    "LOD.sessions",
    "inopportune",
    "A flood of sessions costs the holder neither its history nor its lease.",
    clauses=["LOD-02", "SEQ-10"],
)
def test_sessions(bench: Bench) -> None:
    a = bench.a
    a.take_lease(20_000)
    kept = a.accepted("renew-lease", duration=20_000, clause="LSE-06")
    for place in range(150):
        stranger = bench.tester(CONTROLLER_A + 1000 + place)
        stranger.lease = a.lease
        stranger.refused("not-holder", "energize", clause="LSE-03")
    a.expect_refused(a.send_frame(a.frame("release-lease", number=kept.number)), "conflict", "SEQ-10")
    a.expect_accepted(a.send_frame(kept.frame_bytes), "SEQ-10")
    if a.status()["holder_session"] != a.session:
        raise Failed("a flood of sessions cost the lease", clause="LOD-02")


@case(
    "LOD.halt-in-flood",
    "valid",
    "A halt in the middle of a flood is executed.",
    clauses=["LOD-01", "HLT-03"],
)
def test_halt_in_flood(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    others = [a.frame("status", to=bench.other_address()) for _ in range(100)]
    halt = a.frame("halt")
    time_ns = bench.port.send(*others, halt, *others)
    receipt = a.answer(a.sent(halt, time_ns), 1000 + bench.port.u_ms)
    if receipt is None or receipt.kind != "halt-receipt" or not a.status()["halt_latch"]:
        raise Failed("a halt in a flood was not executed", clause="HLT-03")


@case(
    "LOD.many-commands",
    "valid",
    "A long series of commands, one after the other, is each judged rightly.",
    clauses=["LOD-02", "SEQ-02", "ACK-01"],
)
def test_many_commands(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    for _ in range(100):
        a.accepted("de-energize", clause="STA-10")
        a.accepted("energize", clause="STA-09")
    if a.status()["activity"] != "energized":
        raise Failed("after an even number of switches the activity is wrong", clause="STA-01")


@case(
    "LOD.long-run",
    "valid",
    "After a long series of requests answers are as quick as before.",
    clauses=["LOD-02", "ACK-03"],
)
def test_long_run(bench: Bench) -> None:
    a = bench.a
    a.take_lease(30_000)
    late = 0
    for place in range(1200 if bench.facts.has("virtual") else 240):
        sent = a.send("renew-lease", duration=30_000) if place % 4 == 0 else a.send("status")
        delay_ms = (a.answered(sent, "LOD-02").time_ns - sent.time_ns) / 1e6
        late = late + 1 if delay_ms > bench.facts.receipt_ms + bench.port.u_ms else 0
        if late > (0 if bench.facts.has("virtual") else LATE_IN_A_ROW):
            raise Failed(f"after {place} requests an answer took {delay_ms:.1f} ms", clause="ACK-03")


LATE_IN_A_ROW = 15


@case(
    "LOD.queries-of-many",
    "valid",
    "Requests to many in quick succession from several sessions are bounded and answered.",
    clauses=["LOD-02", "ADR-08"],
)
def test_queries_of_many(bench: Bench) -> None:
    testers = [bench.tester(CONTROLLER_A + 200 + place) for place in range(20)]
    for tester in testers:
        tester.send("probe", to=bench.broadcast, answer_window=200)
    bench.port.wait_ms(250 + bench.facts.receipt_ms)
    bench.port.take_all(lambda received: received.kind == "presence")
    bench.a.status()


@case(
    "LOD.generated",
    "invalid",
    "Generated sequences of sound, untimely and damaged requests are each answered as the contract says.",
    clauses=["LOD-02", "LOD-01", "ACK-05", "ACK-01", "FRM-12", "SEQ-02"],
)
def test_generated(bench: Bench) -> None:
    grammar = Grammar(bench.contract, bench.facts)
    seed = bench.rng.randrange(1 << 32)
    is_virtual = bench.facts.has("virtual")
    end_ns = bench.port.now_ns + GENERATED_REAL_MS * 1_000_000
    with same_groups_after(bench):
        for index in range(GENERATED):
            if index:
                bench.end()
            play_counted(bench, grammar.sequence(seed, index), Tally())
            if not is_virtual and bench.port.now_ns > end_ns:
                break


GENERATED = 40  # sequences in virtual time
GENERATED_REAL_MS = 1500
