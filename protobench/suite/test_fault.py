"""Faults: told on the edge, repeated without flooding, latched until cleared, never lost."""

from __future__ import annotations

from protobench.judge import Failed, Inconclusive, NotApplicable
from protobench.suite.bench import Bench
from protobench.suite.case import case
from protobench.suite.port import Received
from protobench.suite.tester import Tester

FIRST_REPEAT_MS = 500
SLOWEST_MS = 8000
SPACING_MS = 100


def _code(bench: Bench, name: str) -> int:
    return bench.fault_code(name)


def _next(tester: Tester, code: int, within_ms: float = 200, clause: str = "FLT-01") -> Received:
    event = tester.next_fault(code, within_ms)
    if event is None:
        raise Failed(f"no event of fault {code} within {within_ms} ms", clause=clause)
    return event


def _latched(bench: Bench, tester: Tester) -> list[int]:
    return [entry.occurrence for entry in bench.fault_entries(tester) if entry.latched]


@case(
    "FLT.told",
    "valid",
    "A fault is told at once to the holder with all its particulars.",
    clauses=["FLT-01", "FLT-03", "FLT-18"],
    needs="assist",
)
def test_told(bench: Bench) -> None:
    a = bench.a
    a.restart()  # counts are since the start
    a.make_ready()
    clock = a.status()["clock"]
    for name in ("winding-hot", "over-current", "sensor-implausible"):
        fault = bench.contract.fault(name)
        a.assist("raise", code=fault.code)
        event = _next(a, fault.code)
        if (event.frame.destination, event.frame.session, event.frame.number) != (a.address, a.session, 0):
            raise Failed("a fault must go to the holder with its session and number 0", clause="FLT-01")
        wanted = {"class": fault.class_, "severity": fault.severity, "count": 1, "epoch": a.epoch}
        wrong = {key: event[key] for key, value in wanted.items() if event[key] != value}
        if wrong:
            raise Failed(f"the event of {name} says {wrong}, not {wanted}", clause="FLT-01")
        if (event["time"] - clock) % (1 << 32) > 10_000_000:
            raise Failed("the event's time is not that of its arising", clause="FLT-18")
        entry = bench.fault_entries(a)[0]
        if (entry.occurrence, entry.code, entry.time, entry.value) != (
            event["occurrence"], event["code"], event["time"], event["value"],
        ):  # fmt: skip
            raise Failed("event and list disagree", clause="FLT-14")
        a.confirm(event)
        bench.port.wait_ms(SPACING_MS)


@case(
    "FLT.no-holder",
    "valid",
    "Without a holder a fault is told to any-controller with session 0.",
    clauses=["FLT-02"],
    needs="assist",
)
def test_no_holder(bench: Bench) -> None:
    code = _code(bench, "winding-hot")
    bench.a.assist("raise", code=code)
    event = _next(bench.a, code, clause="FLT-02")
    if (event.frame.destination, event.frame.session) != (0xFFFFFFFE, 0):
        raise Failed(
            f"it went to 0x{event.frame.destination:x}, session {event.frame.session}", clause="FLT-02"
        )


@case(
    "FLT.latch",
    "valid",
    "A latching fault sets the latch, a notice does not.",
    clauses=["FLT-03", "FLT-10"],
    needs="assist",
)
def test_latch(bench: Bench) -> None:
    a = bench.a
    for fault in bench.contract.faults:
        a.assist("raise", code=fault.code)
        status = a.status()
        latching = fault.severity == "latching"
        if status["fault_latch"] != latching:
            raise Failed(
                f"{fault.name} ({fault.severity}) left the fault latch {status['fault_latch']}",
                clause="FLT-03",
            )
        if status["latched_faults"] != int(latching):
            raise Failed(f"{fault.name}: {status['latched_faults']} are told to be latched", clause="FLT-03")
        a.assist("withdraw", code=fault.code)
        if a.status()["fault_latch"] != latching:
            raise Failed(f"{fault.name}: the latch changed when its condition went away", clause="FLT-10")
        if latching:
            a.take_lease(2000)
            a.accepted("clear-faults", occurrences=_latched(bench, a), clause="FLT-08")
            a.accepted("release-lease", clause="LSE-11")


@case(
    "FLT.repeats",
    "valid",
    "A fault not told is repeated after 500 ms and then at doubling intervals, same number.",
    clauses=["FLT-04"],
    needs="assist",
)
def test_repeats(bench: Bench) -> None:
    a = bench.a
    a.take_lease(30_000)
    code = _code(bench, "winding-hot")
    a.assist("raise", code=code)
    last = first = _next(a, code)
    gaps = [500, 1000, 2000, 4000, 8000, 8000] if bench.facts.has("virtual") else [500, 1000]
    slack_ms = bench.facts.receipt_ms + 2 * bench.port.u_ms
    for gap_ms in gaps:
        if gap_ms >= 4000:
            a.accepted("renew-lease", duration=30_000, clause="LSE-06")
        event = _next(a, code, gap_ms + 200, "FLT-04")
        found_ms = (event.time_ns - last.time_ns) / 1e6
        if not gap_ms - slack_ms <= found_ms <= gap_ms + slack_ms + 1:
            raise (Failed if bench.port.u_ms < 30 else Inconclusive)(
                f"a repeat came after {found_ms:.1f} ms, {gap_ms} are due", clause="FLT-04"
            )
        if event.fields != first.fields:
            raise Failed("a repeat must say the same as the first event", clause="FLT-04")
        last = event


@case(
    "FLT.confirmed",
    "valid",
    "The holder's confirm marks a fault told and ends its repeats; it clears nothing.",
    clauses=["FLT-05"],
    needs="assist",
)
def test_confirmed(bench: Bench) -> None:
    a = bench.a
    a.take_lease(30_000)
    code = _code(bench, "winding-hot")
    a.assist("raise", code=code)
    a.confirm(_next(a, code))
    if a.next_fault(code, 9000 if bench.facts.has("virtual") else 1700) is not None:
        raise Failed("a fault the holder confirmed was told again", clause="FLT-05")
    entry = bench.fault_entries(a)[0]
    if not (entry.told and entry.latched and entry.standing) or not a.status()["fault_latch"]:
        raise Failed("a confirmed fault must be told, and still latched", clause="FLT-05")


@case(
    "FLT.confirmed-by-other",
    "valid",
    "Another's confirm slows the repeats to 8 s and does not mark the fault told.",
    clauses=["FLT-05"],
    needs="assist",
)
def test_confirmed_by_other(bench: Bench) -> None:
    a, b = bench.a, bench.b
    a.take_lease(30_000)
    code = _code(bench, "winding-hot")
    a.assist("raise", code=code)
    event = _next(a, code)
    sent = b.confirm(event)
    if a.next_fault(code, 7900 if bench.facts.has("virtual") else 1700) is not None:
        raise Failed("after another's confirm the next repeat is 8 s away", clause="FLT-05")
    if bench.fault_entries(a)[0].told:
        raise Failed("another's confirm marked the fault told", clause="FLT-05")
    if bench.facts.has("virtual"):
        again = _next(a, code, 500, "FLT-05")
        gap_ms = (again.time_ns - sent.time_ns) / 1e6
        if abs(gap_ms - SLOWEST_MS) > bench.facts.receipt_ms + 1:
            raise Failed(f"after another's confirm the repeat came after {gap_ms:.0f} ms", clause="FLT-05")
    a.confirm(event)


@case(
    "FLT.spacing",
    "valid",
    "Faults that arise together are told in order, 100 ms apart.",
    clauses=["FLT-06", "FLT-01"],
    needs="assist",
)
def test_spacing(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    codes = [_code(bench, name) for name in ("winding-hot", "over-current", "bond-weak", "position-lost")]
    sent = [a.send("assist", op="raise", code=code) for code in codes]
    bench.raised.update(codes)
    for one in sent:
        a.expect_accepted(one, "AST-01")
    order: list[int] = []
    for _ in codes:
        event = a.next_fault(None, 2 * SPACING_MS)
        if event is None:
            raise Failed(f"of four faults raised together {len(order)} were told in time", clause="FLT-06")
        a.confirm(event)
        order.append(event["code"])
    if order != codes:
        raise Failed(f"faults {codes} were told in the order {order}", clause="FLT-06")


@case(
    "FLT.chatter",
    "valid",
    "A chattering condition neither floods the link nor delays answers.",
    clauses=["FLT-06", "FLT-11", "TIM-07"],
    needs="assist",
)
def test_chatter(bench: Bench) -> None:
    a = bench.a
    code = _code(bench, "shell-warm")
    begin_ns = bench.port.now_ns
    for _ in range(40):
        a.assist("raise", code=code)
        a.assist("withdraw", code=code)
    bench.port.wait_ms(250)
    took_ms = (bench.port.now_ns - begin_ns) / 1e6
    events = bench.port.take_all(lambda received: received.kind == "fault")
    if len(events) > took_ms / SPACING_MS + 2:
        raise Failed(f"{len(events)} fault events in {took_ms:.0f} ms", clause="FLT-06")
    a.status()


@case(
    "FLT.grant-announces",
    "valid",
    "Each grant announces every latched fault afresh to the new holder, though it was told before.",
    clauses=["FLT-07", "FLT-05"],
    needs="assist",
)
def test_grant_announces(bench: Bench) -> None:
    a, b = bench.a, bench.b
    a.take_lease()
    codes = [_code(bench, "winding-hot"), _code(bench, "position-lost")]
    a.assist("raise", code=codes[0])
    a.confirm(_next(a, codes[0], 400))
    a.assist("raise", code=codes[1])
    b.confirm(_next(a, codes[1], 400))  # no holder yet: the next repeat is 8 s away
    a.accepted("release-lease", clause="LSE-11")
    b.take_lease()
    for code in codes:
        event = _next(b, code, 400, "FLT-07")
        if (event.frame.destination, event.frame.session) != (b.address, b.session):
            raise Failed("a grant must announce latched faults to the new holder", clause="FLT-07")
        b.confirm(event)


@case(
    "FLT.clear",
    "valid",
    "Clearing clears what is named and nothing else; the latch opens with the last; the module can be used again.",
    clauses=["FLT-08", "FLT-10", "FLT-09"],
    needs="assist",
)
def test_clear(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    codes = [_code(bench, "winding-hot"), _code(bench, "position-lost")]
    for code in codes:
        a.assist("raise", code=code)
        a.assist("withdraw", code=code)
    second, first = _latched(bench, a)
    a.accepted("clear-faults", occurrences=[first], clause="FLT-08")
    status = a.status()
    if not status["fault_latch"] or status["latched_faults"] != 1 or _latched(bench, a) != [second]:
        raise Failed("clearing one of two faults must leave the other and the latch", clause="FLT-08")
    a.accepted("clear-faults", occurrences=[second], clause="FLT-08")
    status = a.status()
    if status["fault_latch"] or status["latched_faults"] or status["activity"] == "moving":
        raise Failed("the fault latch must open with the last fault cleared", clause="FLT-08")
    if status["activity"] != bench.facts.settles_for("fault"):
        raise Failed("clearing must neither energize nor de-energize", clause="FLT-09")
    if len(bench.fault_entries(a)) < 2:
        raise Failed("cleared faults must stay readable", clause="FLT-14")
    a.accepted("energize", clause="FLT-08")
    if bench.facts.has("travel"):
        a.ended(a.move(), "done", "none", "FLT-08")


@case(
    "FLT.cleared-not-told",
    "valid",
    "A cleared fault that nobody confirmed is told no more.",
    clauses=["FLT-04", "FLT-08"],
    needs="assist",
)
def test_cleared_not_told(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    code = _code(bench, "winding-hot")
    a.assist("raise", code=code)
    _next(a, code)
    a.assist("withdraw", code=code)
    a.accepted("clear-faults", occurrences=_latched(bench, a), clause="FLT-08")
    if a.next_fault(code, FIRST_REPEAT_MS + 200) is not None:
        raise Failed("a cleared fault was told again", clause="FLT-04")


@case(
    "FLT.first-before-repeats",
    "valid",
    "A new fault is told before the repeats of older ones.",
    clauses=["FLT-06", "FLT-01"],
    needs="assist",
)
def test_first_before_repeats(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    old = [_code(bench, name) for name in ("winding-hot", "over-current", "position-lost", "bond-lost")]
    for code in old:
        a.assist("raise", code=code)
        _next(a, code, 2 * SPACING_MS)
    bench.port.wait_ms(FIRST_REPEAT_MS - SPACING_MS)
    new = _code(bench, "supply-low")
    sent = a.assist("raise", code=new)
    event = _next(a, new, 3 * SPACING_MS, "FLT-06")
    if (event.time_ns - sent.time_ns) / 1e6 > SPACING_MS + bench.facts.receipt_ms + 3 * bench.port.u_ms + 1:
        raise Failed("a new fault waited behind repeats of older ones", clause="FLT-06")


@case(
    "FLT.clear-refused",
    "inopportune",
    "Clearing is refused while the cause stands, and for what is not latched; then all or nothing.",
    clauses=["FLT-09", "FLT-08"],
    needs="assist",
)
def test_clear_refused(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    hot, lost = _code(bench, "winding-hot"), _code(bench, "position-lost")
    a.assist("raise", code=hot)
    a.assist("raise", code=lost)
    a.assist("withdraw", code=lost)
    second, first = _latched(bench, a)
    a.refused("cause-stands", "clear-faults", occurrences=[first], clause="FLT-09")
    a.refused("cause-stands", "clear-faults", occurrences=[second, first], clause="FLT-09")
    a.refused("no-such-fault", "clear-faults", occurrences=[second, second + 50], clause="FLT-09")
    a.refused("no-such-fault", "clear-faults", occurrences=[first, second + 50], clause="FLT-09")
    if _latched(bench, a) != [second, first] or not a.status()["fault_latch"]:
        raise Failed("a refused clearing cleared something", clause="FLT-08")
    a.assist("withdraw", code=hot)
    a.accepted("clear-faults", occurrences=[second, first], clause="FLT-08")
    a.refused("no-such-fault", "clear-faults", occurrences=[first], clause="FLT-09")
    bench.b.lease = a.lease
    bench.b.refused("not-holder", "clear-faults", occurrences=[first], clause="LSE-03")


@case(
    "FLT.edges",
    "valid",
    "Each rising edge is an occurrence with a new number and count; a condition that stands raises none.",
    clauses=["FLT-11", "FLT-14"],
    needs="assist",
)
def test_edges(bench: Bench) -> None:
    a = bench.a
    a.restart()  # counts are since the start
    a.take_lease()
    code = _code(bench, "over-current")
    a.assist("raise", code=code)
    a.assist("raise", code=code)
    if len(_latched(bench, a)) != 1:
        raise Failed("a standing condition raised another occurrence", clause="FLT-11")
    a.assist("withdraw", code=code)
    a.assist("raise", code=code)
    newer, older = bench.fault_entries(a)[:2]
    if newer.occurrence <= older.occurrence or (newer.count, older.count) != (2, 1) or newer.code != code:
        raise Failed(f"the second edge is recorded as {newer}, the first as {older}", clause="FLT-11")
    if not newer.standing or not newer.latched or not older.latched:
        raise Failed("both occurrences are latched, the cause stands", clause="FLT-14")
    a.refused("cause-stands", "clear-faults", occurrences=[older.occurrence], clause="FLT-09")


@case(
    "FLT.stops-motion",
    "valid",
    "A latching fault stops a motion, which ends failed; what waits ends by it; power as declared.",
    clauses=["FLT-12", "FLT-13", "MOT-16"],
    needs="assist and stoppable",
)
def test_stops_motion(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    a.hold("running")
    move = a.move(bench.facts.stoppable().name)
    queued = a.move() if bench.facts.has("queue") else None
    bench.port.wait_ms(bench.facts.receipt_ms + 5)
    a.assist("raise", code=_code(bench, "over-current"))
    a.ended(move, "failed", "fault", "FLT-12")
    if queued is not None:
        a.ended(queued, "cancelled", "fault", "FLT-12")
    if a.status()["activity"] != bench.facts.settles_for("fault"):
        raise Failed("a latching fault must take the power as declared", clause="FLT-13")
    a.refused("fault-latched", "energize", clause="STA-11")
    a.refused("fault-latched", "move", **a.move_fields(), clause="MOT-01")


@case(
    "FLT.at-rest",
    "valid",
    "A latching fault while energized takes the power as declared; a notice takes none and stops nothing.",
    clauses=["FLT-13", "FLT-03"],
    needs="assist and travel",
)
def test_at_rest(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    move = a.move()
    a.assist("raise", code=_code(bench, "supply-low"))
    a.ended(move, "done", "none", "FLT-03")
    if a.status()["activity"] != "energized":
        raise Failed("a notice took the power", clause="FLT-03")
    a.assist("raise", code=_code(bench, "over-current"))
    if a.status()["activity"] != bench.facts.settles_for("fault"):
        raise Failed("a latching fault must take the power as declared", clause="FLT-13")


@case(
    "FLT.clear-moving",
    "inopportune",
    "Clearing is refused moving before the module is at rest.",
    clauses=["FLT-09", "FLT-12"],
    needs="assist and ballistic",
)
def test_clear_moving(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    a.hold("committed")
    move = a.move(bench.facts.ballistic().name)
    bench.port.wait_ms(bench.facts.ballistic().no_return_ms + 20)
    code = _code(bench, "over-current")
    a.assist("raise", code=code)
    a.assist("withdraw", code=code)
    a.refused("moving", "clear-faults", occurrences=_latched(bench, a), clause="FLT-09")
    a.release_hold()
    outcome = a.outcome(move)
    a.confirm(outcome)
    if outcome["outcome"] not in ("done", "failed") or outcome["interrupted"] != "fault":
        raise Failed(f"it ended {outcome['outcome']}, interrupted {outcome['interrupted']}", clause="FLT-12")
    a.accepted("clear-faults", occurrences=_latched(bench, a), clause="FLT-08")


@case(
    "FLT.overflow",
    "inopportune",
    "More occurrences than the list holds are counted and reported; none that must stay is lost; the latch holds.",
    clauses=["FLT-15", "FLT-08"],
    needs="assist",
)
def test_overflow(bench: Bench) -> None:
    a = bench.a
    a.restart()
    a.take_lease(30_000)
    places = bench.facts.description["faults"]
    if places > MOST_PLACES:
        raise NotApplicable(f"{places} places would take too long to fill", item="sizes.faults")
    code = _code(bench, "over-current")
    for _ in range(places):
        a.assist("raise", code=code)
        a.assist("withdraw", code=code)
    kept = _latched(bench, a)
    if len(kept) != places:
        raise Failed(f"{places} places hold {len(kept)} latched occurrences", clause="FLT-15")
    a.assist("raise", code=_code(bench, "position-lost"))
    page = a.read("read-faults")
    if page["lost"] != 1 or page["total"] != places + 1:
        raise Failed(f"one more than fits: lost {page['lost']}, total {page['total']}", clause="FLT-15")
    told = a.next_fault(_code(bench, "list-overflow"), (places + 3) * SPACING_MS)
    if told is None:
        raise Failed("an overflow of the list was not told", clause="FLT-15")
    codes = [entry.code for entry in bench.fault_entries(a)]
    if _code(bench, "list-overflow") not in codes or _latched(bench, a) != kept:
        raise Failed("an overflow must be recorded and lose nothing that must stay", clause="FLT-15")
    a.assist("withdraw", code=_code(bench, "position-lost"))
    for first in range(0, len(kept), 8):
        a.accepted("clear-faults", occurrences=kept[first : first + 8], clause="FLT-08")
    if a.status()["latched_faults"]:
        raise Failed("every named occurrence was cleared, some are latched", clause="FLT-08")


MOST_PLACES = 40


@case(
    "FLT.overflow-standing",
    "inopportune",
    "A standing condition that found no place is recorded as soon as there is one.",
    clauses=["FLT-15"],
    needs="assist",
)
def test_overflow_standing(bench: Bench) -> None:
    a = bench.a
    a.restart()
    a.take_lease(30_000)
    places = bench.facts.description["faults"]
    if places > MOST_PLACES:
        raise NotApplicable(f"{places} places would take too long to fill", item="sizes.faults")
    code, other = _code(bench, "over-current"), _code(bench, "position-lost")
    for _ in range(places):
        a.assist("raise", code=code)
        a.assist("withdraw", code=code)
    kept = _latched(bench, a)
    a.assist("raise", code=other)
    a.accepted("clear-faults", occurrences=kept[:1], clause="FLT-08")
    if other not in [entry.code for entry in bench.fault_entries(a) if entry.latched]:
        raise Failed("a standing condition was not recorded when a place was free", clause="FLT-15")
    if not a.status()["fault_latch"]:
        raise Failed("the fault latch opened though a cause stands", clause="FLT-15")


@case(
    "FLT.overflow-latches",
    "inopportune",
    "A latching fault that finds no place among notices nobody has confirmed still sets the fault latch.",
    clauses=["FLT-15", "FLT-03"],
    needs="assist",
)
def test_overflow_latches(bench: Bench) -> None:
    a = bench.a
    a.restart()
    places = bench.facts.description["faults"]
    if places > MOST_PLACES:
        raise NotApplicable(f"{places} places would take too long to fill", item="sizes.faults")
    notice, latching = _code(bench, "shell-warm"), _code(bench, "over-current")
    for _ in range(places):
        a.assist("raise", code=notice)
        a.assist("withdraw", code=notice)
    a.assist("raise", code=latching)
    if not a.status()["fault_latch"]:
        raise Failed("a latching fault with the list full of notices set no latch", clause="FLT-15")
    a.restart()


@case(
    "FLT.survives-restart",
    "valid",
    "A fault whose cause survives a restart is latched and announced again; one whose cause does not is gone.",
    clauses=["FLT-16", "STA-04"],
    needs="assist",
)
def test_survives_restart(bench: Bench) -> None:
    a = bench.a
    stays, goes = _code(bench, "winding-hot"), _code(bench, "over-current")
    a.assist("raise", code=stays, survives=True)
    a.assist("raise", code=goes)
    bench.port.wait_ms(2 * SPACING_MS)
    bench.port.take_all(lambda received: received.kind == "fault")
    a.restart()
    event = a.next_fault(None, 200)
    if event is None or event["code"] != stays or event["epoch"] != a.epoch:
        raise Failed("a surviving cause must be announced in the start that follows", clause="FLT-16")
    codes = [entry.code for entry in bench.fault_entries(a) if entry.latched]
    if codes != [stays] or not a.status()["fault_latch"]:
        raise Failed(f"after the restart the latched faults are {codes}", clause="FLT-16")
    a.take_lease()
    a.refused("cause-stands", "clear-faults", occurrences=_latched(bench, a), clause="FLT-09")
    a.assist("withdraw", code=stays)
    a.accepted("clear-faults", occurrences=_latched(bench, a), clause="FLT-08")


@case(
    "FLT.notice-repeats",
    "valid",
    "A notice is repeated at most 4 times, and no more once anyone confirmed it.",
    clauses=["FLT-17"],
    needs="assist and virtual",
)
def test_notice_repeats(bench: Bench) -> None:
    a = bench.a
    code = _code(bench, "shell-warm")
    a.assist("raise", code=code)
    bench.port.wait_ms(40_000)
    events = bench.port.take_all(lambda received: received.kind == "fault")
    if len(events) != 5:
        raise Failed(f"an unconfirmed notice was sent {len(events)} times, 5 are due", clause="FLT-17")
    a.assist("withdraw", code=code)
    a.assist("raise", code=code)
    bench.b.confirm(_next(a, code))
    if a.next_fault(code, 12_000) is not None:
        raise Failed("a confirmed notice was told again", clause="FLT-17")


@case(
    "FLT.notice-confirmed",
    "valid",
    "A notice that anyone confirmed is not repeated.",
    clauses=["FLT-17", "FLT-03"],
    needs="assist",
)
def test_notice_confirmed(bench: Bench) -> None:
    code = _code(bench, "bond-weak")
    bench.a.assist("raise", code=code)
    bench.b.confirm(_next(bench.a, code))
    if bench.a.next_fault(code, 1200) is not None:
        raise Failed("a confirmed notice was told again", clause="FLT-17")


@case(
    "FLT.list",
    "valid",
    "The list shows occurrences newest first; cleared ones stay; pages past the end are empty.",
    clauses=["FLT-14", "ACK-15", "FLT-18"],
    needs="assist",
)
def test_list(bench: Bench) -> None:
    a = bench.a
    a.restart()
    a.take_lease()
    names = ["winding-hot", "shell-warm", "over-current", "bond-lost"]
    for name in names:
        a.assist("raise", code=_code(bench, name))
    for name in names[:2]:
        a.assist("withdraw", code=_code(bench, name))
    before = bench.fault_entries(a)
    if [entry.code for entry in before] != [_code(bench, name) for name in reversed(names)]:
        raise Failed(f"the list is {before}", clause="FLT-14")
    if [entry.standing for entry in before] != [1, 1, 0, 0] or [entry.latched for entry in before] != [
        1,
        1,
        0,
        1,
    ]:
        raise Failed(f"what stands or is latched is wrong in {before}", clause="FLT-14")
    a.accepted("clear-faults", occurrences=[before[3].occurrence], clause="FLT-08")
    after = bench.fault_entries(a)
    if (
        len(after) != 4
        or after[3].latched
        or after[3].value != before[3].value
        or after[3].time != before[3].time
    ):
        raise Failed(f"after clearing the list is {after}", clause="FLT-14")
    if a.read("read-faults", page=255)["entries"]:
        raise Failed("a page past the end must be empty", clause="ACK-15")


@case(
    "FLT.conflict-told",
    "valid",
    "An address conflict is a fault like any other: told, listed, cleared at rest.",
    clauses=["ADR-03", "FLT-18"],
)
def test_conflict_told(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    code = _code(bench, "address-conflict")
    a.send("describe", source=bench.address)
    event = a.next_fault(code, 300)
    if event is None or event.frame.destination != a.address or event["severity"] != "latching":
        raise Failed("an address conflict must be told to the holder as a latching fault", clause="ADR-03")
    a.confirm(event)
    entry = bench.fault_entries(a)[0]
    if (entry.occurrence, entry.standing, entry.latched) != (event["occurrence"], 0, 1):
        raise Failed(f"the list says {entry}", clause="FLT-18")
    a.accepted("clear-faults", occurrences=[event["occurrence"]], clause="FLT-08")
