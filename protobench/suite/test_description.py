"""Description and status: what a module says of itself is true, bounded and steady."""

from __future__ import annotations

from typing import Any

from protobench.judge import Failed, NotApplicable
from protobench.suite.bench import Bench
from protobench.suite.case import case

STEADY = (
    "hardware_id", "build", "majors", "minor", "nature", "capabilities", "motions", "faces", "sessions", "numbers",
    "queue", "outcomes", "faults", "groups", "receipt_ms", "starting_ms", "stop_ms", "turnaround_us",
)  # fmt: skip


@case(
    "DSC.steady",
    "valid",
    "The description is within limits, consistent, and the same each time.",
    clauses=["DSC-01", "DSC-06"],
)
def test_steady(bench: Bench) -> None:
    first = bench.a.read("describe")
    for name, capability in (("queue", "queue"), ("groups", "groups")):
        if bool(first[name]) != bench.facts.has(capability):
            raise Failed(f"{name} is {first[name]}, capability {capability} says otherwise", clause="DSC-01")
    if (
        1 not in first["majors"]
        or list(first["majors"]) != sorted(set(first["majors"]))
        or first["minor"] != 0
    ):
        raise Failed(
            f"majors {first['majors']}, minor {first['minor']}: this contract is 1.0", clause="DSC-01"
        )
    if not any(first["hardware_id"]):
        raise Failed("a hardware id of zeros is not unique", clause="DSC-01")
    known = sum(1 << number for number in bench.contract.enum_values("motion").values())
    if first["motions"] & ~known or not first["motions"]:
        raise Failed(
            f"motions 0x{first['motions']:x} names none, or one that the contract does not have",
            clause="DSC-01",
        )
    bench.a.take_lease()
    second = bench.a.read("describe")
    if bench.facts.has("restart"):
        second = bench.a.restart()
    changed = [name for name in STEADY if first[name] != second[name]]
    if changed:
        raise Failed(f"{', '.join(changed)} changed", clause="DSC-01")


@case(
    "DSC.motions",
    "valid",
    "Each declared motion is described within limits; others are refused.",
    clauses=["DSC-02", "DSC-06"],
)
def test_motions(bench: Bench) -> None:
    for name, number in bench.contract.enum_values("motion").items():
        if not bench.facts.description["motions"] >> number & 1:
            bench.a.refused("unsupported", "describe-motion", motion=name, key=0, clause="DSC-02")
            continue
        answer = bench.a.read("describe-motion", motion=name)
        if answer["motion"] != name:
            raise Failed(f"asked about {name}, {answer['motion']} was described", clause="DSC-02")
        if answer["typical_ms"] > answer["longest_ms"] or answer["magnitude_min"] > answer["magnitude_max"]:
            raise Failed(f"the times or ranges of {name} contradict each other", clause="DSC-02")
        if answer["no_return_ms"] > answer["longest_ms"]:
            raise Failed(f"{name} has its point of no return after its end", clause="DSC-02")
        if name in ("bond", "unbond") and (answer["magnitude_min"] or answer["magnitude_max"]):
            raise Failed(f"{name} has no magnitude", clause="DSC-02")


@case("DSC.status-now", "valid", "Status tells the state at the moment.", clauses=["DSC-03"])
def test_status_now(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    a.reset()
    for kind, activity in (("energize", "energized"), ("de-energize", "idle"), ("energize", "energized")):
        a.accepted(kind, clause="STA-09")
        if a.status()["activity"] != activity:
            raise Failed(f"right after {kind} the status says {a.status()['activity']}", clause="DSC-03")
    status = a.status()
    if status["epoch"] != a.epoch or len(status["faces"]) != bench.facts.description["faces"]:
        raise Failed("status and description disagree on epoch or faces", clause="DSC-03")


@case(
    "DSC.moving-now",
    "valid",
    "Status tells motion while it lasts, and rest after it.",
    clauses=["DSC-03", "STA-06"],
    needs="travel",
)
def test_moving_now(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    move = a.move()
    bench.port.wait_ms(bench.facts.receipt_ms + 2)
    during = a.status()
    outcome = a.ended(move, "done", "none", "MOT-04")
    after = a.status()
    if (outcome.time_ns - move.time_ns) / 1e6 > 3 * bench.facts.receipt_ms + 20 and during[
        "activity"
    ] != "moving":
        raise Failed(f"during a motion the status says {during['activity']}", clause="DSC-03")
    if after["activity"] != "energized" or after["change"] == during["change"]:
        raise Failed(
            "after a motion the status must say energized, with another change number", clause="DSC-03"
        )


@case(
    "DSC.unsupported",
    "invalid",
    "Kinds that need what is not declared are refused unsupported.",
    clauses=["DSC-04", "AST-06"],
)
def test_unsupported(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    fields: dict[str, dict[str, Any]] = {
        "telemetry-on": {"period": 100, "duration": 1000}, "telemetry-off": {}, "set-groups": {"groups": []},
        "identify": {"duration": 1000}, "read-groups": {}, "read-truth": {}, "assist": {"op": "release"},
    }  # fmt: skip
    tried = 0
    for kind in bench.contract.kinds:
        if kind.needs and not bench.facts.has(kind.needs):
            a.refused("unsupported", kind.name, clause="DSC-04", **fields[kind.name])
            tried += 1
    if not tried:
        raise NotApplicable("the module declares every capability", item="capabilities")


@case(
    "DSC.identify",
    "valid",
    "identify is accepted at rest and halted, and moves nothing.",
    clauses=["DSC-05"],
    needs="identify",
)
def test_identify(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    before = a.status()
    a.accepted("identify", duration=100, clause="DSC-05")
    a.reset()
    a.accepted("identify", duration=60_000, clause="DSC-05")
    for duration in (0, 99, 60_001):
        a.refused("out-of-range", "identify", duration=duration, key=2, clause="BDY-13")
    after = a.status()
    if after["position"] != before["position"] or after["activity"] != before["activity"]:
        raise Failed("identify moved or energized", clause="DSC-05")


@case(
    "DSC.position",
    "valid",
    "The position is unknown after a start until a motion other than bond and unbond ends done.",
    clauses=["DSC-07"],
    needs="restart and travel",
)
def test_position(bench: Bench) -> None:
    a = bench.a
    a.restart()
    a.make_ready()
    status = a.status()
    if status["position_known"] or status["position"]:
        raise Failed("after a start the position is unknown and 0", clause="DSC-07")
    bonded = [place for place, face in enumerate(status["faces"]) if face.bonded]
    if bench.facts.has("bonds") and bonded:
        a.confirm(a.outcome(a.move("bond", face=bonded[0])))
        if a.status()["position_known"]:
            raise Failed("a bond made the position known", clause="DSC-07")
    outcome = a.ended(a.move(), "done", "none", "MOT-04")
    status = a.status()
    if not status["position_known"] or status["position"] != outcome["displacement"]:
        raise Failed("after a motion that ended done the position is known", clause="DSC-07")
