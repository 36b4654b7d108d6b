"""Motion: ranges, durations, the queue, cancelling, stated starts, bonds."""

from __future__ import annotations

from typing import Any

from protobench.judge import Failed, Inconclusive, NotApplicable
from protobench.suite.bench import Bench
from protobench.suite.case import case
from protobench.suite.facts import BONDING, MotionFacts
from protobench.suite.port import Received, Sent
from protobench.suite.tester import Tester, answer_words, is_outcome_of

LEASE_MS = 30_000  # the longest
SHARE = 0.01  # of the magnitude, by which a displacement may differ
MODULUS = 1 << 32


def _check_displacement(outcome: Received, magnitude: int) -> None:
    if abs(outcome["displacement"] - magnitude) > max(1, SHARE * abs(magnitude)):
        raise Failed(f"a motion of {magnitude} ended done with {outcome['displacement']}", clause="MOT-04")


@case(
    "MOT.each-motion",
    "valid",
    "Each declared motion, both ways and to its limits, ends done in time and where it was sent.",
    clauses=["MOT-04", "MOT-03", "ACK-08"],
    needs="travel",
)
def test_each_motion(bench: Bench) -> None:
    a = bench.a
    a.make_ready(20_000)
    for facts in bench.facts.motions.values():
        if facts.name in BONDING:
            continue
        for magnitude in sorted({facts.magnitude_min, facts.magnitude_max, facts.magnitude}):
            position = a.status()["position"]
            move = a.move(facts.name, magnitude=magnitude)
            outcome = a.ended(move, "done", "none", "MOT-04")
            _check_displacement(outcome, magnitude)
            _check_duration(bench, facts, move, outcome)
            status = a.status()
            if status["position"] != position + outcome["displacement"] or not status["position_known"]:
                raise Failed(
                    "after done the position must be known and include the displacement", clause="DSC-07"
                )


@case(
    "MOT.magnitudes",
    "valid",
    "Magnitudes at the ends of each width of integer are taken at their value, with their sign.",
    clauses=["BDY-14", "MOT-04"],
    needs="travel",
)
def test_magnitudes(bench: Bench) -> None:
    a = bench.a
    a.make_ready(20_000)
    facts = bench.facts.travel()
    ends = (-33, -128, -129, -32_768, -32_769, 128, 255, 256, 65_535, 65_536)
    magnitudes = [end for end in ends if facts.magnitude_min <= end <= facts.magnitude_max]
    if not magnitudes:
        raise NotApplicable(
            f"the range of {facts.name} reaches the end of no width", item="motion.*.magnitude_max"
        )
    for magnitude in magnitudes:
        outcome = a.ended(a.move(facts.name, magnitude=magnitude), "done", "none", "MOT-04")
        if abs(outcome["displacement"] - magnitude) > max(1, SHARE * abs(magnitude)):
            raise Failed(f"{magnitude} was asked for, {outcome['displacement']} made", clause="BDY-14")


def _check_duration(bench: Bench, facts: MotionFacts, move: Sent, outcome: Received) -> None:
    took_ms = (outcome.time_ns - move.time_ns) / 1e6
    limit_ms = facts.longest_ms + 2 * bench.facts.receipt_ms + bench.port.u_ms
    if took_ms > limit_ms:
        words = (
            f"{facts.name} took {took_ms:.1f} ms from request to outcome, {facts.longest_ms} ms are declared"
        )
        if bench.facts.has("virtual") or took_ms > 2 * limit_ms + 100:
            raise Failed(words, clause="MOT-04")
        raise Inconclusive(words)


@case(
    "MOT.not-ready",
    "inopportune",
    "A move is refused halted, then fault-latched, then not-energized, in this order.",
    clauses=["MOT-01"],
    needs="travel",
)
def test_not_ready(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    fields = a.move_fields()
    a.send("status", source=bench.address)
    a.refused("halted", "move", **fields, clause="MOT-01")
    a.reset()
    a.refused("fault-latched", "move", **fields, clause="MOT-01")
    latched = [entry.occurrence for entry in bench.fault_entries(a) if entry.latched]
    a.accepted("clear-faults", occurrences=latched, clause="FLT-08")
    a.refused("not-energized", "move", **fields, clause="MOT-01")
    if a.status()["position"]:
        position = a.status()["position"]
        bench.port.wait_ms(bench.longest_ms)
        if a.status()["position"] != position:
            raise Failed("a refused move was made", clause="ACK-06")


@case(
    "MOT.undeclared",
    "invalid",
    "A motion that is not declared is refused unsupported with key 2.",
    clauses=["MOT-02"],
)
def test_undeclared(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    absent = [name for name in bench.contract.enum_values("motion") if name not in bench.facts.motions]
    for name in absent:
        a.refused("unsupported", "move", motion=name, magnitude=1, key=2, clause="MOT-02")
    if not absent:
        raise NotApplicable("the module declares every motion", item="motions")


@case(
    "MOT.range",
    "invalid",
    "Magnitudes and faces outside what is declared are refused with their key, and nothing moves.",
    clauses=["MOT-03", "BDY-13"],
    needs="travel",
)
def test_range(bench: Bench) -> None:
    a = bench.a
    a.make_ready(20_000)
    faces = bench.facts.description["faces"]
    for facts in bench.facts.motions.values():
        if facts.name in BONDING:
            a.refused("out-of-range", "move", motion=facts.name, magnitude=1, face=0, key=3, clause="MOT-03")
            a.refused("out-of-range", "move", motion=facts.name, face=faces, key=4, clause="MOT-03")
            continue
        for magnitude in (facts.magnitude_max + 1, facts.magnitude_min - 1, 2**31 - 1, -(2**31)):
            if not facts.magnitude_min <= magnitude <= facts.magnitude_max:
                a.refused(
                    "out-of-range", "move", motion=facts.name, magnitude=magnitude, key=3, clause="MOT-03"
                )
        a.refused("out-of-range", "move", motion=facts.name, magnitude=2**31, key=3, clause="BDY-13")
        a.refused("out-of-range", "move", **a.move_fields(facts.name), face=1, key=4, clause="MOT-03")
    position = a.status()["position"]
    bench.port.wait_ms(bench.longest_ms)
    if a.status()["position"] != position or a.status()["activity"] != "energized":
        raise Failed("a refused move was made", clause="MOT-03")


# ---------------------------------------------------------------- queue


@case(
    "MOT.queue-order",
    "valid",
    "Queued motions are made in order, each beginning after its predecessor's outcome.",
    clauses=["MOT-05", "MOT-19"],
    needs="queue and travel",
)
def test_queue_order(bench: Bench) -> None:
    a = bench.a
    a.make_ready(LEASE_MS)
    fitting = max(2, (LEASE_MS - 5000) // bench.facts.travel().typical_ms)
    count = min(3, 1 + bench.facts.description["queue"], bench.facts.description["outcomes"], fitting)
    moves = [a.move() for _ in range(count)]
    waiting = a.status()["queued"]
    if not count - 2 <= waiting <= count:  # the first may not have begun, or be over
        raise Failed(f"{count} moves accepted, {waiting} are told to wait", clause="DSC-03")
    last_ns, total = 0, 0
    for move in moves:
        outcome = a.ended(move, "done", "none", "MOT-05")
        if outcome.time_ns < last_ns:
            raise Failed("outcomes of queued motions came out of order", clause="MOT-05")
        begun_ns = outcome.time_ns - (outcome["duration_ms"] + 1) * 1_000_000
        if begun_ns < last_ns - (bench.facts.receipt_ms + bench.port.u_ms) * 1e6:
            raise Failed("a queued motion began before its predecessor's outcome", clause="MOT-05")
        last_ns, total = outcome.time_ns, total + outcome["displacement"]
    if a.status()["position"] != total + 0 and not bench.facts.has("assist"):
        return
    if bench.facts.has("assist") and a.truth()["motion_starts"] < count:
        raise Failed("fewer motions were begun than ended done", clause="MOT-19")


@case(
    "MOT.begins-soon",
    "valid",
    "A motion begins soon after its receipt, a queued one soon after its predecessor's outcome.",
    clauses=["MOT-21"],
    needs="travel",
)
def test_begins_soon(bench: Bench) -> None:
    a = bench.a
    a.make_ready(LEASE_MS)
    longest = max(
        (facts for facts in bench.facts.motions.values() if facts.name not in BONDING),
        key=lambda facts: facts.typical_ms,
    )
    count = 2 if bench.facts.has("queue") and 2 * longest.typical_ms < LEASE_MS - 5000 else 1
    for move in [a.move(longest.name) for _ in range(count)]:
        a.wait_begun()
        is_moving = a.status()["activity"] == "moving"
        if not is_moving and all(seen.kind != "outcome" for seen in bench.port.inbox):
            raise Failed("a motion that need not wait has not begun", clause="MOT-21")
        a.ended(move, "done", "none", "MOT-04")


@case(
    "MOT.begun-once",
    "valid",
    "Each accepted motion is begun exactly once, though requests are copied.",
    clauses=["MOT-19", "SEQ-03"],
    needs="assist and travel",
)
def test_begun_once(bench: Bench) -> None:
    a = bench.a
    a.make_ready(20_000)
    before = a.truth()["motion_starts"]
    for _ in range(2):
        move = a.move()
        for _ in range(3):
            a.answered(a.send_frame(move.frame_bytes))
        a.ended(move, "done", "none", "MOT-04")
        a.answered(a.send_frame(move.frame_bytes))
    bench.port.wait_ms(bench.longest_ms)
    begun = a.truth()["motion_starts"] - before
    if begun != 2:
        raise Failed(f"two motions, each request sent five times, were begun {begun} times", clause="MOT-19")


@case(
    "MOT.queue-full",
    "inopportune",
    "The declared number of motions can wait; one more is refused busy and never made.",
    clauses=["MOT-07", "ACK-06"],
    needs="queue and travel and stoppable",
)
def test_queue_full(bench: Bench) -> None:
    a = bench.a
    a.make_ready(30_000)
    room = bench.facts.description["queue"]
    if room + 1 > bench.facts.description["outcomes"]:
        raise NotApplicable("the outcome table is full before the queue", item="sizes.queue")
    if bench.facts.has("assist"):
        a.hold("running")
    moves = [a.move(bench.facts.stoppable().name) for _ in range(room + 1)]
    waiting = a.status()["queued"]
    for _ in range(2):
        receipt = a.answered(a.send("move", **a.move_fields()))
        if receipt.get("reason") == "outcomes-full" and room + 1 == bench.facts.description["outcomes"]:
            break
        if receipt.get("reason") != "busy":
            raise Failed(f"a move with the queue full was {answer_words(receipt)}", clause="MOT-07")
        if bench.facts.has("assist") and a.status()["queued"] != waiting:
            raise Failed("a refused move changed the queue", clause="ACK-06")
    a.accepted("cancel", clause="MOT-08")
    for move in moves:
        a.ended(move, "cancelled", "cancel", "MOT-08")


@case(
    "MOT.no-queue",
    "inopportune",
    "Without a queue a move is refused busy while another runs.",
    clauses=["MOT-07"],
    needs="not queue and travel",
)
def test_no_queue(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    move = a.move()
    a.refused("busy", "move", **a.move_fields(), clause="MOT-07")
    a.ended(move, "done", "none", "MOT-04")


@case(
    "MOT.predecessor",
    "inopportune",
    "Motions behind one that does not end done end cancelled, cause predecessor, never begun.",
    clauses=["MOT-06", "MOT-08"],
    needs="queue and stoppable",
)
def test_predecessor(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    first = a.move(bench.facts.stoppable().name)
    second = a.move()
    bench.port.wait_ms(10)
    a.accepted("cancel", target=first.number, clause="MOT-08")
    a.ended(first, "cancelled", "cancel", "MOT-08")
    never = a.ended(second, "cancelled", "predecessor", "MOT-06")
    if never["displacement"] or never["duration_ms"]:
        raise Failed("a motion behind a cancelled one was begun", clause="MOT-06")


@case(
    "MOT.cancel-queued",
    "valid",
    "A queued motion that is cancelled ends at once, those behind it by predecessor; the running one goes on.",
    clauses=["MOT-06", "MOT-08", "ACK-07"],
    needs="queue and travel",
)
def test_cancel_queued(bench: Bench) -> None:
    a = bench.a
    if bench.facts.description["queue"] < 2:
        raise NotApplicable("the queue holds one motion only", item="sizes.queue")
    a.make_ready()
    moves = [a.move() for _ in range(3)]
    a.accepted("cancel", target=moves[1].number, clause="MOT-08")
    a.ended(moves[1], "cancelled", "cancel", "MOT-08")
    a.ended(moves[2], "cancelled", "predecessor", "MOT-06")
    a.ended(moves[0], "done", "none", "MOT-08")


# ---------------------------------------------------------------- cancel


@case(
    "MOT.cancel-running",
    "valid",
    "A running motion that is cancelled is at rest in time and tells what it made; the next one works.",
    clauses=["MOT-08", "MOT-16", "ACK-08"],
    needs="stoppable",
)
def test_cancel_running(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    facts = bench.facts.stoppable()
    for with_number in (True, False):
        position = a.status()["position"]
        move = a.move(facts.name)
        bench.port.wait_ms(facts.stoppable_ms / 4)
        sent = a.accepted("cancel", **({"target": move.number} if with_number else {}), clause="MOT-08")
        outcome = a.ended(move, "cancelled", "cancel", "MOT-08")
        _check_stopped(bench, sent, move, outcome)
        status = a.status()
        if status["activity"] != "energized" or status["position"] != position + outcome["displacement"]:
            raise Failed("after a cancelled motion activity or position is wrong", clause="MOT-16")
        a.ended(a.move(), "done", "none", "MOT-04")


def _check_stopped(bench: Bench, stop: Sent, move: Sent, outcome: Received) -> None:
    """A stopped motion came to rest in time, with a part of its magnitude."""
    magnitude = move.fields["magnitude"]
    part = outcome["displacement"] * (1 if magnitude > 0 else -1)
    if not 0 <= part <= abs(magnitude):
        raise Failed(f"a stopped motion of {magnitude} tells {outcome['displacement']}", clause="MOT-16")
    took_ms = (outcome.time_ns - stop.time_ns) / 1e6
    limit_ms = bench.facts.stop_ms + bench.facts.receipt_ms + bench.port.u_ms
    if took_ms > limit_ms + 1:
        words = f"{took_ms:.1f} ms from the stop to its outcome; at most {limit_ms:.1f} ms"
        if bench.facts.has("virtual") or took_ms > 2 * limit_ms + 100:
            raise Failed(words, clause="MOT-16")
        raise Inconclusive(words)


@case(
    "MOT.cancel-all",
    "valid",
    "cancel without a number ends running and queued motions, the running one's outcome first.",
    clauses=["MOT-08", "ACK-07"],
    needs="queue and stoppable",
)
def test_cancel_all(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    moves = [a.move(bench.facts.stoppable().name), a.move()]
    bench.port.wait_ms(10)
    a.accepted("cancel", clause="MOT-08")
    outcomes = [a.ended(move, "cancelled", "cancel", "MOT-08") for move in moves]
    if outcomes[0].time_ns > outcomes[1].time_ns or outcomes[0]["event"] >= outcomes[1]["event"]:
        raise Failed("the running motion's outcome must come first", clause="ACK-07")
    if outcomes[1]["displacement"]:
        raise Failed("a cancelled queued motion was begun", clause="MOT-08")


@case(
    "MOT.cancel-unknown",
    "invalid",
    "cancel of what is not there is refused; of everything, accepted.",
    clauses=["MOT-09", "MOT-20", "MOT-08"],
)
def test_cancel_unknown(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    a.refused("no-such-motion", "cancel", target=a.next_number(), clause="MOT-09")
    a.accepted("cancel", clause="MOT-09")
    if bench.facts.has("travel"):
        move = a.move()
        a.refused("no-such-motion", "cancel", target=(move.number - 1) % MODULUS, clause="MOT-20")
        a.ended(move, "done", "none", "MOT-20")
        a.refused("no-such-motion", "cancel", target=move.number, clause="MOT-09")


@case(
    "MOT.cancel-other-session",
    "inopportune",
    "cancel with a number concerns the sender's own motions; nobody else's lease lets it act.",
    clauses=["MOT-20", "LSE-03"],
    needs="travel",
)
def test_cancel_other_session(bench: Bench) -> None:
    a, b = bench.a, bench.b
    a.make_ready()
    move = a.move()
    b.lease = a.lease
    b.refused("not-holder", "cancel", target=move.number, clause="LSE-03")
    b.refused("not-holder", "cancel", clause="LSE-03")
    a.ended(move, "done", "none", "MOT-20")


@case(
    "MOT.cancel-past-return",
    "inopportune",
    "A motion cancelled past its point of no return lands: done or failed, interrupted by cancel.",
    clauses=["MOT-10"],
    needs="ballistic and assist",
)
def test_cancel_past_return(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    a.hold("committed")
    move = a.move(bench.facts.ballistic().name)
    bench.port.wait_ms(bench.facts.ballistic().no_return_ms + 20)
    a.accepted("cancel", target=move.number, clause="MOT-10")
    a.release_hold()
    outcome = a.outcome(move)
    a.confirm(outcome)
    if outcome["outcome"] not in ("done", "failed") or outcome["interrupted"] != "cancel":
        raise Failed(
            f"it ended {outcome['outcome']}, interrupted {outcome['interrupted']}, not landed with cancel noted",
            clause="MOT-10",
        )


@case(
    "MOT.cancel-race",
    "inopportune",
    "A cancel around the end of a motion brings one receipt and one outcome.",
    clauses=["MOT-10", "MOT-09", "ACK-07"],
    needs="travel",
)
def test_cancel_race(bench: Bench) -> None:
    a = bench.a
    a.make_ready(20_000)
    facts = bench.facts.travel()
    for shift_ms in (-3, -1, 0, 1, 3):
        move = a.move(facts.name)
        bench.port.wait_until(move.time_ns + round((facts.typical_ms + shift_ms) * 1e6))
        receipt = a.answered(a.send("cancel", target=move.number))
        if receipt.get("result") != "accepted" and receipt.get("reason") != "no-such-motion":
            raise Failed(f"a cancel racing the end was {answer_words(receipt)}", clause="MOT-10")
        outcome = a.outcome(move)
        a.confirm(outcome)
        if outcome["outcome"] not in ("done", "cancelled"):
            raise Failed(f"a cancel racing the end led to {outcome['outcome']}", clause="MOT-10")
        if receipt.get("result") != "accepted" and outcome["outcome"] != "done":
            raise Failed("a refused cancel cancelled", clause="MOT-09")


# ---------------------------------------------------------------- stated start


def _clock_in(tester: Tester, milliseconds: float) -> tuple[int, Received]:
    """The module's clock, that many ms after the answer of an exchange left."""
    exchange = tester.read("time-exchange", t1=0)
    return (exchange["t3"] + round(milliseconds * 1000)) % MODULUS, exchange


@case(
    "MOT.start-at",
    "valid",
    "A motion with a stated start begins then, never before.",
    clauses=["MOT-11"],
    needs="schedule and travel",
)
def test_start_at(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    facts = bench.facts.travel()
    for lead_ms in (60 + 3 * bench.facts.receipt_ms, 250):
        start, exchange = _clock_in(a, lead_ms)
        move = a.move(facts.name, start_at=start)
        if a.status()["scheduled"] != 1:
            raise Failed("a motion waiting for its start must be told as scheduled", clause="DSC-03")
        outcome = a.ended(move, "done", "none", "MOT-11")
        begun_ms = (outcome.time_ns - exchange.time_ns) / 1e6 - outcome["duration_ms"]
        early_ms = lead_ms - begun_ms - bench.facts.receipt_ms - bench.port.u_ms - 1
        if early_ms > 0:
            raise Failed(f"a motion began {early_ms:.1f} ms before its stated start", clause="MOT-11")
        late_ms = begun_ms - lead_ms - 2 * bench.facts.receipt_ms - bench.port.u_ms - 1
        if late_ms > 0:
            words = f"a motion began {late_ms:.1f} ms after what its stated start allows"
            if bench.facts.has("virtual"):
                raise Failed(words, clause="MOT-11")
            raise Inconclusive(words)
        if bench.facts.has("assist"):
            _check_truth_start(bench, a, start)


def _check_truth_start(bench: Bench, a: Tester, start: int) -> None:
    number = bench.language.number_of("truth_event", "motion-start")
    begun = next(entry.time for entry in a.truth()["entries"] if entry.event == number)
    behind_us = (begun - start + MODULUS // 2) % MODULUS - MODULUS // 2
    if not 0 <= behind_us <= bench.facts.receipt_ms * 1000 + (0 if bench.facts.has("virtual") else 20_000):
        raise Failed(
            f"by the truth log the motion began {behind_us} us after its stated start", clause="MOT-11"
        )


@case(
    "MOT.start-refused",
    "invalid",
    "A stated start that is past or too near is late, one beyond 60 s too-far, across half the clock's circle.",
    clauses=["MOT-12", "MOT-11"],
    needs="schedule and travel",
)
def test_start_refused(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    fields = a.move_fields()
    for lead_ms in (-3_600_000 // 2, -60_000, -1000, -1, 0, 5, 15, -2_147_000):
        start, _ = _clock_in(a, lead_ms)
        a.refused("late", "move", **fields, start_at=start, key=64, clause="MOT-12")
    for lead_ms in (60_100 + round(bench.port.u_ms), 70_000, 600_000, 2_147_000):
        start, _ = _clock_in(a, lead_ms)
        a.refused("too-far", "move", **fields, start_at=start, key=64, clause="MOT-12")
    start, _ = _clock_in(a, 59_900)
    far = a.move(start_at=start)
    position = a.status()["position"]
    a.accepted("cancel", target=far.number, clause="MOT-08")
    a.ended(far, "cancelled", "cancel", "MOT-08")
    if a.status()["position"] != position or a.status()["activity"] != "energized":
        raise Failed("a motion with a refused or far start was begun", clause="MOT-12")


@case(
    "MOT.start-exact-limits",
    "invalid",
    "The limits of a stated start hold to the millisecond.",
    clauses=["MOT-12"],
    needs="schedule and travel and virtual",
)
def test_start_exact_limits(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    fields = a.move_fields()
    line_us = bench.port.line_ns // 1000  # by which a frame may arrive later than it is sent
    arrival = _clock_at_arrival(bench, a)
    a.refused("late", "move", **fields, start_at=arrival(19_000), key=64, clause="MOT-12")
    sent = a.send("move", **fields, start_at=arrival(21_000 + line_us))
    a.expect_accepted(sent, "MOT-12")
    a.ended(sent, "done", "none", "MOT-12")
    a.refused("too-far", "move", **fields, start_at=arrival(60_001_000 + line_us), key=64, clause="MOT-12")
    sent = a.send("move", **fields, start_at=arrival(59_999_000))
    a.expect_accepted(sent, "MOT-12")
    a.accepted("cancel", clause="MOT-08")
    a.ended(sent, "cancelled", "cancel", "MOT-08")


def _clock_at_arrival(bench: Bench, a: Tester) -> Any:
    """The module's clock at the instant of sending, in virtual time that of arrival, plus microseconds."""
    exchange_sent = a.send("time-exchange", t1=0)
    answer = a.answered(exchange_sent)

    def clock(lead_us: int) -> int:
        passed_us = (bench.port.now_ns - exchange_sent.time_ns) // 1000
        return int(answer["t2"] + passed_us + lead_us) % MODULUS

    return clock


@case(
    "MOT.start-collides",
    "inopportune",
    "A scheduled motion whose time comes while another runs ends failed, cause late, never begun.",
    clauses=["MOT-13"],
    needs="schedule and assist and stoppable",
)
def test_start_collides(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    start, _ = _clock_in(a, 150)
    scheduled = a.move(start_at=start)
    a.hold("running")
    running = a.move(bench.facts.stoppable().name)
    outcome = a.ended(scheduled, "failed", "late", "MOT-13")
    if outcome["displacement"] or outcome["duration_ms"]:
        raise Failed("a scheduled motion that came too late was begun", clause="MOT-13")
    a.release_hold()
    a.ended(running, "done", "none", "MOT-13")


@case(
    "MOT.start-countdown",
    "valid",
    "A stated start across the clock's wrap, and one during which the clock is set, keeps its time.",
    clauses=["MOT-14", "MOT-11", "TIM-03"],
    needs="schedule and assist and travel",
)
def test_start_countdown(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    facts = bench.facts.travel()
    a.assist("preset", item="clock", value=MODULUS - 150_000)
    start, exchange = _clock_in(a, 250)
    move = a.move(facts.name, start_at=start)
    _check_began(bench, a.ended(move, "done", "none", "MOT-14"), exchange, 250)
    start, exchange = _clock_in(a, 250)
    move = a.move(facts.name, start_at=start)
    a.assist("preset", item="clock", value=3_000_000_000)
    _check_began(bench, a.ended(move, "done", "none", "MOT-14"), exchange, 250)


def _check_began(bench: Bench, outcome: Received, exchange: Received, lead_ms: float) -> None:
    began_ms = (outcome.time_ns - exchange.time_ns) / 1e6 - outcome["duration_ms"]
    slack_ms = 2 * bench.facts.receipt_ms + 2 * bench.port.u_ms + 2
    if abs(began_ms - lead_ms) > slack_ms:
        words = f"a start stated for {lead_ms} ms ahead came after {began_ms:.1f} ms"
        if bench.facts.has("virtual") or abs(began_ms - lead_ms) > slack_ms + 100:
            raise Failed(words, clause="MOT-14")
        raise Inconclusive(words)


@case(
    "MOT.no-schedule",
    "invalid",
    "start_at without the capability is refused unsupported with key 64.",
    clauses=["MOT-15"],
    needs="not schedule and travel",
)
def test_no_schedule(bench: Bench) -> None:
    bench.a.make_ready()
    bench.a.refused("unsupported", "move", **bench.a.move_fields(), start_at=1000, key=64, clause="MOT-15")


@case(
    "MOT.de-energize-scheduled",
    "valid",
    "de-energize ends a scheduled motion cancelled, cause de-energized.",
    clauses=["STA-10"],
    needs="schedule and travel",
)
def test_de_energize_scheduled(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    start, _ = _clock_in(a, 300)
    move = a.move(start_at=start)
    a.accepted("de-energize", clause="STA-10")
    a.ended(move, "cancelled", "de-energized", "STA-10")
    bench.port.wait_ms(350)
    if a.status()["activity"] != "idle":
        raise Failed("a cancelled scheduled motion was begun", clause="STA-10")


# ---------------------------------------------------------------- bonds


def _bonded(tester: Tester) -> list[int]:
    return [place for place, face in enumerate(tester.status()["faces"]) if face.bonded]


@case(
    "MOT.last-bond",
    "invalid",
    "The only closed bond is opened only with leave; it can be closed again.",
    clauses=["MOT-17", "MOT-18", "BDY-12"],
    needs="bonds",
)
def test_last_bond(bench: Bench) -> None:
    a = bench.a
    a.make_ready(20_000)
    bonded = _bonded(a)
    if len(bonded) != 1:
        raise NotApplicable(f"{len(bonded)} bonds are closed, not one")
    face = bonded[0]
    a.refused("last-bond", "move", motion="unbond", face=face, key=65, clause="MOT-17")
    a.refused("last-bond", "move", motion="unbond", face=face, allow_last_bond=False, key=65, clause="MOT-17")
    if _bonded(a) != [face]:
        raise Failed("a refused unbond opened the bond", clause="MOT-17")
    opened = a.ended(a.move("unbond", face=face, allow_last_bond=True), "done", "none", "MOT-18")
    if _bonded(a) or opened["displacement"]:
        raise Failed("after unbond the face must be open, displacement 0", clause="MOT-18")
    closed = a.ended(a.move("bond", face=face), "done", "none", "MOT-18")
    if _bonded(a) != [face] or closed["displacement"]:
        raise Failed("after bond the face must be bonded, displacement 0", clause="MOT-18")


@case(
    "MOT.last-bond-queued",
    "inopportune",
    "An unbond whose face has become the last by the time it would begin ends failed, never begun.",
    clauses=["MOT-17"],
    needs="bonds and queue and assist",
)
def test_last_bond_queued(bench: Bench) -> None:
    a = bench.a
    a.make_ready(20_000)
    bonded = _bonded(a)
    added = None if len(bonded) != 1 else _close_another(bench, bonded[0])
    if added is None:
        raise NotApplicable("not one bond is closed, or no other face has a neighbour")
    a.hold("running")
    first, second = (a.move("unbond", face=face) for face in (added, bonded[0]))
    a.release_hold()
    a.ended(first, "done", "none", "MOT-18")
    never = a.ended(second, "failed", "last-bond", "MOT-17")
    if never["displacement"] or never["duration_ms"] or _bonded(a) != bonded:
        raise Failed("an unbond of what had become the last bond was begun", clause="MOT-17")


def _close_another(bench: Bench, bonded: int) -> int | None:
    """Close the bond of another face that has a neighbour; its place, or None where there is none."""
    for place, face in enumerate(bench.a.status()["faces"]):
        if place != bonded and face.neighbour:
            bench.a.ended(bench.a.move("bond", face=place), "done", "none", "MOT-18")
            return place
    return None


@case(
    "MOT.bond-nothing",
    "inopportune",
    "bond towards nothing ends failed, cause no-neighbour, and the face stays open.",
    clauses=["MOT-18"],
    needs="bonds",
)
def test_bond_nothing(bench: Bench) -> None:
    a = bench.a
    a.make_ready(20_000)
    faces = [place for place, face in enumerate(a.status()["faces"]) if not face.bonded]
    seen = set()
    for face in faces:
        move = a.move("bond", face=face)
        outcome = a.outcome(move)
        a.confirm(outcome)
        ending = (outcome["outcome"], outcome["cause"])
        if ending not in (("done", "none"), ("failed", "no-neighbour")):
            raise Failed(f"bond of an open face ended {ending}", clause="MOT-18")
        if (face in _bonded(a)) != (ending[0] == "done"):
            raise Failed(f"bond of face {face} ended {ending[0]}, its record says otherwise", clause="MOT-18")
        seen.add(ending[0])
        if ending[0] == "done":
            a.ended(a.move("unbond", face=face), "done", "none", "MOT-18")
    if "failed" not in seen:
        raise NotApplicable("every face has a neighbour")


@case(
    "MOT.no-strays",
    "valid",
    "Two motions that are made leave nothing behind: no outcome more, no motion more.",
    clauses=["ACK-07", "MOT-19"],
    needs="travel",
)
def test_no_strays(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    moves = [a.move()]
    a.ended(moves[0], "done", "none", "MOT-04")
    moves.append(a.move())
    a.ended(moves[1], "done", "none", "MOT-04")
    position = a.status()["position"]
    bench.port.wait_ms(bench.longest_ms + 250)
    for move in moves:
        if bench.port.take_all(lambda received, move=move: is_outcome_of(received, move)):  # type: ignore[misc]
            raise Failed("a confirmed outcome came again", clause="ACK-07")
    if a.status()["position"] != position:
        raise Failed("the module moved without being told", clause="MOT-19")
