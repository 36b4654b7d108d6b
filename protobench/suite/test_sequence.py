"""Sessions, numbers, duplicates: a command acts once or not at all, however often and late it comes."""

from __future__ import annotations

from typing import Any

from protobench.judge import Failed
from protobench.suite.bench import CONTROLLER_A, Bench
from protobench.suite.case import case
from protobench.suite.machines.subjects import expect_follows
from protobench.suite.port import Received, Sent
from protobench.suite.tester import MODULUS, Tester, answer_words
from protobench.suite.tools import expect_silent_refusals


def _same_receipt(tester: Tester, sent: Sent, first: Received, clause: str = "SEQ-03") -> None:
    """A copy of ``sent`` must bring the byte-identical receipt."""
    again = tester.answered(tester.send_frame(sent.frame_bytes), clause)
    if again.frame_bytes != first.frame_bytes:
        raise Failed(
            f"a copy of {sent.kind} #{sent.number} must get the same receipt; it got {answer_words(again)}",
            clause=clause,
        )


@case(
    "SEQ.copies",
    "valid",
    "A copy of any accepted command gets the byte-identical receipt and is not executed again.",
    clauses=["SEQ-03", "SEQ-02"],
)
def test_copies(bench: Bench) -> None:
    a = bench.a
    a.learn()
    take = a.send("take-lease", duration=8000)
    taken = a.expect_accepted(take, "LSE-01")
    a.lease = taken["lease"]
    for _ in range(3):
        _same_receipt(a, take, taken)
    if a.status()["lease"] != a.lease:
        raise Failed("a copied take-lease was granted again", clause="SEQ-03")
    reset = a.send("reset", halt_count=a.status()["halt_count"])
    first = a.expect_accepted(reset, "HLT-11")
    energize = a.send("energize")
    second = a.expect_accepted(energize, "STA-09")
    a.accepted("de-energize", clause="STA-10")
    _same_receipt(a, energize, second)
    _same_receipt(a, reset, first)
    _same_receipt(a, take, taken)
    if a.status()["activity"] != "idle":
        raise Failed("a copied energize was executed again", clause="SEQ-03")


@case(
    "SEQ.copied-move",
    "valid",
    "A copied move is made once: at once, later, after its outcome and after its confirmation.",
    clauses=["SEQ-03", "MOT-19", "ACK-10"],
    needs="travel",
)
def test_copied_move(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    before = a.status()["position"]
    move = a.send("move", **a.move_fields())
    receipt = a.expect_accepted(move, "MOT-01")
    _same_receipt(a, move, receipt)
    bench.port.wait_ms(30)
    _same_receipt(a, move, receipt)
    outcome = a.ended(move, "done", "none", "MOT-04")
    bench.port.wait_ms(150)
    _same_receipt(a, move, receipt)
    bench.port.wait_ms(1500)
    _same_receipt(a, move, receipt)
    bench.port.wait_ms(bench.longest_ms)
    moved = a.status()["position"] - before
    if moved != outcome["displacement"]:
        raise Failed(
            f"one move of {outcome['displacement']}, sent five times, moved {moved}", clause="SEQ-03"
        )


@case(
    "SEQ.copied-late",
    "inopportune",
    "A copy after long silence, and after the lease, gets the same receipt and is not executed.",
    clauses=["SEQ-03"],
    needs="virtual",
)
def test_copied_late(bench: Bench) -> None:
    a = bench.a
    a.take_lease(30_000)
    a.reset()
    energize = a.send("energize")
    receipt = a.expect_accepted(energize, "STA-09")
    a.accepted("de-energize", clause="STA-10")
    for silence_ms in (29_000, 90_000, 3_600_000):
        bench.port.wait_ms(silence_ms)
        _same_receipt(a, energize, receipt)
        if a.status()["activity"] != "idle":
            raise Failed(f"a copy was executed again after {silence_ms} ms", clause="SEQ-03")


@case(
    "SEQ.copied-refusal",
    "valid",
    "A refused command is consumed and its copy gets the same refusal, though it would be accepted now.",
    clauses=["SEQ-02", "SEQ-03"],
)
def test_copied_refusal(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    refused = a.send("energize")
    receipt = a.expect_refused(refused, "halted", "STA-11")
    malformed = a.send("energize", body=b"\xc1")
    second = a.expect_refused(malformed, "malformed", "BDY-01")
    older = a.send("reset", halt_count=a.status()["halt_count"] - 1)
    third = a.expect_refused(older, "newer-halt", "HLT-12")
    a.answered(a.send("halt"))
    _same_receipt(a, older, third)
    a.reset()
    _same_receipt(a, refused, receipt)
    _same_receipt(a, malformed, second)
    _same_receipt(a, older, third)
    if a.status()["activity"] != "idle":
        raise Failed("the copy of a refused energize was executed", clause="SEQ-03")


@case(
    "SEQ.conflict",
    "invalid",
    "A stored number with another body, kind or flags is refused conflict, and the stored receipt stays.",
    clauses=["SEQ-04", "SEQ-07"],
)
def test_conflict(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    sent = a.send("renew-lease", duration=9000)
    receipt = a.expect_accepted(sent, "LSE-06")
    number = sent.number
    others = [
        a.frame("renew-lease", number=number, duration=9001),
        a.frame("take-lease", number=number, duration=9000),
        a.frame("release-lease", number=number),
        a.frame("renew-lease", number=number, duration=9000, flags=1),
        a.frame("energize", number=number, body=b"\xc1"),
    ]
    for frame in others:
        a.expect_refused(a.send_frame(frame), "conflict", "SEQ-04")
        _same_receipt(a, sent, receipt, "SEQ-04")
    if a.status()["holder"] != a.address:
        raise Failed("a conflicting release was executed", clause="SEQ-04")


@case(
    "SEQ.repeat-by-number",
    "valid",
    "The same command with a new number is executed again.",
    clauses=["SEQ-02"],
    needs="travel",
)
def test_repeat_by_number(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    before = a.status()["position"]
    total = 0
    for _ in range(2):
        total += a.ended(a.move(), "done", "none", "SEQ-02")["displacement"]
    moved = a.status()["position"] - before
    if moved != total:
        raise Failed(f"two equal moves with two numbers moved {moved}, not {total}", clause="SEQ-02")


@case(
    "SEQ.late-unseen",
    "inopportune",
    "A number that was overtaken and never seen is refused, and not stored.",
    clauses=["SEQ-05", "SEQ-07"],
)
def test_late_unseen(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    base = a.next_number()
    a.use_number(base + 40)
    newest = a.send("renew-lease", duration=9000)
    receipt = a.expect_accepted(newest, "LSE-06")
    top = newest.number
    for behind in (1, 2, 7, 8, 9, 20, 31):
        for _ in range(2):
            late = a.frame("release-lease", number=(top - behind) % MODULUS)
            a.expect_refused(a.send_frame(late), "late-unseen", "SEQ-05")
    _same_receipt(a, newest, receipt)
    if a.status()["holder"] != a.address:
        raise Failed("an overtaken command was executed", clause="SEQ-05")


@case(
    "SEQ.expired",
    "inopportune",
    "A number whose receipt is gone, one 32 or more behind, and one at distance 2^31 are refused answer-expired.",
    clauses=["SEQ-06", "SEQ-07", "SEQ-09"],
)
def test_expired(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    numbers = bench.facts.description["numbers"]
    sent = [a.accepted("renew-lease", duration=9000, clause="LSE-06") for _ in range(numbers + 3)]
    for copy in sent[-numbers:]:
        a.expect_accepted(a.send_frame(copy.frame_bytes), "SEQ-09")
    top = sent[-1].number
    if numbers + 3 <= 31:
        oldest = a.answered(a.send_frame(sent[0].frame_bytes))
        if oldest.get("reason") not in (None, "answer-expired"):
            raise Failed(f"a copy whose receipt is gone was {answer_words(oldest)}", clause="SEQ-06")
    for behind in (32, 33, 1000, 2**31 - 1, 2**31):
        frame = a.frame("release-lease", number=(top - behind) % MODULUS)
        a.expect_refused(a.send_frame(frame), "answer-expired", "SEQ-06")
    if a.status()["holder"] != a.address:
        raise Failed("an expired command was executed", clause="SEQ-06")


@case(
    "SEQ.receipt-gone",
    "inopportune",
    "A command seen within the window whose receipt was pushed out is refused answer-expired and not executed again.",
    clauses=["SEQ-06"],
)
def test_receipt_gone(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    first = a.accepted("renew-lease", duration=9000, clause="LSE-06")
    a.accepted("release-lease", clause="LSE-11")
    a.take_lease()
    for _ in range(min(30, bench.facts.description["numbers"] + 1)):
        a.accepted("renew-lease", duration=9000, clause="LSE-06")
    receipt = a.answered(a.send_frame(first.frame_bytes))
    if receipt.get("reason") != "answer-expired" and bench.facts.description["numbers"] < 28:
        raise Failed(f"a seen number whose receipt is gone was {answer_words(receipt)}", clause="SEQ-06")


@case("SEQ.wrap", "valid", "Numbers work across their wrap.", clauses=["SEQ-08", "SEQ-05"])
def test_wrap(bench: Bench) -> None:
    a = bench.a
    a.learn()
    a.use_number(MODULUS - 5)
    a.take_lease()
    sent = [a.accepted("renew-lease", duration=9000, clause="SEQ-08") for _ in range(6)]
    if sent[-1].number > 10:
        raise Failed("the case itself did not cross the wrap", clause="SEQ-08")
    for copy in sent:
        a.expect_accepted(a.send_frame(copy.frame_bytes), "SEQ-08")
    a.use_number(sent[-1].number + 3)
    a.accepted("renew-lease", duration=9000, clause="SEQ-08")
    a.expect_refused(
        a.send_frame(a.frame("release-lease", number=sent[-1].number + 1)), "late-unseen", "SEQ-05"
    )


@case("SEQ.half-way", "valid", "A number up to 2^31 - 1 ahead is newer.", clauses=["SEQ-02", "SEQ-08"])
def test_half_way(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    for ahead in (2**31 - 1, 2**31 - 1, 1):
        a.use_number(a.next_number() - 1 + ahead - 1)
        a.accepted("renew-lease", duration=9000, clause="SEQ-02")


@case("SEQ.first-number", "valid", "A session may begin with any number.", clauses=["SEQ-02", "SEQ-01"])
def test_first_number(bench: Bench) -> None:
    for start in (0, 1, 2**31 - 1, 2**31, MODULUS - 1):
        tester = bench.tester(CONTROLLER_A + 32)
        tester.use_number(start - 1)
        tester.refused("not-holder", "energize", clause="SEQ-02")


@case(
    "SEQ.sessions-apart",
    "valid",
    "The same number in another session, or from another source, is another request.",
    clauses=["SEQ-01", "LSE-03"],
)
def test_sessions_apart(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    sent = a.accepted("renew-lease", duration=9000, clause="LSE-06")
    other = bench.tester(a.address)
    other.lease = a.lease
    other.expect_refused(
        other.send_frame(other.frame("renew-lease", number=sent.number, duration=9000)),
        "not-holder",
        "SEQ-01",
    )
    source = bench.a.frame("renew-lease", number=sent.number, duration=9000, source=a.address + 77)
    receipt = a.expect_refused(a.send_frame(source), "not-holder", "SEQ-01")
    if (receipt.get("holder"), receipt.get("holder_session")) != (a.address, a.session):
        raise Failed("not-holder must name the holder's address and session", clause="LSE-03")


@case(
    "SEQ.kept-sessions",
    "valid",
    "The declared number of sessions is kept; new ones push out the one used longest ago, never the holder's.",
    clauses=["SEQ-09", "SEQ-10"],
)
def test_kept_sessions(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    held = a.accepted("renew-lease", duration=9000, clause="LSE-06")
    count = bench.facts.description["sessions"] - 1
    others = []
    for place in range(count + 3):
        tester = bench.tester(CONTROLLER_A + 64 + place)
        tester.lease = a.lease
        sent = tester.send("energize")
        tester.expect_refused(sent, "not-holder", "LSE-03")
        others.append((tester, sent.number))
    for tester, number in others[-count:]:
        frame = tester.frame("de-energize", number=number)
        tester.expect_refused(tester.send_frame(frame), "conflict", "SEQ-09")
    a.expect_refused(a.send_frame(a.frame("release-lease", number=held.number)), "conflict", "SEQ-10")
    a.expect_accepted(a.send_frame(held.frame_bytes), "SEQ-10")


@case(
    "SEQ.reads-free",
    "valid",
    "Reads are answered afresh when copied and consume no number.",
    clauses=["SEQ-11"],
)
def test_reads_free(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    read = a.send("time-exchange", t1=5)
    first = a.answered(read)
    bench.port.wait_ms(20)
    second = a.answered(a.send_frame(read.frame_bytes))
    if second["t2"] == first["t2"]:
        raise Failed("a copied read got a stored answer", clause="SEQ-11")
    number = a.next_number()
    ahead = a.read("status", number=number + 20 & 0xFFFFFFFF)
    a.accepted("renew-lease", duration=9000, clause="SEQ-11")
    a.accepted("renew-lease", duration=9000, number=ahead.frame.number, clause="SEQ-11")
    a.use_number(ahead.frame.number)


@case(
    "SEQ.many-newer",
    "inopportune",
    "A command to many acts only with a newer number; its copy does nothing and is a silent refusal.",
    clauses=["SEQ-12", "LSE-07", "LSE-12"],
)
def test_many_newer(bench: Bench) -> None:
    a = bench.a
    a.take_lease(3000)
    renewal = a.send("renew-lease", to=bench.broadcast, duration=3000)
    bench.port.wait_ms(300)
    with expect_silent_refusals(bench, 2, "SEQ-12"):
        a.send_frame(renewal.frame_bytes)
        a.send_frame(
            a.frame(
                "renew-lease",
                to=bench.broadcast,
                duration=30000,
                number=renewal.number - 1 if renewal.number else 0,
            )
        )
    remaining = a.status()["lease_remaining"]
    if remaining > 2700 + bench.port.u_ms + 1:
        raise Failed(f"a copied renewal to many extended the lease to {remaining} ms", clause="LSE-07")
    used = a.frame("cancel", number=renewal.number)
    a.expect_refused(a.send_frame(used), "answer-expired", "SEQ-12")


@case(
    "SEQ.halt-outside",
    "valid",
    "Halt neither uses nor reads the history: a used number halts, and a halt's number stays unused.",
    clauses=["SEQ-13", "HLT-01"],
)
def test_halt_outside(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    sent = a.accepted("renew-lease", duration=9000, clause="LSE-06")
    halt = a.answered(a.send("halt", number=sent.number))
    if halt.kind != "halt-receipt" or not a.status()["halt_latch"]:
        raise Failed("a halt with a used number must be executed", clause="SEQ-13")
    number = a.send("halt").number
    bench.port.wait_ms(a.patience_ms if not bench.facts.has("virtual") else 60)
    bench.port.take_all(lambda received: received.kind == "halt-receipt")
    a.expect_accepted(a.send_frame(a.frame("renew-lease", number=number, duration=9000)), "SEQ-13")
    a.expect_accepted(a.send_frame(sent.frame_bytes), "SEQ-13")


FENCED: dict[str, dict[str, Any]] = {
    "reset": {"halt_count": 0},
    "renew-lease": {"duration": 9000},
    "energize": {},
    "de-energize": {},
    "move": {"motion": 1, "magnitude": 1},
    "cancel": {},
    "clear-faults": {"occurrences": [1]},
    "release-lease": {},
}


@case(
    "SEQ.stale-epoch",
    "inopportune",
    "Every unicast command with another epoch is refused with the current epoch and lease number.",
    clauses=["SEQ-14"],
)
def test_stale_epoch(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    for wrong in (a.epoch - 1 if a.epoch else 5, (a.epoch + 1) % MODULUS, (a.epoch + 2**31) % MODULUS):
        for kind, fields in {**FENCED, "take-lease": {"duration": 1000}}.items():
            receipt = a.refused("stale-epoch", kind, epoch=wrong, clause="SEQ-14", **fields)
            if (receipt.get("epoch"), receipt.get("lease")) != (a.epoch, a.lease):
                raise Failed("stale-epoch must carry the current epoch and lease number", clause="SEQ-14")
    if a.status()["activity"] != "energized":
        raise Failed("a command with another epoch was executed", clause="SEQ-14")


@case(
    "SEQ.stale-lease",
    "inopportune",
    "Every unicast command with another lease number is refused with the current epoch and lease number.",
    clauses=["SEQ-15"],
)
def test_stale_lease(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    for wrong in ((a.lease - 1) % MODULUS, (a.lease + 1) % MODULUS):
        for kind, fields in {**FENCED, "take-lease": {"duration": 1000}}.items():
            receipt = a.refused("stale-lease", kind, lease=wrong, clause="SEQ-15", **fields)
            if (receipt.get("epoch"), receipt.get("lease")) != (a.epoch, a.lease):
                raise Failed("stale-lease must carry the current epoch and lease number", clause="SEQ-15")
    if a.status()["activity"] != "energized":
        raise Failed("a command with another lease number was executed", clause="SEQ-15")


@case(
    "SEQ.restart",
    "inopportune",
    "A restart raises the epoch by one, empties the history, and nothing from before it acts.",
    clauses=["SEQ-16", "SEQ-17", "SEQ-14"],
    needs="restart",
)
def test_restart(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    sent = a.accepted("renew-lease", duration=9000, clause="LSE-06")
    epoch = a.epoch
    a.restart()
    if a.epoch != (epoch + 1) % MODULUS:
        raise Failed(f"epoch {epoch} became {a.epoch} by one restart", clause="SEQ-16")
    a.expect_refused(a.send_frame(sent.frame_bytes), "stale-epoch", "SEQ-17")
    a.restart()
    if a.epoch != (epoch + 2) % MODULUS:
        raise Failed(f"epoch {epoch} became {a.epoch} by two restarts", clause="SEQ-16")
    fresh = a.frame("energize", number=sent.number)
    a.expect_refused(a.send_frame(fresh), "not-holder", "SEQ-17")


@case(
    "SEQ.epoch-power-cut",
    "inopportune",
    "Power that fails while the epoch is written neither repeats nor skips an epoch that was told.",
    clauses=["SEQ-16", "AST-02"],
    needs="assist",
)
def test_epoch_power_cut(bench: Bench) -> None:
    a = bench.a
    epoch = a.epoch
    a.assist("power-cut", writes=1)
    a.assist("restart", cause="commanded")
    description = a.restarted()
    if description["epoch"] != (epoch + 1) % MODULUS:
        raise Failed(
            f"epoch {epoch}, power lost while the next was written: the next told was {description['epoch']}",
            clause="SEQ-16",
        )
    cause = a.status()["restart_cause"]
    if cause != "power-on":
        raise Failed(f"power lost while starting, and the restart cause is {cause}", clause="AST-02")


@case(
    "SEQ.assist-epoch",
    "inopportune",
    "assist with another epoch is refused stale-epoch.",
    clauses=["SEQ-14"],
    needs="assist",
)
def test_assist_epoch(bench: Bench) -> None:
    receipt = bench.a.refused("stale-epoch", "assist", op="release", epoch=bench.a.epoch + 1, clause="SEQ-14")
    if receipt.get("epoch") != bench.a.epoch:
        raise Failed("stale-epoch must carry the current epoch", clause="SEQ-14")


@case(
    "SEQ.version-apart",
    "valid",
    "A command of another major version consumes no number.",
    clauses=["SEQ-02", "VER-01"],
)
def test_version_apart(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    foreign = a.send("renew-lease", duration=9000, version=2)
    a.expect_refused(foreign, "unsupported-version", "VER-01")
    a.expect_accepted(a.send_frame(a.frame("renew-lease", duration=9000, number=foreign.number)), "SEQ-02")


DERIVED_INPUTS = (
    "next", "skip", "refused", "copy", "other-body", "other-kind", "gap", "inside", "outside", "half", "halt", "read",
)  # fmt: skip


@case(
    "SEQ.derived",
    "inopportune",
    "A session's numbers follow the window machine, through every sequence derived from it (HSI, as many states).",
    clauses=["SEQ-02", "SEQ-03", "SEQ-04", "SEQ-05", "SEQ-06", "SEQ-07", "SEQ-08", "SEQ-11", "SEQ-13"],
    needs="virtual",
)
def test_derived(bench: Bench) -> None:
    expect_follows(bench, "window", DERIVED_INPUTS)
