"""State: the complete table, in the states that can be reached and held on this module."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

from protobench.judge import Failed, NotApplicable
from protobench.suite.bench import Bench
from protobench.suite.case import case
from protobench.suite.machines.product import inputs_of
from protobench.suite.machines.subjects import expect_follows
from protobench.suite.port import Received, Sent
from protobench.suite.tester import Tester
from protobench.wire import serial_compare

COMMANDS = (
    "take-lease", "renew-lease", "release-lease", "energize", "de-energize", "move", "cancel", "reset", "reset-older",
    "clear-faults", "clear-faults-standing", "assign-address", "other-command", "status", "halt",
)  # fmt: skip


class State:
    """One state of the table, as the tests name it."""

    def __init__(self, activity: str, halt: bool, fault: bool, lease: str) -> None:
        self.activity, self.halt, self.fault, self.lease = activity, halt, fault, lease

    def __str__(self) -> str:
        latches = "".join(name for name, is_set in ((", halt", self.halt), (", fault", self.fault)) if is_set)
        return f"{self.activity}{latches}, lease {self.lease}"


def _at_rest() -> Iterator[State]:
    for activity in ("idle", "energized"):
        for halt in (False, True):
            for fault in (False, True):
                for lease in ("held", "free"):
                    yield State(activity, halt, fault, lease)


def _reachable(bench: Bench, state: State) -> bool:
    """Energized with a latch set, or without a lease, is there only where an actuator holds."""
    if state.activity != "energized":
        return True
    causes = [name for name, is_set in (("halt", state.halt), ("fault", state.fault)) if is_set]
    causes += ["lease_end"] if state.lease == "free" else []
    return not causes or bench.facts.settles_for(*causes) == "energized"


def _bring(bench: Bench, state: State, holder: Tester) -> None:
    """From the case's start to a state at rest."""
    holder.take_lease(20_000)
    holder.reset()
    if state.activity == "energized":
        holder.accepted("energize", clause="STA-09")
    if state.fault:
        _latch_fault(bench, holder)
    if state.halt:
        holder.answered(holder.send("halt"))
    if state.lease == "free":
        holder.accepted("release-lease", clause="LSE-11")


def _latch_fault(bench: Bench, tester: Tester) -> None:
    """A latched fault on any module: a frame from its own address."""
    tester.send("status", source=bench.address)
    if not tester.status()["fault_latch"]:
        raise Failed("a frame from the module's own address must latch a fault", clause="ADR-03")


def _apply(bench: Bench, tester: Tester, name: str) -> Received:
    """One input of the table, as a request; returns its answer."""
    return tester.answered(tester.send_frame(_input_frame(bench, tester, name)), "STA-01")


def _input_frame(bench: Bench, tester: Tester, name: str) -> bytes:
    occurrences = [entry.occurrence for entry in bench.fault_entries(tester) if entry.latched] or [1]
    count = tester.status()["halt_count"]
    address: dict[str, Any] = {
        "hardware_id": bench.facts.description["hardware_id"],
        "address": bench.address,
    }
    frames: dict[str, Callable[[], bytes]] = {
        "take-lease": lambda: tester.frame("take-lease", duration=20_000),
        "renew-lease": lambda: tester.frame("renew-lease", duration=20_000),
        "move": lambda: tester.frame("move", **tester.move_fields()),
        "reset": lambda: tester.frame("reset", halt_count=count),
        "reset-older": lambda: tester.frame("reset", halt_count=count - 1),
        "clear-faults": lambda: tester.frame("clear-faults", occurrences=occurrences[:8]),
        "clear-faults-standing": lambda: tester.frame("clear-faults", occurrences=occurrences[:8]),
        "assign-address": lambda: tester.frame("assign-address", **address),
        "other-command": lambda: _other_command(bench, tester),
    }
    return frames.get(name, lambda: tester.frame(name))()


def _other_command(bench: Bench, tester: Tester) -> bytes:
    """A command that no state refuses, of those the module has."""
    if bench.facts.has("identify"):
        return tester.frame("identify", duration=100)
    if bench.facts.has("telemetry"):
        return tester.frame("telemetry-off")
    if bench.facts.has("groups"):
        return tester.frame("set-groups", groups=list(tester.read("read-groups")["groups"]))
    return tester.frame("renew-lease", duration=20_000)


def _check_input(bench: Bench, state: State, name: str, tester: Tester) -> None:
    """Apply an input and compare answer and next state with the table."""
    before = (state.activity, state.halt, state.fault, state.lease)
    _same_state(bench, tester, before, f"the preamble towards {state}")
    wanted, after = bench.contract.states.step(before, name, bench.facts.settles_for)
    answer = bench.contract.kind("status").answer if wanted == "answered" else wanted
    received = _apply(bench, tester, name)
    told = received.kind if received.kind != "receipt" else received.get("reason") or received["result"]
    if told != answer:
        raise Failed(f"{name} in {state} must be {answer}; it was {told}", clause="STA-01")
    if name == "take-lease" and told == "accepted":
        tester.lease = received.get("lease", tester.lease)
    if name != "move" or answer != "accepted":
        _same_state(bench, tester, after, f"{name} in {state}")


def _same_state(bench: Bench, tester: Tester, wanted: tuple[str, bool, bool, str], after: str) -> None:
    status = tester.status()
    lease = "held" if status["holder_session"] or status["holder"] else "free"
    found = (status["activity"], status["halt_latch"], status["fault_latch"], lease)
    if found != wanted:
        raise Failed(f"after {after} the state must be {wanted}; it is {found}", clause="STA-01")
    displayed = bench.contract.states.displayed(wanted)
    if status["state"] != displayed:
        raise Failed(
            f"after {after} the displayed state must be {displayed}; it is {status['state']}", clause="STA-02"
        )


@contextmanager
def _case_of_its_own(bench: Bench) -> Iterator[Tester]:
    """Each pair of state and input starts from the start: fresh sessions, the postamble after it."""
    tester = bench.tester(bench.a.address)
    tester.learn()
    yield tester
    bench.end()


def _judge_states(bench: Bench, states: list[State]) -> None:
    for state in states:
        for name in COMMANDS:
            if name == "clear-faults-standing" and not (state.fault and state.lease == "held"):
                continue
            if name == "clear-faults-standing" and not bench.facts.has("assist"):
                continue
            with _case_of_its_own(bench) as tester:
                _bring(bench, state, tester)
                if name == "clear-faults-standing":
                    tester.assist("raise", code=bench.fault_code("address-conflict"))
                _check_input(bench, state, name, tester)


@case(
    "STA.table-idle",
    "valid",
    "Every request in every state at rest without power has the table's answer and next state.",
    clauses=["STA-01", "STA-02", "STA-11", "HLT-04"],
    needs="travel",
)
def test_table_idle(bench: Bench) -> None:
    _judge_states(bench, [state for state in _at_rest() if state.activity == "idle"])


@case(
    "STA.table-energized",
    "valid",
    "Every request in every state at rest with power has the table's answer and next state.",
    clauses=["STA-01", "STA-02", "STA-11"],
    needs="travel",
)
def test_table_energized(bench: Bench) -> None:
    _judge_states(
        bench, [state for state in _at_rest() if state.activity == "energized" and _reachable(bench, state)]
    )


@case(
    "STA.table-moving",
    "inopportune",
    "Every request while moving has the table's answer and next state.",
    clauses=["STA-01", "STA-02"],
    needs="stoppable and assist",
)
def test_table_moving(bench: Bench) -> None:
    state = State("moving", False, False, "held")
    for name in COMMANDS:
        if name == "halt" or (name == "move" and not bench.facts.has("queue")):
            continue
        with _case_of_its_own(bench) as tester:
            tester.make_ready(20_000)
            tester.hold("running")
            tester.move(bench.facts.stoppable().name)
            tester.wait_begun()
            if name in ("cancel", "release-lease"):
                _check_stopping_input(bench, tester, name)
            else:
                _check_input(bench, state, name, tester)


def _check_stopping_input(bench: Bench, tester: Tester, name: str) -> None:
    """cancel and release stop the motion: the answer now, the state at rest."""
    received = _apply(bench, tester, name)
    if received.get("result") != "accepted":
        raise Failed(f"{name} while moving must be accepted", clause="STA-01")
    bench.port.wait_ms(bench.facts.stop_ms + 20 + bench.port.u_ms)
    if name == "cancel":
        wanted = ("energized", False, False, "held")
    else:
        wanted = (bench.facts.settles_for("lease_end"), False, False, "free")
    _same_state(bench, tester, wanted, f"{name} while moving")


@case(
    "STA.table-past-return",
    "inopportune",
    "Every request while a motion past its point of no return is being waited for has the table's answer.",
    clauses=["STA-01", "STA-02", "HLT-13"],
    needs="ballistic and assist",
)
def test_table_past_return(bench: Bench) -> None:
    states = [State("moving", True, fault, lease) for fault in (False, True) for lease in ("held", "free")]
    for state in states if bench.facts.has("virtual") else states[:1]:
        for name in COMMANDS:
            if name == "clear-faults-standing" and not state.fault:
                continue
            with _case_of_its_own(bench) as tester:
                _bring_past_return(bench, tester, state)
                _check_input(bench, state, name, tester)


def _bring_past_return(bench: Bench, tester: Tester, state: State) -> Sent:
    tester.make_ready(20_000)
    tester.hold("committed")
    move = tester.move(bench.facts.ballistic().name)
    bench.port.wait_ms(bench.facts.ballistic().no_return_ms + 10 + bench.port.u_ms)
    if state.fault:
        _latch_fault(bench, tester)
    tester.answered(tester.send("halt"))
    if state.lease == "free":
        tester.accepted("release-lease", clause="LSE-11")
    return move


@case(
    "STA.start",
    "valid",
    "A start ends in time, idle, halted with cause restart and count 1, and is announced once.",
    clauses=["STA-03", "STA-08", "DSC-07"],
    needs="assist",
)
def test_start(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    before_ns = bench.port.now_ns
    description = a.restart("external")
    took_ms = (bench.port.now_ns - before_ns) / 1e6
    limit_ms = bench.facts.starting_ms + 3 * bench.facts.receipt_ms + 3 * bench.port.u_ms
    if took_ms > limit_ms:
        raise Failed(
            f"a restart took {took_ms:.1f} ms, {bench.facts.starting_ms} ms are declared", clause="STA-03"
        )
    status = a.status()
    wanted = {
        "state": "halted", "activity": "idle", "halt_latch": True, "fault_latch": False, "halt_count": 1,
        "halt_cause": "restart", "restart_cause": "external", "holder": 0, "queued": 0, "scheduled": 0,
        "unconfirmed": 0, "position_known": False, "position": 0, "epoch": description["epoch"], "lease": 0,
    }  # fmt: skip
    wrong = {name: status[name] for name, value in wanted.items() if status[name] != value}
    if wrong:
        raise Failed(f"after a restart the status says {wrong}", clause="STA-03")
    bench.port.wait_ms(200)
    a.take_lease()
    a.accepted("release-lease", clause="LSE-11")
    if bench.port.take_all(lambda received: received.kind == "started"):
        raise Failed("started was sent more than once", clause="STA-08")


@case(
    "STA.starting",
    "inopportune",
    "While starting, reads are answered, commands refused, and a halt is executed.",
    clauses=["STA-01", "STA-12", "HLT-04"],
    needs="assist and virtual",
)
def test_starting(bench: Bench) -> None:
    a = bench.a
    epoch = a.epoch
    a.assist("restart", cause="commanded")
    status = a.status()
    for _ in range(20):
        if status["epoch"] != epoch:
            break
        status = a.status()
    if status["state"] != "starting":
        raise NotApplicable("the module starts too quickly to be met while starting")
    bench.port.watch.restarted()
    bench.learned(status["epoch"], 0)
    if not status["halt_latch"] or status["holder"]:
        raise Failed("while starting the halt latch is set and the lease free", clause="STA-01")
    sent = a.send("take-lease", duration=1000)
    receipt = a.answered(sent)
    still = a.status()["state"] == "starting"
    if still and receipt.get("reason") != "starting":
        raise Failed("take-lease while starting must be refused starting", clause="STA-01")
    if still:
        a.refused("not-holder", "energize", clause="STA-01")
        if a.answered(a.send("halt")).kind != "halt-receipt":
            raise Failed("a halt while starting must be answered", clause="HLT-04")
    bench.port.wait_ms(bench.facts.starting_ms + 50)


@case(
    "STA.restart-causes",
    "valid",
    "The cause of a restart is told; brown-out and watchdog latch their faults, others none.",
    clauses=["STA-04", "AST-01"],
    needs="assist",
)
def test_restart_causes(bench: Bench) -> None:
    for cause, fault in (
        ("commanded", None),
        ("watchdog", "watchdog"),
        ("brown-out", "brown-out"),
        ("power-on", None),
    ):
        bench.a.restart(cause)
        status = bench.a.status()
        if status["restart_cause"] != cause:
            raise Failed(f"restart cause must be {cause}; it is {status['restart_cause']}", clause="STA-04")
        codes = [entry.code for entry in bench.fault_entries(bench.a) if entry.latched]
        if codes != ([bench.fault_code(fault)] if fault else []):
            raise Failed(f"after a restart by {cause} the latched faults are {codes}", clause="STA-04")
        if status["fault_latch"] != bool(fault):
            raise Failed(
                f"after a restart by {cause} the fault latch is {status['fault_latch']}", clause="STA-04"
            )


@case(
    "STA.restart-in-motion",
    "inopportune",
    "A restart during a motion leads to no motion, no power and no open bond, and to no outcome.",
    clauses=["STA-05", "ACK-17", "SEQ-17"],
    needs="assist and travel",
)
def test_restart_in_motion(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    faces = [face.bonded for face in a.status()["faces"]]
    a.outcome(a.move())  # not confirmed
    a.move()
    if bench.facts.has("queue"):
        a.move()
    bench.port.wait_ms(min(20, bench.facts.travel().typical_ms / 4))
    a.restart("brown-out")
    restarted_ns = bench.port.now_ns
    bench.port.wait_ms(2 * bench.longest_ms + 100)
    truth = a.truth()
    if truth["motion_starts"] or truth["energized"] or truth["position"]:
        raise Failed(f"after a restart in motion the truth is {truth.fields}", clause="STA-05")
    if [face.bonded for face in a.status()["faces"]] != faces:
        raise Failed("a restart changed a bond", clause="STA-05")
    for outcome in bench.port.take_all(lambda received: received.kind == "outcome"):
        if outcome["epoch"] == a.epoch or outcome.time_ns > restarted_ns:
            raise Failed("an outcome of before the restart was sent after it", clause="ACK-17")


@case(
    "STA.energize",
    "valid",
    "energize puts power on and moves nothing; again it changes nothing.",
    clauses=["STA-09", "STA-10"],
)
def test_energize(bench: Bench) -> None:
    a = bench.a
    a.take_lease()
    a.reset()
    true_before = a.truth() if bench.facts.has("assist") else None
    before = a.status()
    a.accepted("energize", clause="STA-09")
    bench.port.wait_ms(50)
    first = a.status()
    if first["activity"] != "energized" or first["position"] != before["position"]:
        raise Failed("energize must put power on and move nothing", clause="STA-09")
    a.accepted("energize", clause="STA-09")
    bench.port.wait_ms(50)
    second = a.status()
    if second["change"] != first["change"] or second["position"] != first["position"]:
        raise Failed("energize while energized must change nothing", clause="STA-09")
    if true_before is not None:
        truth = a.truth()
        if not truth["energized"]:
            raise Failed("after energize the actuators have no power", clause="STA-09")
        if any(truth[name] != true_before[name] for name in ("motion_starts", "position")):
            raise Failed("by the truth log energize moved something", clause="STA-09")
    a.accepted("de-energize", clause="STA-10")
    a.accepted("de-energize", clause="STA-10")
    if bench.facts.has("assist") and a.truth()["energized"]:
        raise Failed("after de-energize the actuators still have power", clause="STA-10")


@case("STA.change-number", "valid", "Each visible change raises the change number.", clauses=["STA-07"])
def test_change_number(bench: Bench) -> None:
    a = bench.a
    a.learn()
    steps: list[Callable[[], object]] = [
        a.take_lease,
        a.reset,
        lambda: a.accepted("energize", clause="STA-09"),
        lambda: a.accepted("de-energize", clause="STA-10"),
        lambda: a.answered(a.send("halt")),
        lambda: a.answered(a.send("halt")),
        lambda: a.accepted("release-lease", clause="LSE-11"),
    ]
    last = a.status()["change"]
    for step in steps:
        step()
        now = a.status()["change"]
        if serial_compare(now, last) != 1:
            raise Failed(
                f"the change number went from {last} to {now} with a visible change", clause="STA-07"
            )
        last = now
    for _ in range(3):
        if a.status()["change"] != last:
            raise Failed("the change number rose without a change", clause="STA-07")


@case(
    "STA.reads-everywhere",
    "valid",
    "Reads are answered while halted, faulted and moving.",
    clauses=["STA-12", "DSC-03"],
    needs="travel",
)
def test_reads_everywhere(bench: Bench) -> None:
    a = bench.a
    a.make_ready()
    move = a.move()
    for kind in ("status", "describe", "read-counters", "read-motions", "read-faults", "probe"):
        a.read(kind)
    a.outcome(move)
    _latch_fault(bench, a)
    a.answered(a.send("halt"))
    for kind in ("status", "describe", "read-counters", "read-motions", "read-faults", "probe"):
        a.read(kind)


DERIVED_INPUTS = (
    "halt", "fault", "commit", "complete", "lease-end", "A.take", "A.energize", "A.reset", "A.clear", "A.move",
    "A.status", "B.move",
)  # fmt: skip


@case(
    "STA.derived",
    "inopportune",
    "Activity, latches and lease follow the contract's machine through every sequence derived from it (HSI, as many "
    "states).",
    clauses=["STA-01", "STA-10", "STA-11", "HLT-07", "HLT-11", "LSE-03", "LSE-09", "LSE-10", "FLT-08"],
    needs="virtual and assist",
)
def test_derived(bench: Bench) -> None:
    known = inputs_of(bench.facts)
    expect_follows(bench, "state", [symbol for symbol in DERIVED_INPUTS if symbol in known])
