"""Addresses and groups: who is meant, who may be answered, and what may go to many."""

from __future__ import annotations

import math

from protobench.judge import Failed
from protobench.suite.bench import CONTROLLER_A, Bench
from protobench.suite.case import case
from protobench.suite.port import Received
from protobench.suite.tester import Tester
from protobench.suite.tools import expect_drops, expect_silent_refusals

GROUPS = (0xF0000007, 0xF0000100, 0xFFFFFFFD)
FALSE_FAIL = 1e-7


@case(
    "ADR.other-address",
    "invalid",
    "A frame for somebody else is dropped and not answered.",
    clauses=["ADR-01"],
)
def test_other_address(bench: Bench) -> None:
    joined = bench.a.read("read-groups")["groups"] if bench.facts.has("groups") else ()
    group = next(number for number in range(0xF0000001, 0xF0000020) if number not in joined)
    others = [0, bench.other_address(), bench.other_address(0xEFFFFFFE), group, 0xFFFFFFFE]
    others += [bench.address ^ 1 << bit for bit in (7, 8, 15, 16, 23, 24)]
    with expect_drops(bench, {"other-address": len(others)}, "ADR-01"):
        for address in others:
            bench.a.send("status", to=address)
        bench.a.silent("a frame for another address", "ADR-01")


@case(
    "ADR.asked-after-other",
    "valid",
    "A request right after one for an absent module is answered at once.",
    clauses=["ADR-01", "ACK-03"],
)
def test_asked_after_other(bench: Bench) -> None:
    for _ in range(5):
        bench.a.send("status", to=bench.other_address())
        sent = bench.a.send("status")
        if bench.a.answer(sent, bench.facts.receipt_ms + PATIENCE_REAL_MS + bench.port.u_ms) is None:
            raise Failed("a request after one for another module was not answered in time", clause="ACK-03")


PATIENCE_REAL_MS = 5


@case(
    "ADR.bad-source",
    "invalid",
    "A frame from nobody or from many is dropped and not answered.",
    clauses=["ADR-02"],
)
def test_bad_source(bench: Bench) -> None:
    sources = [0, 0xF0000000, 0xFFFFFFFD, 0xFFFFFFFE, 0xFFFFFFFF]
    with expect_drops(bench, {"bad-source": 2 * len(sources)}, "ADR-02"):
        for source in sources:
            bench.a.send("status", source=source)
            bench.a.send("energize", source=source)
        bench.a.silent("a frame from an address that cannot be answered", "ADR-02")


@case(
    "ADR.any-source",
    "valid",
    "A request is answered to any unicast address it comes from, the first and the last included.",
    clauses=["ADR-02", "ACK-02"],
)
def test_any_source(bench: Bench) -> None:
    for source in (1, 2, 0xFFFF, 0x10000, 0x7FFFFFFF, 0x80000000, 0xEFFFFFFF):
        if source != bench.address:
            bench.a.answered(bench.a.send("status", source=source), "ADR-02")


@case(
    "ADR.own-source",
    "inopportune",
    "A frame from the module's own address is not answered and latches address-conflict, once.",
    clauses=["ADR-03"],
)
def test_own_source(bench: Bench) -> None:
    code = bench.fault_code("address-conflict")
    bench.a.take_lease()
    with expect_drops(bench, {"own-source": 2}, "ADR-03"):
        bench.a.send("status", source=bench.address)
        bench.a.send("move", source=bench.address, motion=1)
        bench.a.silent("a frame from the module's own address", "ADR-03")
    status = bench.a.status()
    if not status["fault_latch"] or status["latched_faults"] != 1:
        raise Failed("a frame from the module's own address must latch a fault", clause="ADR-03")
    latched = [entry for entry in bench.fault_entries(bench.a) if entry.latched]
    if [entry.code for entry in latched] != [code]:
        raise Failed(f"latched are {latched}, not one address-conflict", clause="ADR-03")
    bench.a.reset()
    bench.a.refused("fault-latched", "energize", clause="STA-11")
    bench.a.accepted("clear-faults", occurrences=[latched[0].occurrence], clause="FLT-08")
    bench.a.accepted("energize", clause="FLT-08")


@case(
    "ADR.not-a-request",
    "invalid",
    "Answers, events, other notices and reserved kinds are dropped and not answered.",
    clauses=["ADR-04"],
)
def test_not_a_request(bench: Bench) -> None:
    kinds = [
        0x40,
        0x41,
        0x42,
        0x43,
        0x44,
        0x50,
        0x5F,
        0x61,
        0x7F,
        0x80,
        0x81,
        0x82,
        0x83,
        0x84,
        0x9F,
        0xA0,
        0xEF,
    ]
    with expect_drops(bench, {"not-a-request": len(kinds)}, "ADR-04"):
        for kind in kinds:
            bench.a.send(kind)
        bench.a.silent("what is no request", "ADR-04")


@case(
    "ADR.not-for-many",
    "invalid",
    "A kind that may not go to many does nothing there and counts one silent refusal.",
    clauses=["ADR-05", "ADR-06"],
)
def test_not_for_many(bench: Bench) -> None:
    bench.a.make_ready()
    fenced = {
        "reset": {"halt_count": 0},
        "release-lease": {},
        "de-energize": {},
        "cancel": {},
        "move": {"motion": 1},
    }
    before = bench.a.status()
    with expect_silent_refusals(bench, len(fenced) + 4, "ADR-05"):
        for kind in ("describe", "status", "read-counters"):
            bench.a.send(kind, to=bench.broadcast)
        for kind, fields in fenced.items():
            bench.a.send(kind, to=bench.broadcast, epoch=bench.a.epoch, lease=bench.a.lease, **fields)
        bench.a.send(0x1F, to=bench.broadcast)
        bench.a.silent("a request that may not go to many", "ADR-06")
    after = bench.a.status()
    if (after["change"], after["activity"], after["holder"]) != (
        before["change"],
        before["activity"],
        before["holder"],
    ):
        raise Failed("a request that may not go to many changed the module", clause="ADR-05")


@case(
    "ADR.silent-refusal",
    "invalid",
    "Refusals to many are silent and counted.",
    clauses=["ADR-06", "LSE-12"],
)
def test_silent_refusal(bench: Bench) -> None:
    with expect_silent_refusals(bench, 4, "ADR-06"):
        bench.a.send("probe", to=bench.broadcast, answer_window=2001)
        bench.a.send("probe", to=bench.broadcast, flags=1)
        bench.a.send("probe", to=bench.broadcast, body=b"\xc1")
        bench.b.send("renew-lease", to=bench.broadcast, duration=1000, answer_window=50)
        bench.port.wait_ms(100)
        bench.a.silent("a refused request to many", "ADR-06")


@case(
    "ADR.window-spread",
    "valid",
    "Answers to many fall uniformly into the window (distribution-free bound, false fail below 1e-7).",
    clauses=["ADR-07", "ADR-10"],
)
def test_window_spread(bench: Bench) -> None:
    window_ms, sessions = 200, 4
    rounds = 64 if bench.facts.has("virtual") else 16
    delays: list[float] = []
    testers = [bench.tester(CONTROLLER_A + 16 + place) for place in range(sessions)]
    for _ in range(rounds):
        sent = [tester.send("probe", to=bench.broadcast, answer_window=window_ms) for tester in testers]
        limit_ms = window_ms + bench.facts.receipt_ms + 200 + bench.port.u_ms
        for tester, probe in zip(testers, sent, strict=True):
            answer = tester.answer(probe, limit_ms)
            if answer is None:
                raise Failed(f"no answer to a probe with a window of {window_ms} ms", clause="ADR-07")
            delays.append((answer.time_ns - probe.time_ns) / 1e6)
    late_ms = max(delays) - window_ms - bench.facts.receipt_ms - bench.port.u_ms
    if late_ms > 0:
        raise Failed(f"an answer came {late_ms:.1f} ms after the window", clause="ADR-07")
    _check_uniform(delays, window_ms, bench.facts.receipt_ms + bench.port.u_ms)


def _check_uniform(delays: list[float], window_ms: float, slack_ms: float) -> None:
    """Dvoretzky-Kiefer-Wolfowitz with Massart's constant: P(sup |F_n - F| > e) <= 2 exp(-2 n e^2)."""
    count = len(delays)
    bound = math.sqrt(math.log(2 / FALSE_FAIL) / (2 * count))
    for place, delay in enumerate(sorted(delays)):
        low, high = (delay - slack_ms) / window_ms, delay / window_ms
        if place / count - bound > min(1.0, max(0.0, high)) or (place + 1) / count + bound < max(
            0.0, min(1.0, low)
        ):
            raise Failed(
                f"{count} answers are not spread uniformly: {place + 1} came within {delay:.1f} of {window_ms} ms",
                clause="ADR-07",
            )


@case(
    "ADR.no-window",
    "valid",
    "A window of zero, or none, asks for no answer; the shortest and the longest do.",
    clauses=["ADR-07"],
)
def test_no_window(bench: Bench) -> None:
    for window_ms in (1, 2000) if bench.facts.has("virtual") else (1,):
        sent = bench.a.send("probe", to=bench.broadcast, answer_window=window_ms)
        if bench.a.answer(sent, window_ms + bench.a.patience_ms) is None:
            raise Failed(f"a probe with a window of {window_ms} ms was not answered", clause="ADR-07")
    bench.a.send("probe", to=bench.broadcast)
    bench.a.send("probe", to=bench.broadcast, answer_window=0)
    bench.a.silent("a probe to many without a window", "ADR-07", quiet_ms=60)


@case(
    "ADR.newer-replaces",
    "valid",
    "A newer request to many replaces the waiting answer of its session.",
    clauses=["ADR-08"],
)
def test_newer_replaces(bench: Bench) -> None:
    for _ in range(6):
        first = bench.a.send("probe", to=bench.broadcast, answer_window=2000)
        second = bench.a.send("probe", to=bench.broadcast, answer_window=100)
        if bench.a.answer(second, 100 + bench.a.patience_ms) is None:
            raise Failed("the newer of two requests to many was not answered", clause="ADR-08")
        early = bench.a.answer(first, 0)
        if (
            early is not None
            and early.time_ns - second.time_ns > (bench.facts.receipt_ms + bench.port.u_ms) * 1e6
        ):
            raise Failed("an answer that a newer request replaced was still sent", clause="ADR-08")
    bench.port.wait_ms(2000 if bench.facts.has("virtual") else 400)
    if bench.port.take_all(lambda received: received.kind == "presence"):
        raise Failed("an answer that a newer request replaced was still sent", clause="ADR-08")


@case(
    "ADR.unicast-first",
    "valid",
    "A unicast answer does not wait behind an answer to many.",
    clauses=["ADR-09", "ACK-03"],
)
def test_unicast_first(bench: Bench) -> None:
    for _ in range(5):
        bench.b.send("probe", to=bench.broadcast, answer_window=300)
        sent = bench.a.send("status")
        answer = bench.a.answered(sent, "ADR-09")
        delay_ms = (answer.time_ns - sent.time_ns) / 1e6
        if delay_ms > bench.facts.receipt_ms + bench.port.u_ms + PATIENCE_REAL_MS:
            raise Failed(f"a unicast answer took {delay_ms:.1f} ms beside a waiting one", clause="ADR-09")
    bench.port.wait_ms(300 + bench.facts.receipt_ms + bench.port.u_ms)


@case(
    "ADR.none-replaces",
    "valid",
    "A newer request to many that asks for no answer takes the waiting one away too.",
    clauses=["ADR-08"],
)
def test_none_replaces(bench: Bench) -> None:
    sent = bench.a.send("probe", to=bench.broadcast, answer_window=400)
    newer = bench.a.send("probe", to=bench.broadcast)
    answer = bench.a.answer(sent, 400 + bench.a.patience_ms)
    if (
        answer is not None
        and answer.time_ns - newer.time_ns > (bench.facts.receipt_ms + bench.port.u_ms) * 1e6
    ):
        raise Failed("a request to many without a window left the waiting answer", clause="ADR-08")


@case("ADR.confirm-to-many", "invalid", "A confirm to many is refused silently.", clauses=["ADR-05"])
def test_confirm_to_many(bench: Bench) -> None:
    with expect_silent_refusals(bench, 1, "ADR-05"):
        bench.a.send("confirm", to=bench.broadcast, epoch=bench.a.epoch, event=1)


def _assign(bench: Bench, address: int, window_ms: int = 20) -> Received | None:
    """Assign by broadcast; the receipt from the new address, or None."""
    bench.port.watch.own_addresses |= {address}
    sent = bench.a.send(
        "assign-address",
        to=bench.broadcast,
        hardware_id=bench.facts.description["hardware_id"],
        address=address,
        answer_window=window_ms,
    )
    return bench.a.answer(sent, window_ms + bench.a.patience_ms)


@case(
    "ADR.assign",
    "valid",
    "An address assigned by hardware id is used at once, the old one no longer; it can be assigned back.",
    clauses=["ADR-12", "ADR-15", "ADR-10"],
)
def test_assign(bench: Bench) -> None:
    old, new = bench.address, bench.other_address(0x00050000)
    try:
        receipt = _assign(bench, new)
        if receipt is None or receipt.get("result") != "accepted" or receipt.frame.source != new:
            raise Failed("assign-address to many must be accepted from the new address", clause="ADR-12")
        bench.a.send("status", to=old)
        bench.address = new
        bench.a.silent("the old address", "ADR-12")
        if bench.facts.has("restart"):
            bench.a.restart()
            bench.a.status()
    finally:
        bench.address = new
        if _assign(bench, old) is None:
            _assign(bench, old)
        bench.address = old
        bench.port.watch.own_addresses = {old}
    bench.a.status()


@case(
    "ADR.assign-other",
    "invalid",
    "An address for another hardware id, or with another epoch, changes nothing and is refused silently.",
    clauses=["ADR-11", "ADR-15"],
)
def test_assign_other(bench: Bench) -> None:
    own = bench.facts.description["hardware_id"]
    other = own[:7] + bytes([own[7] ^ 1])
    options = {"to": bench.broadcast, "address": bench.other_address(9), "answer_window": 10}
    with expect_silent_refusals(bench, 2, "ADR-11"):
        bench.a.send("assign-address", hardware_id=other, **options)
        bench.a.send("assign-address", hardware_id=own, epoch=bench.a.epoch + 1, **options)
        bench.port.wait_ms(40)
        bench.a.silent("an assignment for another module", "ADR-11")


@case(
    "ADR.assign-state",
    "inopportune",
    "assign-address is refused while energized, and to many while another session holds the lease.",
    clauses=["ADR-12", "ADR-16"],
)
def test_assign_state(bench: Bench) -> None:
    own = bench.facts.description["hardware_id"]
    bench.a.make_ready()
    bench.a.refused(
        "energized", "assign-address", hardware_id=own, address=bench.other_address(9), clause="ADR-12"
    )
    bench.a.accepted("de-energize", clause="STA-10")
    with expect_silent_refusals(bench, 1, "ADR-16"):
        bench.b.send(
            "assign-address",
            to=bench.broadcast,
            hardware_id=own,
            address=bench.other_address(9),
            answer_window=10,
        )
        bench.port.wait_ms(40)
    bench.a.silent("an assignment while another holds the lease", "ADR-16")
    bench.a.refused(
        "out-of-range",
        "assign-address",
        hardware_id=own[::-1],
        address=bench.other_address(9),
        key=2,
        clause="BDY-13",
    )


def _probe_answered(tester: Tester, address: int) -> bool:
    sent = tester.send("probe", to=address, answer_window=20)
    return tester.answer(sent, 20 + tester.patience_ms) is not None


def _set_groups(bench: Bench, groups: list[int]) -> None:
    bench.a.accepted("set-groups", groups=groups, clause="ADR-13")


@case(
    "ADR.groups",
    "valid",
    "Membership is replaced as a whole; members take frames to their groups, and only those.",
    clauses=["ADR-13", "ADR-14"],
    needs="groups",
)
def test_groups(bench: Bench) -> None:
    original = list(bench.a.read("read-groups")["groups"])
    bench.a.take_lease()
    count = min(len(GROUPS), bench.facts.description["groups"])
    try:
        _set_groups(bench, sorted(GROUPS[:count], reverse=True))
        if list(bench.a.read("read-groups")["groups"]) != sorted(GROUPS[:count]):
            raise Failed("read-groups does not list the membership, ascending", clause="ADR-13")
        for group in GROUPS[:count]:
            if not _probe_answered(bench.a, group):
                raise Failed(f"a probe to group 0x{group:x} was not answered by its member", clause="ADR-14")
        if _probe_answered(bench.a, 0xF0000008):
            raise Failed("a probe to a group was answered by a module that is no member", clause="ADR-14")
        _set_groups(bench, [0xF0000008])
        if _probe_answered(bench.a, GROUPS[0]) or not _probe_answered(bench.a, 0xF0000008):
            raise Failed("set-groups must replace the whole membership", clause="ADR-13")
        if bench.facts.has("restart"):
            _set_groups(bench, list(GROUPS[:count]))
            bench.a.restart()
            if list(bench.a.read("read-groups")["groups"]) != list(GROUPS[:count]):
                raise Failed("the whole membership must persist through a restart", clause="ADR-13")
            if not all(_probe_answered(bench.a, group) for group in GROUPS[:count]):
                raise Failed("membership must count after a restart", clause="ADR-13")
            bench.a.take_lease()
    finally:
        _set_groups(bench, original)


@case(
    "ADR.too-many-groups",
    "invalid",
    "More groups than declared are refused.",
    clauses=["ADR-13"],
    needs="groups",
)
def test_too_many_groups(bench: Bench) -> None:
    bench.a.take_lease()
    most = bench.facts.description["groups"]
    if most < 16:
        groups = [0xF0000000 + place for place in range(most + 1)]
        bench.a.refused("out-of-range", "set-groups", groups=groups, key=2, clause="ADR-13")
    bench.a.refused("out-of-range", "set-groups", groups=[0xEFFFFFFF], key=2, clause="BDY-13")
    bench.a.refused("out-of-range", "set-groups", groups=[0xFFFFFFFE], key=2, clause="BDY-13")
