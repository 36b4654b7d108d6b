"""Deliberately broken Python modules: each is the emulated module with one small change.

``BROKEN`` lists them: what each does wrong, the clause it breaks, and the case that claims to find it.
"""

from __future__ import annotations

import random
from collections.abc import Callable
from dataclasses import replace
from typing import Any, NamedTuple

from emulator.config import ModuleConfig
from emulator.engine import ModuleEngine
from emulator.faults import FaultList
from emulator.history import COPY, NEW, History
from emulator.judge import Judge
from emulator.lease import Lease
from emulator.motion import MotionTable
from emulator.storage import Storage
from protobench.contract import load_contract
from protobench.links import MemoryLink
from protobench.wire import Dropped

SEED = 11


class BrokenModule(NamedTuple):
    """One broken module; ``make`` gives its engine class."""

    name: str
    text: str
    clause: str
    case: str
    make: Callable[[], type[ModuleEngine]]

    def link(self) -> MemoryLink:
        """A link to a new one."""
        engine = self.make()(ModuleConfig(), Storage(), random.Random(SEED), load_contract())
        return MemoryLink(engine, name=f"broken module {self.name}")


BROKEN: list[BrokenModule] = []


def broken(
    name: str, text: str, clause: str, case: str
) -> Callable[[Callable[[], type[ModuleEngine]]], None]:
    """Register what a function makes."""

    def register(make: Callable[[], type[ModuleEngine]]) -> None:
        BROKEN.append(BrokenModule(name, text, clause, case, make))

    return register


def methods(**replaced: Callable[..., Any]) -> type[ModuleEngine]:
    """An engine with some methods replaced."""
    return type("BrokenEngine", (ModuleEngine,), replaced)


def after_start(change: Callable[[ModuleEngine], None]) -> type[ModuleEngine]:
    """An engine that is changed after each start."""

    def start(self: ModuleEngine, cause: str) -> None:
        ModuleEngine._start(self, cause)
        change(self)

    return methods(_start=start)


def with_part(attribute: str, base: type, **replaced: Callable[..., Any]) -> type[ModuleEngine]:
    """An engine one of whose parts has some methods replaced."""
    part = type("BrokenPart", (base,), {"__slots__": (), **replaced})

    def change(engine: ModuleEngine) -> None:
        getattr(engine, attribute).__class__ = part

    return after_start(change)


def without_row(name: str) -> type[ModuleEngine]:
    """An engine that never refuses for one reason."""

    def start(self: ModuleEngine, cause: str) -> None:
        ModuleEngine._start(self, cause)
        self.judge.rows = tuple(row for row in self.judge.rows if row[0].name != name)

    return methods(_start=start)


# ---------------------------------------------------------------- framing, addresses


@broken("crc-not-checked", "Takes frames whatever their check sequence says.", "FRM-02", "FRM.crc-variants")
def _() -> type[ModuleEngine]:
    def take(self: ModuleEngine, unit: bytes | Dropped) -> None:
        if isinstance(unit, bytes) and len(unit) >= 24:
            unit = unit[:-4] + self.codec.frames.crc(unit[:-4]).to_bytes(4, "big")
        ModuleEngine._take_unit(self, unit)

    return methods(_take_unit=take)


@broken("short-not-counted", "Does not count what is too short.", "FRM-03", "FRM.too-short")
def _() -> type[ModuleEngine]:
    def drop(self: ModuleEngine, reason: str) -> None:
        if reason != "too-short":
            ModuleEngine._drop(self, reason)

    return methods(_drop=drop)


@broken(
    "drops-counted-twice", "Counts a frame with a wrong check sequence twice.", "FRM-12", "FRM.counted-once"
)
def _() -> type[ModuleEngine]:
    def drop(self: ModuleEngine, reason: str) -> None:
        for _ in range(2 if reason == "crc" else 1):
            ModuleEngine._drop(self, reason)

    return methods(_drop=drop)


@broken("counters-wrap", "Drop counters wrap at 65536.", "FRM-13", "FRM.counters-saturate")
def _() -> type[ModuleEngine]:
    def drop(self: ModuleEngine, reason: str) -> None:
        self.drops[reason] = (self.drops[reason] + 1) % 65_536

    return methods(_drop=drop)


@broken(
    "silent-refusal-uncounted", "Does not count refusals of requests to many.", "ADR-06", "ADR.silent-refusal"
)
def _() -> type[ModuleEngine]:
    return methods(refuse_silently=lambda self: None)


@broken("hears-any-controller", "Takes what is addressed to any controller.", "ADR-01", "ADR.other-address")
def _() -> type[ModuleEngine]:
    def includes(self: ModuleEngine, frame: Any) -> bool:
        return frame.destination == 0xFFFFFFFE or ModuleEngine._includes(self, frame)

    return methods(_includes=includes)


@broken("answers-anyone", "Answers sources that cannot be answered.", "ADR-02", "ADR.bad-source")
def _() -> type[ModuleEngine]:
    return methods(_is_answerable=lambda self, source: True)


@broken("own-address-ignored", "Does not notice a frame from its own address.", "ADR-03", "ADR.own-source")
def _() -> type[ModuleEngine]:
    return methods(_meet_own_address=lambda self: None)


@broken("halts-for-others", "Executes halts for other addresses.", "HLT-01", "HLT.not-included")
def _() -> type[ModuleEngine]:
    def includes(self: ModuleEngine, frame: Any) -> bool:
        return frame.kind == 0x20 or ModuleEngine._includes(self, frame)

    return methods(_includes=includes)


@broken(
    "window-not-spread",
    "Answers requests to many at once instead of in their window.",
    "ADR-07",
    "ADR.window-spread",
)
def _() -> type[ModuleEngine]:
    return methods(_window_due=lambda self, window_ms: self.now_us if window_ms else None)


# ---------------------------------------------------------------- sessions, numbers, duplicates


@broken("copy-executed-again", "Executes copies of commands.", "SEQ-03", "SEQ.copied-move")
def _() -> type[ModuleEngine]:
    def lookup(self: History, key: Any, number: int, digest: int) -> Any:
        found, entry = History.lookup(self, key, number, digest)
        return (NEW, None) if found == COPY else (found, entry)

    return with_part("history", History, lookup=lookup)


@broken(
    "conflict-taken-for-copy",
    "Answers a used number with the stored receipt, whatever it asks.",
    "SEQ-04",
    "SEQ.conflict",
)
def _() -> type[ModuleEngine]:
    def lookup(self: History, key: Any, number: int, digest: int) -> Any:
        found, entry = History.lookup(self, key, number, digest)
        return (COPY, self.sessions[key].entries[number]) if found == "conflict" else (found, entry)

    return with_part("history", History, lookup=lookup)


@broken("overtaken-accepted", "Executes numbers that were overtaken.", "SEQ-05", "SEQ.late-unseen")
def _() -> type[ModuleEngine]:
    def lookup(self: History, key: Any, number: int, digest: int) -> Any:
        found, entry = History.lookup(self, key, number, digest)
        return (NEW, None) if found == "late-unseen" else (found, entry)

    return with_part("history", History, lookup=lookup)


@broken(
    "one-history-a-source", "Keeps one history for all sessions of a source.", "SEQ-01", "SEQ.sessions-apart"
)
def _() -> type[ModuleEngine]:
    return with_part(
        "history",
        History,
        lookup=lambda self, key, number, digest: History.lookup(self, (key[0], 0), number, digest),
        consume=lambda self, key, number: History.consume(self, (key[0], 0), number),
    )


@broken("holder-pushed-out", "Pushes out the holder's session like any other.", "SEQ-10", "LOD.sessions")
def _() -> type[ModuleEngine]:
    def change(engine: ModuleEngine) -> None:
        engine.history._is_holder = lambda key: False

    return after_start(change)


@broken("epoch-not-kept", "Begins each start with the same epoch.", "SEQ-16", "SEQ.restart")
def _() -> type[ModuleEngine]:
    def start(self: ModuleEngine, cause: str) -> None:
        self.storage.epoch = 0
        ModuleEngine._start(self, cause)

    return methods(_start=start)


@broken("lease-number-unchecked", "Takes commands with any lease number.", "SEQ-15", "SEQ.stale-lease")
def _() -> type[ModuleEngine]:
    return without_row("stale-lease")


@broken("epoch-unchecked", "Takes commands with any epoch.", "SEQ-14", "SEQ.stale-epoch")
def _() -> type[ModuleEngine]:
    return without_row("stale-epoch")


# ---------------------------------------------------------------- answers


@broken("outcome-sent-once", "Never repeats an outcome.", "ACK-09", "ACK.outcome-repeats")
def _() -> type[ModuleEngine]:
    def send(self: ModuleEngine, motion: Any) -> None:
        ModuleEngine._send_outcome(self, motion)
        motion.next_us = None

    return methods(_send_outcome=send)


@broken(
    "outcome-repeats-for-ever",
    "Repeats an outcome each 200 ms without an end.",
    "ACK-09",
    "ACK.outcome-repeats",
)
def _() -> type[ModuleEngine]:
    def send(self: ModuleEngine, motion: Any) -> None:
        ModuleEngine._send_outcome(self, motion)
        motion.next_us = self.now_us + 200_000

    return methods(_send_outcome=send)


@broken("anyone-confirms", "Takes a confirm from anyone.", "ACK-12", "ACK.confirm-wrong")
def _() -> type[ModuleEngine]:
    def confirm(self: ModuleEngine, request: Any) -> bool:
        for motion in self.motions.formed:
            if motion.is_open and motion.event == request.fields.event:
                motion.confirmed = True
                return True
        return ModuleEngine._confirm(self, request)

    return methods(_confirm=confirm)


@broken("refusals-reordered", "Looks at the range before the fence.", "ACK-05", "ACK.refusal-order")
def _() -> type[ModuleEngine]:
    def change(engine: ModuleEngine) -> None:
        rows = engine.judge.rows
        ranges = [row for row in rows if row[0].name == "out-of-range"]
        rest = [row for row in rows if row[0].name != "out-of-range"]
        fence = next(place for place, row in enumerate(rest) if row[0].stage == "fence")
        engine.judge.rows = (*rest[:fence], *ranges, *rest[fence:])

    return after_start(change)


# ---------------------------------------------------------------- state, motion


@broken("change-number-stuck", "Never raises the change number.", "STA-07", "STA.change-number")
def _() -> type[ModuleEngine]:
    def note(self: ModuleEngine) -> None:
        change = self.change
        ModuleEngine._note_change(self)
        self.change = change

    return methods(_note_change=note)


@broken("energizes-while-halted", "Lets itself be energized while halted.", "STA-01", "STA.table-idle")
def _() -> type[ModuleEngine]:
    return without_row("halted")


@broken("range-unchecked", "Takes magnitudes beyond the declared range.", "MOT-03", "MOT.range")
def _() -> type[ModuleEngine]:
    class Lenient(Judge):
        def out_of_range(self, request: Any) -> int | None:
            return None if request.name == "move" else Judge.out_of_range(self, request)

    def change(engine: ModuleEngine) -> None:
        engine.judge.rows = tuple(
            (row, Lenient.out_of_range if row.name == "out-of-range" else check)
            for row, check in engine.judge.rows
        )
        engine.judge.__class__ = Lenient

    return after_start(change)


@broken("late-start-runs", "Begins a motion whose stated start is past.", "MOT-12", "MOT.start-refused")
def _() -> type[ModuleEngine]:
    return without_row("late")


@broken(
    "predecessor-forgotten",
    "Goes on with the queue after a motion that did not end done.",
    "MOT-06",
    "MOT.predecessor",
)
def _() -> type[ModuleEngine]:
    def end(self: MotionTable, motion: Any, cause: str) -> None:
        if cause != "predecessor":
            MotionTable.end(self, motion, cause)

    return with_part("motions", MotionTable, end=end)


@broken("cancel-ignored", "Accepts a cancel and goes on moving.", "MOT-08", "MOT.cancel-running")
def _() -> type[ModuleEngine]:
    def stop(self: MotionTable, cause: str, now_us: int) -> None:
        if cause != "cancel":
            MotionTable.stop_run(self, cause, now_us)

    return with_part("motions", MotionTable, stop_run=stop)


# ---------------------------------------------------------------- halt, lease


@broken(
    "halt-lets-motion-end", "Lets the running motion go on to its end when halted.", "HLT-07", "HLT.running"
)
def _() -> type[ModuleEngine]:
    def stop(self: MotionTable, cause: str, now_us: int) -> None:
        if cause != "halt":
            MotionTable.stop_run(self, cause, now_us)

    return with_part("motions", MotionTable, stop_run=stop)


@broken("halt-count-stuck", "Does not count halts.", "HLT-06", "HLT.every-state")
def _() -> type[ModuleEngine]:
    def halt(self: ModuleEngine, cause: str) -> int:
        count = self.halt_count
        found = ModuleEngine.halt(self, cause)
        self.halt_count = count
        return found

    return methods(halt=halt)


@broken("reset-clears-faults", "Clears the fault latch with the halt latch.", "HLT-11", "HLT.reset")
def _() -> type[ModuleEngine]:
    def apply(self: ModuleEngine, name: str) -> None:
        ModuleEngine.apply(self, name)
        if name == "reset":
            self.state = self.state._replace(fault=False)

    return methods(apply=apply)


@broken("reset-of-any-count", "Resets whatever halt count the controller saw.", "HLT-12", "HLT.reset-older")
def _() -> type[ModuleEngine]:
    return without_row("newer-halt")


@broken("lease-extended-by-copy", "Extends the lease when a request is copied.", "LSE-07", "LSE.no-extension")
def _() -> type[ModuleEngine]:
    def resend(self: ModuleEngine, request: Any) -> None:
        self.extend_lease(request)
        ModuleEngine._resend_outcome(self, request)

    return methods(_resend_outcome=resend)


@broken("lease-displaced", "Grants the lease while another holds it.", "LSE-02", "LSE.held")
def _() -> type[ModuleEngine]:
    def change(engine: ModuleEngine) -> None:
        engine.judge.rows = tuple(row for row in engine.judge.rows if row[0].name != "lease-held")

    return after_start(change)


@broken("lease-lasts-longer", "Ends the lease a second late.", "LSE-05", "LSE.expiry")
def _() -> type[ModuleEngine]:
    def extend(self: Lease, now_us: int) -> None:
        self.end_us = now_us + 1000 * self.duration_ms + 1_000_000

    return with_part("lease", Lease, extend=extend)


# ---------------------------------------------------------------- faults


@broken("fault-told-once", "Never repeats a fault event.", "FLT-04", "FLT.repeats")
def _() -> type[ModuleEngine]:
    def wants(self: FaultList, entry: Any) -> bool:
        return not entry.sendings and FaultList._wants(self, entry)

    return with_part("faults", FaultList, _wants=wants)


@broken("fault-events-crowd", "Sends fault events without a pause between them.", "FLT-06", "FLT.spacing")
def _() -> type[ModuleEngine]:
    def change(engine: ModuleEngine) -> None:
        engine.faults.times.spacing = 0

    return after_start(change)


@broken("clears-what-stands", "Clears a fault whose cause stands.", "FLT-09", "FLT.clear-refused")
def _() -> type[ModuleEngine]:
    return without_row("cause-stands")


@broken("notice-latches", "Latches notices.", "FLT-03", "FLT.latch")
def _() -> type[ModuleEngine]:
    return with_part("faults", FaultList, is_latching=lambda self, code: True)


@broken(
    "grant-tells-nothing", "Tells a new holder nothing of what is latched.", "FLT-07", "FLT.grant-announces"
)
def _() -> type[ModuleEngine]:
    return with_part("faults", FaultList, announce=lambda self, now_us: None)


@broken(
    "survivor-forgotten", "Forgets a fault whose cause survives a restart.", "FLT-16", "FLT.survives-restart"
)
def _() -> type[ModuleEngine]:
    def start(self: ModuleEngine, cause: str) -> None:
        self._survivors = set()
        ModuleEngine._start(self, cause)

    return methods(_start=start)


# ---------------------------------------------------------------- time, versions, description, assist


@broken(
    "clock-read-back", "Tells an answer's clock that lies before the request's.", "TIM-01", "TIM.exchange"
)
def _() -> type[ModuleEngine]:
    def start(self: ModuleEngine, cause: str) -> None:
        ModuleEngine._start(self, cause)
        clock = self.clock
        self.answers._times = lambda t1, t2: {"t1": t1, "t2": t2, "t3": (clock() - 5000) % (1 << 32)}  # type: ignore[method-assign]

    return methods(_start=start)


@broken("telemetry-endless", "Does not end telemetry.", "TIM-04", "TIM.telemetry")
def _() -> type[ModuleEngine]:
    def apply(self: ModuleEngine) -> None:
        if self.telemetry is not None:
            self.telemetry = replace(self.telemetry, end_us=1 << 60)
        ModuleEngine._send_due(self)

    return methods(_send_due=apply)


@broken("version-ignored", "Takes requests of any major version.", "VER-01", "VER.other-major")
def _() -> type[ModuleEngine]:
    def take(self: ModuleEngine, frame: Any) -> None:
        frame.version = 1
        ModuleEngine._take_request(self, frame)

    return methods(_take_request=take)


@broken("position-known-too-soon", "Says after a start that its position is known.", "DSC-07", "DSC.position")
def _() -> type[ModuleEngine]:
    def change(engine: ModuleEngine) -> None:
        engine.body.known = True

    return after_start(change)


@broken("hold-ignored", "Does not hold a motion in a phase.", "AST-03", "AST.hold")
def _() -> type[ModuleEngine]:
    def enter(self: MotionTable, phase: str, now_us: int) -> None:
        self.hold_phase = None
        MotionTable.enter(self, phase, now_us)

    return with_part("motions", MotionTable, enter=enter)
