"""Lease: one session commands at a time, for a time, and its end stops what it began."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from protobench.judge import Failed, Inconclusive
from protobench.suite.bench import Bench
from protobench.suite.case import case
from protobench.suite.port import Received
from protobench.suite.tester import Tester
from protobench.suite.tools import expect_silent_refusals

SHORTEST_MS = 500
EXPIRY_SLACK_MS = 50
COMMANDS: dict[str, dict[str, Any]] = {
    "reset": {"halt_count": 0},
    "renew-lease": {"duration": 9000},
    "release-lease": {},
    "energize": {},
    "de-energize": {},
    "move": {"motion": 1, "magnitude": 1},
    "cancel": {},
    "clear-faults": {"occurrences": [1]},
}


def _remaining(tester: Tester) -> int:
    return int(tester.status()["lease_remaining"])


def _held(tester: Tester) -> bool:
    status = tester.status()
    return bool(status["holder"] == tester.address and status["holder_session"] == tester.session)


@case(
    "LSE.take",
    "valid",
    "A free lease is granted with a number one higher, told in receipt, status and description.",
    clauses=["LSE-01", "LSE-14"],
)
def test_take(bench: Bench) -> None:
    a = bench.a
    for _ in range(3):
        before = a.read("describe")["lease"]
        receipt = a.take_lease(5000)
        if receipt.get("lease") != (before + 1) % (1 << 32):
            raise Failed(f"lease number {before} was followed by {receipt.get('lease')}", clause="LSE-01")
        status = a.status()
        if not _held(a) or status["lease"] != a.lease or a.read("describe")["lease"] != a.lease:
            raise Failed("status and description must tell holder and number", clause="LSE-14")
        if not 0 < status["lease_remaining"] <= 5000:
            raise Failed(f"lease_remaining is {status['lease_remaining']} of 5000 ms", clause="LSE-14")
        a.accepted("release-lease", clause="LSE-11")
    status = a.status()
    if status["holder"] or status["holder_session"] or status["lease_remaining"]:
        raise Failed("a free lease has holder, session and remaining 0", clause="LSE-14")


@case(
    "LSE.remaining",
    "valid",
    "What remains of the lease is told as less and less, never as more than is left.",
    clauses=["LSE-14"],
)
def test_remaining(bench: Bench) -> None:
    a = bench.a
    granted = a.take_lease(5000)
    for _ in range(3):
        bench.port.wait_ms(100)
        passed_ms = (bench.port.now_ns - granted.time_ns) / 1e6
        remaining = _remaining(a)
        if remaining > 5000 - passed_ms + 1 + bench.port.u_ms:
            raise Failed(f"{remaining} ms are told to remain of 5000 after {passed_ms:.1f}", clause="LSE-14")
    if remaining < 5000 - 300 - 6 * bench.facts.receipt_ms - 100 - 10 * bench.port.u_ms:
        raise Failed(f"only {remaining} ms are told to remain after some 300 of 5000", clause="LSE-14")


@case(
    "LSE.held", "inopportune", "A held lease is granted to nobody, the holder included.", clauses=["LSE-02"]
)
def test_held(bench: Bench) -> None:
    a, b = bench.a, bench.b
    a.take_lease()
    b.lease = a.lease
    again = bench.tester(a.address)
    again.lease = a.lease
    for tester in (a, b, again):
        receipt = tester.refused("lease-held", "take-lease", duration=1000, clause="LSE-02")
        if (receipt.get("holder"), receipt.get("holder_session")) != (a.address, a.session):
            raise Failed("lease-held must name the holder's address and session", clause="LSE-02")
    if not _held(a) or a.status()["lease"] != a.lease:
        raise Failed("a refused take-lease changed the lease", clause="LSE-02")
    a.accepted("renew-lease", duration=5000, clause="LSE-06")


@case(
    "LSE.not-holder",
    "inopportune",
    "Commands from anyone but the holder are refused, naming the holder or nobody.",
    clauses=["LSE-03"],
)
def test_not_holder(bench: Bench) -> None:
    a, b = bench.a, bench.b
    for kind, fields in COMMANDS.items():
        receipt = a.refused("not-holder", kind, clause="LSE-03", **fields)
        if (receipt.get("holder"), receipt.get("holder_session")) != (0, 0):
            raise Failed("not-holder with a free lease names 0 and 0", clause="LSE-03")
    a.make_ready()
    b.lease = a.lease
    sibling = bench.tester(a.address)
    sibling.lease = a.lease
    for tester in (b, sibling):
        for kind, fields in COMMANDS.items():
            receipt = tester.refused("not-holder", kind, clause="LSE-03", **fields)
            if (receipt.get("holder"), receipt.get("holder_session")) != (a.address, a.session):
                raise Failed("not-holder must name the holder's address and session", clause="LSE-03")
    if a.status()["activity"] != "energized" or not _held(a):
        raise Failed("a command from another than the holder was executed", clause="LSE-03")


@case(
    "LSE.two-controllers",
    "inopportune",
    "Of two controllers that alternate, only the holder is obeyed.",
    clauses=["LSE-03", "LSE-02"],
    needs="travel",
)
def test_two_controllers(bench: Bench) -> None:
    a, b = bench.a, bench.b
    a.make_ready(20_000)
    b.lease = a.lease
    position = a.status()["position"]
    total = 0
    for _ in range(2):
        b.refused("not-holder", "move", **b.move_fields(), clause="LSE-03")
        total += a.ended(a.move(), "done", "none", "MOT-04")["displacement"]
        b.refused("not-holder", "de-energize", clause="LSE-03")
    if a.status()["position"] != position + total:
        raise Failed("a stranger's move was made", clause="LSE-03")


@case(
    "LSE.duration",
    "invalid",
    "A duration outside 500 to 30000 ms is refused; at its ends it is granted.",
    clauses=["LSE-04", "BDY-13"],
)
def test_duration(bench: Bench) -> None:
    a = bench.a
    for duration in (0, 1, 499, 30_001, 65_536, 2**32):
        a.refused("out-of-range", "take-lease", duration=duration, key=2, clause="LSE-04")
    if a.status()["holder"]:
        raise Failed("a refused duration was granted", clause="LSE-04")
    a.take_lease(30_000)
    for duration in (499, 30_001):
        a.refused("out-of-range", "renew-lease", duration=duration, key=2, clause="LSE-04")
    if not 29_000 <= _remaining(a) <= 30_000:
        raise Failed("a granted duration of 30000 ms is not told", clause="LSE-04")
    a.accepted("renew-lease", duration=500, clause="LSE-04")
    if not 0 < _remaining(a) <= 500:
        raise Failed("a renewal for 500 ms is not told", clause="LSE-06")


@case(
    "LSE.expiry",
    "valid",
    "The lease ends at its time, not earlier and at most 50 ms later.",
    clauses=["LSE-05", "LSE-15", "LSE-10"],
)
def test_expiry(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    sent = a.accepted("renew-lease", duration=SHORTEST_MS, clause="LSE-06")
    # what the status tells is formed up to the receipt time after the question
    margin_ms = bench.facts.receipt_ms + (2 if bench.facts.has("virtual") else 40 + bench.port.u_ms)
    bench.port.wait_until(sent.time_ns + round((SHORTEST_MS - margin_ms) * 1e6))
    asked_ms = (bench.port.now_ns - sent.time_ns) / 1e6
    held = _held(a)
    if not held:
        words = f"a lease of {SHORTEST_MS} ms had ended when asked after {asked_ms:.1f} ms"
        if asked_ms + bench.facts.receipt_ms + bench.port.u_ms < SHORTEST_MS:
            raise Failed(words, clause="LSE-05")
        raise Inconclusive(words)
    bench.port.wait_until(sent.time_ns + round((SHORTEST_MS + EXPIRY_SLACK_MS + 1 + bench.port.u_ms) * 1e6))
    status = a.status()
    if status["holder"] or status["lease_remaining"]:
        raise Failed(
            f"a lease of {SHORTEST_MS} ms was held after {SHORTEST_MS + EXPIRY_SLACK_MS} ms", clause="LSE-05"
        )
    if status["activity"] != bench.facts.settles_for("lease_end"):
        raise Failed("the end of the lease must take the power as declared", clause="LSE-10")
    a.refused("not-holder", "energize", clause="LSE-03")


@case(
    "LSE.last-byte",
    "valid",
    "A duration counts from the last byte of a renewal that comes in two pieces.",
    clauses=["LSE-15", "LSE-06"],
    needs="gaps",
)
def test_last_byte(bench: Bench) -> None:
    a = bench.a
    a.take_lease(1000)
    frame = a.frame("renew-lease", duration=4000)
    renewal = a.sent(frame, bench.send_in_pieces(frame, PIECES_APART_MS))
    a.expect_accepted(renewal, "LSE-06")
    status = a.status()
    least_ms = 4000 - (status.time_ns - renewal.time_ns) / 1e6 - bench.port.u_ms - 1
    if status["lease_remaining"] < least_ms:
        raise Failed(
            f"{status['lease_remaining']} ms remain, {least_ms:.0f} of 4000 ms must be left", clause="LSE-15"
        )


PIECES_APART_MS = 120


@case(
    "LSE.extension",
    "valid",
    "Accepted first-seen commands and renewals extend the lease to arrival plus duration.",
    clauses=["LSE-06", "LSE-15"],
)
def test_extension(bench: Bench) -> None:
    a = bench.a
    a.take_lease(2000)
    halt_count = a.status()["halt_count"]
    steps: list[tuple[str, dict[str, Any], int]] = [
        ("cancel", {}, 2000),
        ("reset", {"halt_count": halt_count}, 2000),
        ("energize", {}, 2000),
        ("renew-lease", {"duration": 3000}, 3000),
        ("de-energize", {}, 3000),
        ("renew-lease", {"duration": 1000}, 1000),
        ("cancel", {}, 1000),
    ]
    for kind, fields, duration in steps:
        bench.port.wait_ms(150)
        sent = a.accepted(kind, clause="LSE-06", **fields)
        status = a.status()
        passed_ms = (bench.port.now_ns - sent.time_ns) / 1e6
        if status["lease_remaining"] < duration - passed_ms - bench.port.u_ms - 1:
            raise Failed(
                f"an accepted {kind} must extend the lease to {duration} ms; {status['lease_remaining']} ms remain",
                clause="LSE-06",
            )
        if status["lease_remaining"] > duration:
            raise Failed(f"{status['lease_remaining']} ms remain of {duration}", clause="LSE-14")


@case(
    "LSE.no-extension",
    "inopportune",
    "Copies, refusals, reads, halts and other sessions' requests never extend the lease.",
    clauses=["LSE-07", "HLT-15"],
)
def test_no_extension(bench: Bench) -> None:
    a, b = bench.a, bench.b
    a.take_lease(8000)
    base = a.accepted("renew-lease", duration=8000, clause="LSE-06")
    b.lease = a.lease
    bench.port.wait_ms(200)
    steps: list[Callable[[], object]] = [
        lambda: a.answered(a.send_frame(base.frame_bytes)),
        lambda: a.answered(a.send("renew-lease", duration=100)),
        lambda: a.answered(a.send("energize")),
        lambda: a.answered(a.send("status")),
        lambda: a.answered(a.send("describe")),
        lambda: a.answered(a.send("halt")),
        lambda: a.answered(a.send("cancel", target=1)),
        lambda: a.answered(a.send("energize", epoch=a.epoch + 1)),
        lambda: b.answered(b.send("renew-lease", duration=30_000)),
        lambda: b.answered(b.send("take-lease", duration=30_000)),
        lambda: b.send("renew-lease", to=bench.broadcast, duration=30_000),
        lambda: a.send("confirm", epoch=a.epoch, event=1),
    ]
    if bench.facts.has("assist"):
        steps.append(lambda: a.answered(a.send("assist", op="release")))
    for place, step in enumerate(steps):
        step()
        remaining = _remaining(a)
        if remaining > 7800 + bench.port.u_ms + 1:
            raise Failed(
                f"step {place} that may not extend the lease did: {remaining} ms remain", clause="LSE-07"
            )


@case(
    "LSE.end-waiting",
    "valid",
    "The end of the lease cancels what waits, and nothing of it is begun.",
    clauses=["LSE-08", "LSE-05"],
    needs="schedule and travel",
)
def test_end_waiting(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    start = (a.read("time-exchange", t1=0)["t3"] + 900_000) % (1 << 32)
    move = a.move(start_at=start)
    a.accepted("renew-lease", duration=SHORTEST_MS, clause="LSE-06")
    outcome = a.ended(move, "cancelled", "lease-end", "LSE-08", within_ms=700 + bench.port.u_ms)
    bench.port.wait_ms(600)
    if outcome["displacement"] or a.status()["position"] or a.status()["activity"] == "moving":
        position = a.status()["position"]
        if outcome["displacement"] or a.status()["activity"] == "moving":
            raise Failed(f"a motion of an ended lease was begun, position {position}", clause="LSE-08")


@case(
    "LSE.end-running",
    "valid",
    "The end of the lease stops a running motion; queued ones end by it, never begun.",
    clauses=["LSE-09", "LSE-08", "LSE-10"],
    needs="stoppable and assist",
)
def test_end_running(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    a.hold("running")
    move = a.move(bench.facts.stoppable().name)
    queued = a.move() if bench.facts.has("queue") else None
    a.accepted("renew-lease", duration=SHORTEST_MS, clause="LSE-06")
    a.ended(
        move,
        "cancelled",
        "lease-end",
        "LSE-09",
        within_ms=SHORTEST_MS + 200 + bench.facts.stop_ms + bench.port.u_ms,
    )
    if queued is not None:
        never = a.ended(queued, "cancelled", "lease-end", "LSE-08")
        if never["displacement"]:
            raise Failed("a queued motion of an ended lease was begun", clause="LSE-08")
    if a.status()["activity"] != bench.facts.settles_for("lease_end"):
        raise Failed("the end of the lease must take the power as declared", clause="LSE-10")


@case(
    "LSE.end-past-return",
    "inopportune",
    "Past its point of no return a motion outlasts its lease, lands and notes it; nobody gets the lease before.",
    clauses=["LSE-09", "LSE-01", "LSE-10"],
    needs="ballistic and assist",
)
def test_end_past_return(bench: Bench) -> None:
    a, b = bench.a, bench.b
    a.make_ready()
    a.hold("committed")
    move = a.move(bench.facts.ballistic().name)
    bench.port.wait_ms(bench.facts.ballistic().no_return_ms + 20)
    a.accepted("release-lease", clause="LSE-11")
    b.lease = a.lease
    b.refused("moving", "take-lease", duration=2000, clause="LSE-01")
    a.release_hold()
    outcome = a.outcome(move)
    a.confirm(outcome)
    if outcome["outcome"] not in ("done", "failed") or outcome["interrupted"] != "lease-end":
        raise Failed(f"it ended {outcome['outcome']}, interrupted {outcome['interrupted']}", clause="LSE-09")
    if a.status()["activity"] != bench.facts.settles_for("lease_end"):
        raise Failed("after landing the ended lease must take the power as declared", clause="LSE-10")


@case(
    "LSE.release",
    "valid",
    "release-lease does at once what expiry does, and only the holder's.",
    clauses=["LSE-11", "LSE-08", "LSE-09", "LSE-10"],
    needs="stoppable",
)
def test_release(bench: Bench) -> None:
    a, b = bench.a, bench.b
    a.make_ready()
    b.lease = a.lease
    b.refused("not-holder", "release-lease", clause="LSE-11")
    if not _held(a):
        raise Failed("a stranger's release ended the lease", clause="LSE-11")
    facts = bench.facts.stoppable()
    move = a.move(facts.name)
    queued = a.move() if bench.facts.has("queue") else None
    bench.port.wait_ms(facts.stoppable_ms / 4)
    a.accepted("release-lease", clause="LSE-11")
    if _held(a):
        raise Failed("a released lease is still held", clause="LSE-11")
    outcome = a.ended(move, "cancelled", "lease-end", "LSE-09")
    if abs(outcome["displacement"]) >= abs(move.fields["magnitude"]):
        raise Failed("a motion went on after its lease was released", clause="LSE-09")
    if queued is not None:
        a.ended(queued, "cancelled", "lease-end", "LSE-08")
    if a.status()["activity"] != bench.facts.settles_for("lease_end"):
        raise Failed("a released lease must take the power as declared", clause="LSE-10")


@case(
    "LSE.renew-many",
    "valid",
    "A renewal to all extends the sender's lease only, keeps its number, and is answered in its window.",
    clauses=["LSE-12", "LSE-06", "ADR-15", "ADR-05"],
)
def test_renew_many(bench: Bench) -> None:
    a, b = bench.a, bench.b
    a.take_lease(2000)
    bench.port.wait_ms(200)
    sent = a.send("renew-lease", to=bench.broadcast, duration=4000, answer_window=30)
    receipt = a.answer(sent, 30 + a.patience_ms)
    if receipt is None or receipt.get("result") != "accepted":
        raise Failed("a holder's renewal to all was not answered as accepted", clause="LSE-12")
    status = a.status()
    if status["lease"] != a.lease or not _held(a):
        raise Failed("a renewal to all changed number or holder", clause="LSE-12")
    if status["lease_remaining"] < 4000 - 300 - 2 * bench.port.u_ms - bench.facts.receipt_ms:
        raise Failed(f"a renewal to all left {status['lease_remaining']} of 4000 ms", clause="LSE-06")
    with expect_silent_refusals(bench, 1, "LSE-12"):
        b.send("renew-lease", to=bench.broadcast, duration=30_000, answer_window=30)
        bench.port.wait_ms(60)
        b.silent("a stranger's renewal to all", "LSE-12")
    if _remaining(a) > 4000:
        raise Failed("a stranger's renewal extended the lease", clause="LSE-12")


@case(
    "LSE.restart",
    "valid",
    "A restart ends the lease and numbers begin again at 0.",
    clauses=["LSE-13"],
    needs="restart",
)
def test_restart(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    a.restart()
    status = a.status()
    if status["holder"] or status["lease"] or a.read("describe")["lease"]:
        raise Failed("after a restart there must be no holder and lease number 0", clause="LSE-13")
    if a.take_lease().get("lease") != 1:
        raise Failed("the first lease after a restart has number 1", clause="LSE-13")


@case(
    "LSE.former-holder",
    "inopportune",
    "A former holder's requests are refused stale-lease and do nothing to the new one.",
    clauses=["LSE-11", "SEQ-15", "LSE-03"],
)
def test_former_holder(bench: Bench) -> None:
    a, b = bench.a, bench.b
    a.take_lease(20_000)
    old = a.accepted("renew-lease", duration=20_000, clause="LSE-06")
    a.accepted("release-lease", clause="LSE-11")
    b.make_ready()
    a.expect_accepted(a.send_frame(old.frame_bytes), "SEQ-03")
    for kind, fields in COMMANDS.items():
        receipt = a.refused("stale-lease", kind, clause="SEQ-15", **fields)
        if receipt.get("lease") != b.lease:
            raise Failed("stale-lease must carry the current number", clause="SEQ-15")
    status = b.status()
    if not _held(b) or status["activity"] != "energized" or status["lease_remaining"] > 10_000:
        raise Failed("a former holder's requests changed the lease or the module", clause="LSE-11")


@case(
    "LSE.wait-for-expiry",
    "valid",
    "Another gets the lease when it has expired, and only then.",
    clauses=["LSE-02", "LSE-05", "LSE-01"],
)
def test_wait_for_expiry(bench: Bench) -> None:
    a, b = bench.a, bench.b
    a.take_lease(SHORTEST_MS)
    b.lease = a.lease
    b.refused("lease-held", "take-lease", duration=1000, clause="LSE-02")
    bench.port.wait_ms(SHORTEST_MS + EXPIRY_SLACK_MS + 1 + bench.port.u_ms)
    if b.take_lease(1000).get("lease") != (a.lease + 1) % (1 << 32):
        raise Failed("the next grant must have the next number", clause="LSE-01")
    a.refused("stale-lease", "energize", clause="SEQ-15")


@case(
    "LSE.number-wrap",
    "valid",
    "Lease numbers go on across their wrap.",
    clauses=["LSE-01", "AST-03"],
    needs="assist",
)
def test_number_wrap(bench: Bench) -> None:
    a = bench.a
    a.assist("preset", item="lease", value=0xFFFFFFFF)
    receipt: Received = a.take_lease()
    if receipt.get("lease") != 0:
        raise Failed(f"lease number 4294967295 was followed by {receipt.get('lease')}", clause="LSE-01")
    a.accepted("renew-lease", duration=5000, clause="LSE-06")
