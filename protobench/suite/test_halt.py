"""Halt: from anyone, in every state, in any shape, at once; and the way back by reset."""

from __future__ import annotations

from protobench.judge import Failed, Inconclusive
from protobench.suite.bench import Bench
from protobench.suite.case import case
from protobench.suite.port import Received, Sent
from protobench.suite.tester import Tester
from protobench.suite.tools import expect_drops


def _halt(tester: Tester, **options: object) -> Received:
    receipt = tester.answered(tester.send("halt", **options), "HLT-03")
    if receipt.kind != "halt-receipt":
        raise Failed(f"a halt must be answered by a halt-receipt; {receipt.kind} came", clause="HLT-03")
    return receipt


@case(
    "HLT.every-state",
    "valid",
    "A halt is executed idle, energized, halted, faulted and beside another's lease, and counts each time.",
    clauses=["HLT-01", "HLT-03", "HLT-04", "HLT-05", "HLT-06"],
)
def test_every_state(bench: Bench) -> None:
    a, stranger = bench.a, bench.b
    count = a.status()["halt_count"]
    steps = [
        lambda: None,
        a.make_ready,
        lambda: None,
        lambda: a.send("status", source=bench.address),
        a.reset,
    ]
    for step in steps:
        step()
        receipt = _halt(stranger)
        count = (count + 1) % (1 << 32)
        if (
            receipt["halt_count"] != count
            or receipt["disposition"] != "at-rest"
            or receipt["epoch"] != a.epoch
        ):
            raise Failed(f"halt number {count} at rest was answered {receipt.fields}", clause="HLT-05")
        status = a.status()
        if not status["halt_latch"] or status["halt_count"] != count or status["halt_cause"] != "request":
            raise Failed("a halt must set the halt latch, count and cause", clause="HLT-06")


@case(
    "HLT.unexamined",
    "invalid",
    "Version, flags, length field, body and number of a halt do not matter.",
    clauses=["HLT-02", "VER-04", "HLT-01"],
)
def test_unexamined(bench: Bench) -> None:
    a = bench.a
    shapes: list[dict[str, object]] = [
        {"version": 2}, {"version": 255}, {"flags": 0xFF}, {"body": b""}, {"body": b"\xc1"}, {"body": b"\x80\x80"},
        {"body": b"\xff" * 229}, {"body_length": 0}, {"body_length": 255}, {"number": 0}, {"number": 0xFFFFFFFF},
        {"body": b"\x81\x50\x00"}, {"session": 0},
        {"version": 7, "flags": 0x80, "body": b"\x00" * 60, "body_length": 3},
    ]  # fmt: skip
    with expect_drops(bench, {}, "HLT-02"):
        for shape in shapes:
            count = a.status()["halt_count"]
            sent = a.send("halt", **shape)
            receipt = a.answered(sent, "HLT-02")
            if receipt.kind != "halt-receipt" or a.status()["halt_count"] != count + 1:
                raise Failed(f"a halt with {shape} must be executed", clause="HLT-02")
            if receipt.frame.number != sent.number:
                raise Failed("the halt receipt must repeat the halt's number", clause="ACK-02")


@case(
    "HLT.odd-sources",
    "invalid",
    "A halt from a source that cannot be answered is executed and not answered.",
    clauses=["HLT-14", "HLT-02", "ADR-02"],
)
def test_odd_sources(bench: Bench) -> None:
    a = bench.a
    count = a.status()["halt_count"]
    sources = [0, 0xF0000000, 0xFFFFFFFE, 0xFFFFFFFF, bench.address]
    with expect_drops(bench, {}, "HLT-14"):
        for source in sources:
            a.send("halt", source=source)
        a.silent("a halt from a source that cannot be answered", "HLT-14")
    found = a.status()["halt_count"] - count
    if found != len(sources):
        raise Failed(f"{len(sources)} halts from odd sources were executed {found} times", clause="HLT-14")


@case(
    "HLT.copies",
    "valid",
    "Copies of a halt are executed each time and answered afresh.",
    clauses=["HLT-01", "HLT-05", "HLT-06"],
)
def test_copies(bench: Bench) -> None:
    a = bench.a
    sent = a.send("halt")
    first = a.answered(sent)["halt_count"]
    for place in range(1, 4):
        receipt = a.answered(a.send_frame(sent.frame_bytes))
        if receipt["halt_count"] != (first + place) % (1 << 32):
            raise Failed("a copied halt must be executed and answered afresh", clause="HLT-01")
    a.take_lease()
    a.reset()
    a.answered(a.send_frame(sent.frame_bytes))
    if not a.status()["halt_latch"]:
        raise Failed("a late copy of a halt must halt again", clause="HLT-01")


@case(
    "HLT.running",
    "valid",
    "A halt stops a running motion in time; queued ones end halted, never begun; nothing is left over.",
    clauses=["HLT-07", "HLT-05", "HLT-09", "MOT-16", "ACK-07"],
    needs="stoppable",
)
def test_running(bench: Bench) -> None:
    a = bench.a
    a.make_ready(20_000)
    facts = bench.facts.stoppable()
    moves = [a.move(facts.name)]
    if bench.facts.has("queue"):
        moves.append(a.move(facts.name))
    bench.port.wait_until(moves[0].time_ns + round(facts.stoppable_ms / 3 * 1e6))
    sent = bench.b.send("halt")
    receipt = bench.b.answered(sent)
    if receipt["disposition"] != "stopping" and bench.facts.has("virtual"):
        raise Failed(f"a halt during a motion said {receipt['disposition']}", clause="HLT-05")
    outcomes = [a.ended(move, "halted", "halt", "HLT-07") for move in moves]
    _check_stop(bench, sent, moves[0], outcomes[0])
    for outcome in outcomes[1:]:
        if outcome["displacement"] or outcome["duration_ms"]:
            raise Failed("a queued motion was begun though halted", clause="HLT-07")
    _check_residue(bench, a)


def _check_stop(bench: Bench, halt: Sent, move: Sent, outcome: Received) -> None:
    magnitude = move.fields["magnitude"]
    part = outcome["displacement"] * (1 if magnitude > 0 else -1)
    if not 0 <= part < abs(magnitude):
        raise Failed(f"a halted motion of {magnitude} tells {outcome['displacement']}", clause="HLT-07")
    took_ms = (outcome.time_ns - halt.time_ns) / 1e6
    limit_ms = bench.facts.stop_ms + bench.facts.receipt_ms + bench.port.u_ms + 1
    if took_ms > limit_ms:
        words = f"{took_ms:.1f} ms from halt to outcome; at most {limit_ms:.1f} ms"
        if bench.facts.has("virtual") or took_ms > 2 * limit_ms + 100:
            raise Failed(words, clause="MOT-16")
        raise Inconclusive(words)


def _check_residue(bench: Bench, a: Tester) -> None:
    """After a halt and the way back, exactly what is asked for happens."""
    position = a.status()["position"]
    bench.port.wait_ms(bench.longest_ms)
    status = a.status()
    if status["position"] != position or status["queued"] or status["activity"] == "moving":
        raise Failed("something of before the halt was left over", clause="HLT-07")
    a.refused("halted", "move", **a.move_fields(), clause="HLT-09")
    a.reset()
    if a.status()["activity"] == "moving":
        raise Failed("reset started a motion", clause="HLT-11")
    a.accepted("energize", clause="STA-09")
    moved = a.ended(a.move(), "done", "none", "HLT-11")["displacement"]
    if a.status()["position"] != position + moved:
        raise Failed("after halt and reset more moved than was asked for", clause="HLT-11")


@case(
    "HLT.scheduled",
    "valid",
    "A halt ends scheduled motions halted, never begun, at once when nothing runs.",
    clauses=["HLT-07"],
    needs="schedule and travel",
)
def test_scheduled(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    start = (a.read("time-exchange", t1=0)["t3"] + 300_000) % (1 << 32)
    move = a.move(start_at=start)
    _halt(a)
    outcome = a.ended(move, "halted", "halt", "HLT-07", within_ms=250)
    bench.port.wait_ms(350)
    if outcome["displacement"] or a.status()["activity"] == "moving" or a.status()["scheduled"]:
        raise Failed("a scheduled motion was begun though halted", clause="HLT-07")


@case(
    "HLT.past-return",
    "inopportune",
    "Past the point of no return a halt says so, the motion lands and notes it, what waits ends halted.",
    clauses=["HLT-08", "HLT-05", "HLT-07", "HLT-13", "STA-02"],
    needs="ballistic and assist",
)
def test_past_return(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    facts = bench.facts.ballistic()
    a.hold("committed")
    move = a.move(facts.name)
    queued = a.move() if bench.facts.has("queue") else None
    a.wait_begun()
    bench.port.wait_ms(facts.no_return_ms + 20)
    if _halt(bench.b)["disposition"] != "past-no-return":
        raise Failed("a halt past the point of no return must say so", clause="HLT-05")
    if a.status()["state"] != "stopping":
        raise Failed("moving with the halt latch set is displayed as stopping", clause="STA-02")
    a.refused("moving", "reset", halt_count=a.status()["halt_count"], clause="HLT-13")
    a.release_hold()
    outcome = a.outcome(move)
    a.confirm(outcome)
    if outcome["outcome"] not in ("done", "failed") or outcome["interrupted"] != "halt":
        raise Failed(
            f"it ended {outcome['outcome']}, interrupted {outcome['interrupted']}, not landed with halt noted",
            clause="HLT-08",
        )
    if queued is not None:
        a.ended(queued, "halted", "halt", "HLT-07")
    if a.status()["activity"] != bench.facts.settles_for("halt"):
        raise Failed("after landing the halt must take the power as declared", clause="HLT-10")


@case(
    "HLT.before-return",
    "valid",
    "Before its point of no return a ballistic motion is stopped by a halt.",
    clauses=["HLT-07", "HLT-05"],
    needs="ballistic and assist",
)
def test_before_return(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    a.hold("running")
    move = a.move(bench.facts.ballistic().name)
    bench.port.wait_ms(bench.facts.receipt_ms + 5)
    if _halt(a)["disposition"] != "stopping":
        raise Failed("a halt before the point of no return says stopping", clause="HLT-05")
    a.ended(move, "halted", "halt", "HLT-07")


@case(
    "HLT.settles",
    "valid",
    "After a halt power is off unless an actuator is declared to hold.",
    clauses=["HLT-10"],
)
def test_settles(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    _halt(a)
    bench.port.wait_ms(bench.facts.stop_ms)
    wanted = bench.facts.settles_for("halt")
    if a.status()["activity"] != wanted:
        raise Failed(f"after a halt the activity must be {wanted}", clause="HLT-10")
    if bench.facts.has("assist") and a.truth()["energized"] != (wanted == "energized"):
        raise Failed("after a halt power and activity disagree", clause="HLT-10")


@case("HLT.reset", "valid", "reset clears the halt latch and nothing else.", clauses=["HLT-11"])
def test_reset(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    a.send("status", source=bench.address)
    before = a.status()
    a.reset()
    after = a.status()
    for name in (
        "activity",
        "fault_latch",
        "latched_faults",
        "halt_count",
        "position",
        "lease",
        "holder_session",
    ):
        if after[name] != before[name]:
            raise Failed(f"reset changed {name} from {before[name]} to {after[name]}", clause="HLT-11")
    if after["halt_latch"] or not after["fault_latch"]:
        raise Failed("reset must clear the halt latch and no fault", clause="HLT-11")
    a.accepted("reset", halt_count=after["halt_count"], clause="HLT-11")


@case(
    "HLT.reset-older",
    "inopportune",
    "reset with another halt count is refused with the current one.",
    clauses=["HLT-12"],
)
def test_reset_older(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    seen = a.status()["halt_count"]
    _halt(bench.b)
    for count in (seen, (seen + 2) % (1 << 32), 0):
        receipt = a.refused("newer-halt", "reset", halt_count=count, clause="HLT-12")
        if receipt.get("halt_count") != seen + 1:
            raise Failed("newer-halt must carry the current halt count", clause="HLT-12")
    if not a.status()["halt_latch"]:
        raise Failed("reset with an older count cleared the latch", clause="HLT-12")
    a.accepted("reset", halt_count=seen + 1, clause="HLT-12")


@case(
    "HLT.reset-stranger",
    "inopportune",
    "reset is refused to anyone but the holder.",
    clauses=["HLT-13", "LSE-03"],
)
def test_reset_stranger(bench: Bench) -> None:
    count = bench.a.status()["halt_count"]
    bench.b.refused("not-holder", "reset", halt_count=count, clause="HLT-13")
    bench.a.take_lease()
    bench.b.lease = bench.a.lease
    bench.b.refused("not-holder", "reset", halt_count=count, clause="HLT-13")
    if not bench.a.status()["halt_latch"]:
        raise Failed("a stranger's reset cleared the latch", clause="HLT-13")


@case("HLT.lease-stays", "valid", "A halt neither ends nor extends the lease.", clauses=["HLT-15", "LSE-07"])
def test_lease_stays(bench: Bench) -> None:
    a = bench.a
    a.take_lease(3000)
    bench.port.wait_ms(100)
    _halt(a)
    status = a.status()
    if (status["holder"], status["holder_session"]) != (a.address, a.session):
        raise Failed("a halt ended the lease", clause="HLT-15")
    if status["lease_remaining"] > 2900 + bench.port.u_ms + 1:
        raise Failed("a halt extended the lease", clause="HLT-15")


@case(
    "HLT.to-many",
    "valid",
    "A halt to all is executed at once, answered in its window, unanswered where its body states none.",
    clauses=["HLT-16", "ADR-07"],
)
def test_to_many(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    sent = a.send("halt", to=bench.broadcast, answer_window=400)
    if not a.status()["halt_latch"]:
        raise Failed("a halt to all waited for its answer", clause="ADR-07")
    receipt = a.answer(sent, 400 + a.patience_ms)
    if receipt is None or receipt.kind != "halt-receipt":
        raise Failed("a halt to all with a window was not answered", clause="HLT-16")
    count = a.status()["halt_count"]
    bodies: list[dict[str, object]] = [
        {},
        {"body": b"\xc1"},
        {"body": b""},
        {"answer_window": 2001},
        {"answer_window": 0},
    ]
    for body in bodies:
        a.send("halt", to=bench.broadcast, **body)
    a.silent("a halt to all without a readable window", "HLT-16", quiet_ms=60)
    if a.status()["halt_count"] != count + len(bodies):
        raise Failed("a halt to all whose body cannot be read must be executed", clause="HLT-02")


@case(
    "HLT.to-group",
    "valid",
    "A halt to a group is executed by its members and by nobody else.",
    clauses=["HLT-01", "ADR-14"],
    needs="groups",
)
def test_to_group(bench: Bench) -> None:
    a = bench.a
    original = list(a.read("read-groups")["groups"])
    a.take_lease()
    a.accepted("set-groups", groups=[GROUP], clause="ADR-13")
    try:
        count = a.status()["halt_count"]
        sent = a.send("halt", to=GROUP, answer_window=50)
        receipt = a.answer(sent, 50 + a.patience_ms)
        if receipt is None or receipt.kind != "halt-receipt" or a.status()["halt_count"] != count + 1:
            raise Failed("a halt to a group must be executed and answered by its member", clause="HLT-01")
        a.send("halt", to=GROUP + 1, answer_window=50)
        bench.port.wait_ms(60)
        if a.status()["halt_count"] != count + 1:
            raise Failed("a halt to a group was executed by a module that is no member", clause="ADR-14")
    finally:
        a.accepted("set-groups", groups=original, clause="ADR-13")


GROUP = 0xF0000A00


@case("HLT.not-included", "invalid", "A halt for somebody else does nothing.", clauses=["HLT-01", "ADR-01"])
def test_not_included(bench: Bench) -> None:
    a = bench.a
    count = a.status()["halt_count"]
    with expect_drops(bench, {"other-address": 3}, "ADR-01"):
        for address in (bench.other_address(), 0, 0xFFFFFFFE):
            a.send("halt", to=address)
        a.silent("a halt for another address", "ADR-01")
    damaged = a.frame("halt")
    bench.port.send(damaged[:-1] + bytes([damaged[-1] ^ 1]))
    if a.status()["halt_count"] != count:
        raise Failed("a halt for somebody else, or a damaged one, was executed", clause="HLT-01")


@case(
    "HLT.in-order",
    "inopportune",
    "What is judged before a halt keeps its receipt; what comes after is judged halted, in one piece too.",
    clauses=["HLT-09", "HLT-07", "ACK-16"],
    needs="travel",
)
def test_in_order(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    before = a.frame("move", **a.move_fields())
    halt = a.frame("halt")
    after = a.frame("move", **a.move_fields())
    time_ns = bench.port.send(before, halt, after)
    a.expect_accepted(a.sent(before, time_ns), "HLT-09")
    a.answered(a.sent(halt, time_ns), "HLT-03")
    a.expect_refused(a.sent(after, time_ns), "halted", "HLT-09")
    a.ended(a.sent(before, time_ns), "halted", "halt", "HLT-07")


@case(
    "HLT.prevails",
    "inopportune",
    "A halt right after a cancel prevails while the motion is not yet at rest.",
    clauses=["HLT-17", "HLT-07"],
    needs="stoppable and assist",
)
def test_prevails(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    a.hold("running")
    move = a.move(bench.facts.stoppable().name)
    bench.port.wait_ms(bench.facts.receipt_ms + 5)
    cancel, halt = a.frame("cancel"), a.frame("halt")
    time_ns = bench.port.send(cancel, halt)
    a.expect_accepted(a.sent(cancel, time_ns), "MOT-08")
    receipt = a.answered(a.sent(halt, time_ns), "HLT-03")
    wanted = ("halted", "halt") if receipt["disposition"] == "stopping" else ("cancelled", "cancel")
    a.ended(move, *wanted, "HLT-17")


@case(
    "HLT.prevails-order",
    "inopportune",
    "Of two things that stop a motion before it is at rest the stronger is its cause, whichever came first.",
    clauses=["HLT-17"],
    needs="stoppable and assist",
)
def test_prevails_order(bench: Bench) -> None:
    causes = [("cancel", "cancelled"), ("lease-end", "cancelled"), ("fault", "failed"), ("halt", "halted")]
    for place, (weaker, _) in enumerate(causes[:-1]):
        stronger, outcome = causes[place + 1]
        for order in ((weaker, stronger), (stronger, weaker)):
            _check_stronger(bench, order, outcome, stronger)
            bench.end()


def _check_stronger(bench: Bench, order: tuple[str, str], outcome: str, cause: str) -> None:
    a = bench.tester(bench.a.address)
    a.make_ready()
    a.hold("running")
    move = a.move(bench.facts.stoppable().name)
    bench.port.wait_ms(bench.facts.receipt_ms + 5)
    frames = [*(_stopping_frame(bench, a, name) for name in order), a.frame("status")]
    time_ns = bench.port.send(*frames)
    status = [a.answered(a.sent(frame, time_ns), "ACK-01") for frame in frames][-1]
    ended = a.outcome(move)
    a.confirm(ended)
    # a module that was at rest at once had only the first of the two to end it
    if status["activity"] == "moving" and (ended["outcome"], ended["cause"]) != (outcome, cause):
        raise Failed(
            f"a motion stopped by {' and '.join(order)} ended {ended['outcome']}, cause {ended['cause']}",
            clause="HLT-17",
        )


def _stopping_frame(bench: Bench, tester: Tester, cause: str) -> bytes:
    if cause == "fault":
        code = bench.fault_code("over-current")
        bench.raised.add(code)
        return tester.frame("assist", op="raise", code=code)
    return tester.frame({"lease-end": "release-lease"}.get(cause, cause))


@case(
    "HLT.under-load",
    "valid",
    "A halt is executed and answered in time with a full queue, telemetry and a flood before it.",
    clauses=["HLT-03", "LOD-01", "ACK-03"],
    needs="travel",
)
def test_under_load(bench: Bench) -> None:
    a = bench.a
    a.make_ready(20_000)
    if bench.facts.has("telemetry"):
        a.accepted("telemetry-on", period=20, duration=2000, clause="TIM-04")
    moves = [
        a.move()
        for _ in range(min(4, 1 + bench.facts.description["queue"], bench.facts.description["outcomes"]))
    ]
    flood = [a.frame("status", to=bench.other_address()) for _ in range(200)]
    bench.port.send(*flood)
    sent = a.send("halt")
    receipt = a.answered(sent, "HLT-03")
    delay_ms = (receipt.time_ns - sent.time_ns) / 1e6
    limit_ms = bench.facts.receipt_ms + bench.port.u_ms
    if delay_ms > limit_ms and (bench.facts.has("virtual") or delay_ms > 2 * limit_ms + 100):
        raise Failed(f"a halt behind load was answered after {delay_ms:.1f} ms", clause="HLT-03")
    for move in moves:
        outcome = a.outcome(move)
        a.confirm(outcome)
        if outcome["outcome"] not in ("halted", "done"):
            raise Failed(f"a motion before a halt ended {outcome['outcome']}", clause="HLT-07")
    if bench.facts.has("telemetry"):
        a.accepted("telemetry-off", clause="TIM-06")
