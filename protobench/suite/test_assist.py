"""Assist: the upper tester's channel does what it is asked and nothing else."""

from __future__ import annotations

from protobench.judge import Failed
from protobench.suite.bench import Bench
from protobench.suite.case import case
from protobench.suite.language import canonical


@case(
    "AST.missing-fields",
    "invalid",
    "An operation without the field it needs is refused malformed with its key.",
    clauses=["AST-05", "BDY-08"],
    needs="assist",
)
def test_missing_fields(bench: Bench) -> None:
    a = bench.a
    for op, key in (
        ("raise", 3),
        ("withdraw", 3),
        ("restart", 5),
        ("power-cut", 6),
        ("hold", 9),
        ("preset", 7),
    ):
        a.refused("malformed", "assist", op=op, key=key, clause="BDY-08")
    a.refused("malformed", "assist", op="preset", item="clock", key=8, clause="BDY-08")
    a.refused("malformed", "assist", body=canonical({0: a.epoch}), key=2, clause="BDY-08")
    a.refused("out-of-range", "assist", op=99, key=2, clause="BDY-13")
    known = {fault.code for fault in bench.contract.faults}
    for code in (0, next(code for code in range(1, 256) if code not in known), 999):
        a.refused("out-of-range", "assist", op="raise", code=code, key=3, clause="BDY-13")
    a.refused("out-of-range", "assist", op="preset", item="counters", value=65_536, key=8, clause="BDY-13")
    a.refused("out-of-range", "assist", op="power-cut", writes=0, key=6, clause="BDY-13")
    a.accepted("assist", op="withdraw", code=bench.fault_code("winding-hot"), clause="AST-01")
    a.accepted("assist", op="release", clause="AST-03")
    a.accepted("assist", op="release", code=70_000, phase=99, writes=0, clause="AST-05")


@case(
    "AST.presets",
    "valid",
    "Presets of change, event and epoch take effect where they should.",
    clauses=["AST-03", "STA-07", "SEQ-16"],
    needs="assist and travel",
)
def test_presets(bench: Bench) -> None:
    a = bench.a
    a.assist("preset", item="change", value=0xFFFFFFFF)
    if a.status()["change"] != 0xFFFFFFFF:
        raise Failed("the change number was not preset", clause="AST-03")
    a.make_ready()
    change = a.status()["change"]
    if not 0 <= change < 100:
        raise Failed(f"the change number went from 4294967295 to {change}", clause="STA-07")
    a.assist("preset", item="event", value=0xFFFFFFFF)
    outcomes = [a.ended(a.move(), "done", "none", "MOT-04")["event"] for _ in range(2)]
    if outcomes != [0, 1]:
        raise Failed(f"events after a preset to 4294967295 are {outcomes}", clause="AST-03")
    epoch = a.epoch
    a.assist("preset", item="epoch", value=epoch + 40)
    if a.status()["epoch"] != epoch:
        raise Failed("a preset epoch must not change the current one", clause="AST-03")
    a.restart()
    if a.epoch != epoch + 41:
        raise Failed(f"the start after a stored epoch of {epoch + 40} has {a.epoch}", clause="SEQ-16")


@case(
    "AST.power-cut",
    "valid",
    "Power that fails while a setting is written leaves the old setting and starts with cause power-on.",
    clauses=["AST-02", "STA-05"],
    needs="assist and groups",
)
def test_power_cut(bench: Bench) -> None:
    a = bench.a
    before = list(a.read("read-groups")["groups"])
    a.take_lease()
    a.assist("power-cut", writes=1)
    a.send("set-groups", groups=[0xF0000ABC])
    a.restarted()
    bench.port.take_all(lambda received: received.kind == "receipt")
    status = a.status()
    if status["restart_cause"] != "power-on" or list(a.read("read-groups")["groups"]) != before:
        raise Failed("power lost in a write must leave the old setting, cause power-on", clause="AST-02")


@case(
    "AST.hold",
    "valid",
    "A held motion stays in its phase until released, and then goes on.",
    clauses=["AST-03", "AST-04"],
    needs="assist and travel",
)
def test_hold(bench: Bench) -> None:
    a = bench.a
    a.make_ready(20_000)
    for phase, activity, begun in (
        ("ready", "energized", 0),
        ("running", "moving", 1),
        ("settling", "moving", 1),
    ):
        starts = a.truth()["motion_starts"]
        a.hold(phase)
        move = a.move()
        bench.port.wait_ms(bench.longest_ms + 50)
        if a.outcome_or_none(move, 0) is not None:
            raise Failed(f"a motion held in {phase} ended", clause="AST-03")
        if a.status()["activity"] != activity or a.truth()["motion_starts"] - starts != begun:
            raise Failed(f"held in {phase} the module is {a.status()['activity']}", clause="AST-03")
        a.release_hold()
        a.ended(move, "done", "none", "AST-03")
    a.ended(a.move(), "done", "none", "AST-03")


@case(
    "AST.truth",
    "valid",
    "The truth log tells power, motion and rest, newest first, with times of the module's clock.",
    clauses=["AST-04"],
    needs="assist and travel",
)
def test_truth(bench: Bench) -> None:
    a = bench.a
    a.restart()
    a.make_ready()
    outcome = a.ended(a.move(), "done", "none", "MOT-04")
    a.accepted("de-energize", clause="STA-10")
    truth = a.truth()
    numbers = bench.contract.enum_values("truth_event")
    names = {number: name for name, number in numbers.items()}
    told = [names[entry.event] for entry in reversed(truth["entries"])]
    if told != ["energized", "motion-start", "at-rest", "de-energized"]:
        raise Failed(f"the truth log tells {told}", clause="AST-04")
    times = [entry.time for entry in truth["entries"]]
    if times != sorted(times, reverse=True) or truth["energized"] or truth["motion_starts"] != 1:
        raise Failed(f"the truth is {truth.fields}", clause="AST-04")
    rest, start = truth["entries"][1], truth["entries"][2]
    if rest.position - start.position != outcome["displacement"] or truth["position"] != rest.position:
        raise Failed("the truth log and the outcome disagree on the displacement", clause="ACK-08")
    measured_ms = (rest.time - start.time) / 1000
    if abs(measured_ms - outcome["duration_ms"]) > 2:
        raise Failed(
            f"the truth log says {measured_ms} ms, the outcome {outcome['duration_ms']}", clause="ACK-08"
        )


@case(
    "AST.no-lease",
    "valid",
    "assist needs no lease and changes nothing unasked.",
    clauses=["AST-05", "LSE-07"],
    needs="assist",
)
def test_no_lease(bench: Bench) -> None:
    a, b = bench.a, bench.b
    b.take_lease(5000)
    before = b.status()
    a.assist("release")
    a.assist("withdraw", code=bench.fault_code("over-current"))
    sent = a.accepted("assist", op="release", clause="AST-05")
    a.expect_accepted(a.send_frame(sent.frame_bytes), "SEQ-03")
    after = b.status()
    if before["change"] != after["change"] or after["holder_session"] != b.session:
        raise Failed("an assist operation without effect changed the module", clause="AST-05")
