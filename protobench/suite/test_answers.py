"""Answers: one receipt for each request, one outcome for each motion, repeated until confirmed, never lost."""

from __future__ import annotations

from typing import Any

from protobench.judge import Failed, Inconclusive, NotApplicable
from protobench.suite.bench import CONTROLLER_A, Bench
from protobench.suite.case import case
from protobench.suite.port import Received, Sent
from protobench.suite.tester import PATIENCE_MS, Tester, is_outcome_of
from protobench.suite.tools import expect_drops

REPEATS_MS = (200, 400, 800, 1600)
RESEND_SPACING_MS = 100


@case(
    "ACK.one-answer",
    "valid",
    "Each request gets exactly one answer of its own kind.",
    clauses=["ACK-01", "ACK-02"],
)
def test_one_answer(bench: Bench) -> None:
    a = bench.a
    for kind in ("describe", "status", "probe", "read-counters", "read-faults", "read-motions"):
        sent = a.send(kind)
        answer = a.answered(sent)
        wanted = bench.contract.kind(kind).answer
        if answer.kind != wanted:
            raise Failed(f"{kind} must be answered by {wanted}; {answer.kind} came", clause="ACK-01")
        if answer.frame.source != bench.address:
            raise Failed(f"{kind} was answered from 0x{answer.frame.source:x}", clause="ACK-02")
    a.take_lease()
    a.answered(a.send("halt"))
    a.silent("a request that was answered already", "ACK-01", quiet_ms=60)


@case(
    "ACK.time",
    "valid",
    "Unicast answers leave within the declared time and not before the declared turnaround.",
    clauses=["ACK-03", "DSC-06"],
)
def test_time(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    turnaround_ms = bench.facts.description["turnaround_us"] / 1000
    kinds = [
        "describe",
        "status",
        "renew-lease",
        "halt",
        "read-motions",
        "renew-lease",
        "energize",
        "read-counters",
    ]
    late = []
    for place in range(48):
        kind = kinds[place % len(kinds)]
        sent = a.send(kind, **({"duration": 9000} if kind == "renew-lease" else {}))
        delay_ms = (a.answered(sent).time_ns - sent.time_ns) / 1e6
        if delay_ms > bench.facts.receipt_ms + bench.port.u_ms:
            late.append((delay_ms, kind))
        if delay_ms + bench.port.u_ms < turnaround_ms:
            raise Failed(
                f"{kind} was answered after {delay_ms:.3f} ms, before the turnaround", clause="ACK-03"
            )
    if late:
        _judge_late(bench, a, late)


def _judge_late(bench: Bench, a: Tester, late: list[tuple[float, str]]) -> None:
    """In real time one late answer may be the machine's doing: it must happen again."""
    if bench.facts.has("virtual"):
        raise Failed(
            f"an answer took {late[0][0]:.3f} ms, {bench.facts.receipt_ms} ms are declared", clause="ACK-03"
        )
    again = 0
    for _ in range(20):
        sent = a.send(late[0][1], **({"duration": 9000} if late[0][1] == "renew-lease" else {}))
        again += (a.answered(sent).time_ns - sent.time_ns) / 1e6 > bench.facts.receipt_ms + bench.port.u_ms
    delay_ms, kind = late[0]
    words = (
        f"{kind} took {delay_ms:.1f} ms, {bench.facts.receipt_ms} are declared, u = {bench.port.u_ms:.1f} ms"
    )
    if again >= 15:
        raise Failed(f"{words}; so did {again} of 20 more", clause="ACK-03")
    raise Inconclusive(f"{words}; {again} of 20 more were late too: the bench or the link may be slow")


@case(
    "ACK.receipt-first",
    "valid",
    "The receipt of a move leaves before the motion begins.",
    clauses=["ACK-04"],
    needs="assist and travel and virtual",
)
def test_receipt_first(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    exchange = a.read("time-exchange", t1=0)
    sent = a.send("move", **a.move_fields())
    receipt = a.expect_accepted(sent, "MOT-01")
    a.ended(sent, "done", "none", "MOT-04")
    begun = next(
        entry
        for entry in a.truth()["entries"]
        if entry.event == bench.language.number_of("truth_event", "motion-start")
    )
    begun_ns = exchange.time_ns + ((begun.time - exchange["t3"]) % (1 << 32)) * 1000
    if begun_ns + 1000 < receipt.time_ns:
        raise Failed(
            f"the motion began {(receipt.time_ns - begun_ns) / 1e6:.3f} ms before its receipt came",
            clause="ACK-04",
        )


@case(
    "ACK.refusal-order",
    "invalid",
    "Of several reasons to refuse, the first in the table is given, with the lowest key.",
    clauses=["ACK-05"],
)
def test_refusal_order(bench: Bench) -> None:
    a, b = bench.a, bench.b
    a.take_lease()
    b.lease = a.lease
    wrong = a.epoch + 1
    refused = a.refused
    refused("unsupported-version", "energize", version=2, flags=1, epoch=wrong, clause="ACK-05")
    refused("unsupported-version", 0x3A, version=9, clause="ACK-05")
    refused("unknown-kind", 0x3A, flags=1, body=b"\xc1", clause="ACK-05")
    refused("not-understood", "energize", flags=1, body=b"\xc1", clause="ACK-05")
    refused("malformed", "take-lease", body=b"\x83\x02\x00\x01\x00\x00\x00", clause="ACK-05")
    refused("not-understood", "take-lease", body=b"\x82\x00\xc3\x50\x00", key=80, clause="ACK-05")
    refused("malformed", "move", epoch=wrong, lease=None, motion=99, key=1, clause="ACK-05")
    refused("stale-epoch", "take-lease", epoch=wrong, lease=a.lease + 1, duration=1, clause="ACK-05")
    refused("stale-lease", "take-lease", lease=a.lease + 1, duration=1, clause="ACK-05")
    b.refused("stale-epoch", "move", epoch=wrong, motion=99, clause="ACK-05")
    b.refused("not-holder", "move", motion=99, magnitude=2**31, clause="ACK-05")
    b.refused("lease-held", "take-lease", duration=1, clause="ACK-05")
    refused("out-of-range", "move", motion=99, magnitude=2**31, face=16, key=2, clause="ACK-05")
    refused("out-of-range", "reset", halt_count=2**32, key=2, clause="ACK-05")
    refused("halted", "energize", clause="ACK-05")
    conflicting = a.send("renew-lease", duration=9000)
    a.answered(conflicting)
    a.expect_refused(
        a.send_frame(a.frame(0x3A, number=conflicting.number, flags=1, body=b"\xc1")), "conflict", "ACK-05"
    )


@case(
    "ACK.refusal-order-motion",
    "invalid",
    "The order holds among the reasons that concern motion.",
    clauses=["ACK-05", "MOT-01", "MOT-02", "MOT-03"],
    needs="travel",
)
def test_refusal_order_motion(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    fields = a.move_fields()
    high = bench.facts.motions[fields["motion"]].magnitude_max
    absent = next(
        (name for name in bench.contract.enum_values("motion") if name not in bench.facts.motions), None
    )
    if absent is not None:
        a.refused("unsupported", "move", motion=absent, magnitude=2**31 - 1, face=15, key=2, clause="ACK-05")
    a.refused("out-of-range", "move", **fields | {"magnitude": high + 1, "face": 15}, key=3, clause="ACK-05")
    a.refused("out-of-range", "move", **fields | {"face": 1}, key=4, clause="ACK-05")
    a.refused("halted", "move", **fields, clause="ACK-05")
    a.reset()
    a.refused("not-energized", "move", **fields, clause="ACK-05")
    if bench.facts.has("schedule"):
        a.refused("not-energized", "move", **fields, start_at=0, clause="ACK-05")
    else:
        a.refused("unsupported", "move", **fields | {"face": 9}, start_at=0, key=64, clause="ACK-05")


@case(
    "ACK.refusal-harmless",
    "invalid",
    "A refused request changes nothing but the history.",
    clauses=["ACK-06", "LSE-07"],
)
def test_refusal_harmless(bench: Bench) -> None:
    a, b = bench.a, bench.b
    a.make_ready(20_000)
    before = a.status()
    bench.port.wait_ms(50)
    b.lease = a.lease
    requests: list[tuple[Tester, str | int, dict[str, Any]]] = [
        (b, "de-energize", {}),
        (b, "release-lease", {}),
        (b, "take-lease", {"duration": 1000}),
        (b, "renew-lease", {"duration": 1000}),
        (a, "renew-lease", {"duration": 100}),
        (a, "move", {"motion": 99}),
        (a, "reset", {"halt_count": before["halt_count"] + 1}),
        (a, "clear-faults", {"occurrences": [77]}),
        (a, "release-lease", {"epoch": a.epoch + 1}),
        (a, 0x3A, {}),
        (a, "cancel", {"target": 12345}),
    ]
    for tester, kind, fields in requests:
        if tester.ask(kind, **fields).get("result") != "refused":
            raise Failed(f"{kind} must be refused here", clause="ACK-06")
    after = a.status()
    changed = [
        name
        for name, value in before.fields.items()
        if name not in ("clock", "lease_remaining", "supply", "battery", "temperatures")
        and after[name] != value
    ]
    if changed:
        raise Failed(f"refused requests changed {', '.join(changed)}", clause="ACK-06")
    if after["lease_remaining"] > before["lease_remaining"] - 50 + bench.port.u_ms + 1:
        raise Failed("a refused request extended the lease", clause="LSE-07")


@case(
    "ACK.outcome",
    "valid",
    "A move ends in one outcome that names requester, motion, ending and measured values.",
    clauses=["ACK-07", "ACK-08", "MOT-04"],
    needs="travel",
)
def test_outcome(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    move = a.move()
    outcome = a.ended(move, "done", "none", "ACK-08")
    if outcome["epoch"] != a.epoch or outcome["motion"] != move.fields["motion"]:
        raise Failed("the outcome names another epoch or motion", clause="ACK-08")
    facts = bench.facts.motions[outcome["motion"]]
    measured_ms = (outcome.time_ns - move.time_ns) / 1e6
    if not 0 < outcome["duration_ms"] <= min(facts.longest_ms, measured_ms + 1 + bench.port.u_ms):
        raise Failed(f"a duration of {outcome['duration_ms']} ms cannot be", clause="ACK-08")
    if a.status()["activity"] != "energized":
        raise Failed("after its outcome the module must be at rest", clause="ACK-07")
    bench.port.wait_ms(300)
    if bench.port.take_all(lambda received: is_outcome_of(received, move)):
        raise Failed("a confirmed outcome was sent again", clause="ACK-11")


@case(
    "ACK.outcome-repeats",
    "valid",
    "An unconfirmed outcome is sent again after 200, 400, 800 and 1600 ms, byte-identical, and then no more.",
    clauses=["ACK-09", "ACK-14"],
    needs="travel",
)
def test_outcome_repeats(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    move = a.move()
    first = a.outcome(move)
    times = [first.time_ns]
    bench.b.answered(bench.b.send("halt"))  # a visible change, which a repeat does not tell
    slack_ms = bench.facts.receipt_ms + bench.port.u_ms
    for gap_ms in REPEATS_MS:
        again = a.outcome_or_none(move, gap_ms + PATIENCE_MS)
        if again is None:
            raise Failed(f"an unconfirmed outcome was not sent again after {gap_ms} ms", clause="ACK-09")
        if again.frame_bytes != first.frame_bytes:
            raise Failed("a repeated outcome must be byte-identical", clause="ACK-09")
        times.append(again.time_ns)
        found_ms = (times[-1] - times[-2]) / 1e6
        if not gap_ms - slack_ms <= found_ms <= gap_ms + slack_ms + bench.port.u_ms:
            _late_or_failed(bench, f"a repeat came after {found_ms:.1f} ms, {gap_ms} ms are due", "ACK-09")
    if a.outcome_or_none(move, 3500 if bench.facts.has("virtual") else 1000) is not None:
        raise Failed("an outcome was sent more than five times", clause="ACK-09")
    if a.status()["unconfirmed"] != 1:
        raise Failed("an unconfirmed outcome must stay readable", clause="ACK-14")


def _late_or_failed(bench: Bench, words: str, clause: str) -> None:
    if bench.facts.has("virtual") or bench.port.u_ms < LOADED_U_MS:
        raise Failed(words, clause=clause)
    raise Inconclusive(f"{words}, but the bench itself was late by up to {bench.port.u_ms / 3:.0f} ms")


LOADED_U_MS = 30


@case(
    "ACK.copy-brings-outcome",
    "valid",
    "A copied move brings its unconfirmed outcome after the receipt, at most once in 100 ms.",
    clauses=["ACK-10", "SEQ-03"],
    needs="travel",
)
def test_copy_brings_outcome(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    move = a.move()
    first = a.outcome(move)
    bench.port.wait_ms(RESEND_SPACING_MS + 10 + bench.port.u_ms)
    bench.port.take_all(lambda received: is_outcome_of(received, move))
    a.answered(a.send_frame(move.frame_bytes), "SEQ-03")
    brought = a.outcome_or_none(move, bench.facts.receipt_ms + 20 + bench.port.u_ms)
    if brought is None:
        raise Failed("a copied move must bring its unconfirmed outcome again", clause="ACK-10")
    _check_repeat_in_time(bench, move, first, brought)
    begin_ns = bench.port.now_ns
    for copy in [a.send_frame(move.frame_bytes) for _ in range(4)]:
        a.answered(copy, "SEQ-03")
    for _ in range(4):
        a.answered(a.send_frame(move.frame_bytes), "SEQ-03")
        bench.port.wait_ms(bench.facts.receipt_ms)
    came = bench.port.take_all(lambda received: is_outcome_of(received, move))
    allowed = 2 + (bench.port.now_ns - begin_ns) // (RESEND_SPACING_MS * 1_000_000)
    if len(came) > allowed:
        raise Failed(f"eight copies brought the outcome {len(came)} times", clause="ACK-10")


def _check_repeat_in_time(bench: Bench, move: Sent, first: Received, brought: Received) -> None:
    """The timer's own repeat comes 200 ms after the first sending, whatever a copy brought in between."""
    slack_ms = bench.facts.receipt_ms + bench.port.u_ms
    if (brought.time_ns - first.time_ns) / 1e6 > REPEATS_MS[0] - slack_ms:
        return  # too late to tell the two apart
    repeat = bench.a.outcome_or_none(move, REPEATS_MS[0] + PATIENCE_MS)
    after_ms = (repeat.time_ns - first.time_ns) / 1e6 if repeat else -1
    if abs(after_ms - REPEATS_MS[0]) > slack_ms + bench.port.u_ms:
        _late_or_failed(bench, f"beside a copy the first repeat came after {after_ms:.1f} ms", "ACK-10")


@case(
    "ACK.copy-brings-its-own",
    "valid",
    "A copied move brings its own outcome and no other.",
    clauses=["ACK-10"],
    needs="travel and virtual",
)
def test_copy_brings_its_own(bench: Bench) -> None:
    a = bench.a
    a.make_ready(20_000)
    moves = []
    for _ in range(2):
        moves.append(a.move())
        a.outcome(moves[-1])
    bench.port.wait_ms(sum(REPEATS_MS) + PATIENCE_MS)
    bench.port.take_all(lambda received: received.kind == "outcome")
    a.answered(a.send_frame(moves[0].frame_bytes), "SEQ-03")
    bench.port.wait_ms(bench.facts.receipt_ms + 20)
    came = [received.frame.number for received in bench.port.take_all(lambda r: r.kind == "outcome")]
    if came != [moves[0].number]:
        raise Failed(f"a copy of move {moves[0].number} brought the outcomes of {came}", clause="ACK-10")


@case(
    "ACK.confirm",
    "valid",
    "A confirm gets no answer, ends the repeats and frees the place; the record stays readable.",
    clauses=["ACK-11", "ACK-14"],
    needs="travel",
)
def test_confirm(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    move = a.move()
    outcome = a.outcome(move)
    with expect_drops(bench, {}, "ACK-11"):
        a.confirm(outcome)
        a.silent("a confirm", "ACK-11")
    status = a.status()
    if status["unconfirmed"] != 0:
        raise Failed("a confirmed outcome must free its place", clause="ACK-11")
    if a.outcome_or_none(move, 450) is not None:
        raise Failed("a confirmed outcome was sent again", clause="ACK-11")
    records = bench.motion_entries(a)
    if [(record.event, record.number, record.confirmed) for record in records[:1]] != [
        (outcome["event"], move.number, 1)
    ]:
        raise Failed(f"the motion record says {records[:1]}", clause="ACK-14")
    with expect_drops(bench, {"stale-confirm": 1}, "ACK-12"):
        a.confirm(outcome)


@case(
    "ACK.confirm-wrong",
    "invalid",
    "A confirm of another epoch, event or requester changes nothing and is dropped as stale-confirm.",
    clauses=["ACK-12"],
    needs="travel",
)
def test_confirm_wrong(bench: Bench) -> None:
    a, b = bench.a, bench.b
    a.make_ready()
    outcome = a.outcome(a.move())
    with expect_drops(bench, {"stale-confirm": 5}, "ACK-12"):
        a.confirm(outcome, epoch=a.epoch + 1)
        a.confirm(outcome, event=outcome["event"] + 1000)
        b.confirm(outcome)
        a.send("confirm", body=b"\xc1")
        a.send("confirm", epoch=outcome["epoch"], event=outcome["event"], flags=4)
    if a.status()["unconfirmed"] != 1:
        raise Failed("a wrong confirm freed an outcome", clause="ACK-12")
    a.confirm(outcome)


@case(
    "ACK.requester-and-holder",
    "valid",
    "The requester is told its outcome and can confirm it without the lease; a later holder can confirm it too.",
    clauses=["ACK-11", "ACK-08"],
    needs="travel",
)
def test_requester_and_holder(bench: Bench) -> None:
    a, b = bench.a, bench.b
    a.make_ready()
    first = a.outcome(a.move())
    move = a.move()
    second = a.outcome(move)
    a.accepted("release-lease", clause="LSE-11")
    b.take_lease()
    bench.port.take_all(lambda received: received.kind == "outcome")
    if a.outcome_or_none(move, REPEATS_MS[0] + REPEATS_MS[1] + PATIENCE_MS) is None:
        raise Failed("an outcome must be repeated to its requester, whoever holds the lease", clause="ACK-08")
    a.confirm(first)
    if b.status()["unconfirmed"] != 1:
        raise Failed("the requester's confirm must count without the lease", clause="ACK-11")
    b.confirm(second)
    if b.status()["unconfirmed"] != 0:
        raise Failed("the holder's confirm must count for another's outcome", clause="ACK-11")


@case(
    "ACK.outcomes-full",
    "inopportune",
    "With every outcome unconfirmed a move is refused outcomes-full; none is overwritten; one confirm makes room.",
    clauses=["ACK-13", "ACK-14", "ACK-15"],
    needs="travel",
)
def test_outcomes_full(bench: Bench) -> None:
    a = bench.a
    a.make_ready(30_000)
    places = bench.facts.description["outcomes"]
    if places > MOST_OUTCOMES:
        raise NotApplicable(f"{places} outcomes would take too long to fill", item="sizes.outcomes")
    outcomes = [a.outcome(a.move()) for _ in range(places)]
    for _ in range(2):
        a.refused("outcomes-full", "move", **a.move_fields(), clause="ACK-13")
    records = bench.motion_entries(a)
    if [record.event for record in records[:places]] != [outcome["event"] for outcome in reversed(outcomes)]:
        raise Failed("read-motions must list every unconfirmed outcome, newest first", clause="ACK-14")
    page = a.read("read-motions", page=255)
    if page["entries"] or page["total"] != len(records):
        raise Failed("a page past the end must be empty and total the same", clause="ACK-15")
    a.confirm(outcomes[0])
    a.confirm(a.outcome(a.move()))
    for outcome in outcomes[1:]:
        a.confirm(outcome)


MOST_OUTCOMES = 64


@case(
    "ACK.outcome-time",
    "valid",
    "The outcome is sent after the module is at rest and within its time.",
    clauses=["ACK-07"],
    needs="assist and travel",
)
def test_outcome_time(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    outcome = a.ended(a.move(), "done", "none", "ACK-07")
    rest = bench.language.number_of("truth_event", "at-rest")
    asked = a.send("time-exchange", t1=0)
    exchange = a.answered(asked)
    entry = next(entry for entry in a.truth()["entries"] if entry.event == rest)
    since_rest_ns = (exchange["t3"] - entry.time) % (1 << 32) * 1000
    # t3 lies between the bench's stamps of request and answer, so rest is known to lie between these two.
    rest_first_ns, rest_last_ns = asked.time_ns - since_rest_ns, exchange.time_ns - since_rest_ns
    if outcome.time_ns < rest_first_ns - 2000:
        raise Failed(
            f"the outcome came {(rest_first_ns - outcome.time_ns) / 1e6:.3f} ms before rest", clause="ACK-07"
        )
    late_ms = (outcome.time_ns - rest_last_ns) / 1e6 - bench.facts.receipt_ms - bench.port.u_ms - 0.002
    if late_ms > 0:
        _late_or_failed(
            bench, f"the outcome came {late_ms:.3f} ms later after rest than is allowed", "ACK-07"
        )


@case(
    "ACK.order",
    "valid",
    "Reads and commands that come in one piece are answered in their order.",
    clauses=["ACK-16", "FRM-17"],
)
def test_order(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    for _ in range(3):
        frames = [
            a.frame("renew-lease", duration=9000),
            a.frame("time-exchange", t1=1),
            a.frame("cancel"),
            a.frame("describe"),
        ]
        time_ns = bench.port.send(*frames)
        numbers = [a.sent(frame, time_ns).number for frame in frames]
        bench.port.wait_ms(a.patience_ms)
        came = [
            received.frame.number for received in bench.port.take_all(lambda r: r.frame.session == a.session)
        ]
        if came != numbers:
            raise Failed(f"requests {numbers} were answered in the order {came}", clause="ACK-16")


@case(
    "ACK.answers-kept-apart",
    "valid",
    "Requests of two controllers sent together are each answered to their own sender.",
    clauses=["ACK-02", "ACK-16", "SEQ-01"],
)
def test_answers_kept_apart(bench: Bench) -> None:
    testers = [bench.a, bench.b, bench.tester(CONTROLLER_A + 5)]
    for _ in range(5):
        frames = [tester.frame("time-exchange", t1=tester.address, number=4) for tester in testers]
        time_ns = bench.port.send(*frames)
        for tester, frame in zip(testers, frames, strict=True):
            answer = _own(tester, tester.sent(frame, time_ns))
            if answer["t1"] != tester.address:
                raise Failed("an answer went to another controller", clause="ACK-02")


def _own(tester: Tester, sent: Sent) -> Received:
    return tester.answered(sent, "ACK-02")
