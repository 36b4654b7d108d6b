"""What a module says: receipts, answers to reads, events, made from its state when they leave."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

from emulator.config import MotionConfig, capability_bits
from emulator.judge import NO_KEY, Refused, Request
from emulator.motion import Motion
from emulator.outbox import Make, Written
from emulator.telemetry import Telemetry
from protobench.wire import Frame

if TYPE_CHECKING:
    from emulator.engine import ModuleEngine
    from emulator.faults import Occurrence

PAGE = 3
TOTAL_MAX = 255
ANY_SESSION = 0


class Answers:
    """Makes bodies and frames of one module."""

    def __init__(self, engine: ModuleEngine) -> None:
        self._engine = engine
        self._contract = engine.contract
        self._codec = engine.codec
        self._reads: dict[str, Callable[[Request, int], Callable[[], dict[str, Any]]]] = {
            "describe": lambda _, __: self._description,
            "status": lambda _, __: self._status,
            "probe": lambda _, __: self._presence,
            "read-counters": lambda _, __: self._counters,
            "read-faults": lambda request, _: lambda: self._fault_page(request.fields.page),
            "read-motions": lambda request, _: lambda: self._motion_page(request.fields.page),
            "time-exchange": lambda request, t2: lambda: self._times(request.fields.t1, t2),
            "describe-motion": lambda request, _: lambda: self._motion(request.fields.motion),
            "read-groups": lambda _, __: self._groups,
            "read-truth": lambda request, _: lambda: self._truth(request.fields.page),
        }

    def _number(self, enum: str, name: str) -> int:
        return self._contract.enum_values(enum)[name]

    # ------------------------------------------------------------ frames

    def _frame(self, kind: str, to: tuple[int, int, int], fields: dict[str, Any]) -> bytes:
        destination, session, number = to
        return self._codec.new(kind, **fields).to_frame(self._engine.address, destination, session, number)

    def maker(self, frame: Frame, kind: str, **fields: Any) -> Make:
        """A function that makes an answer to ``frame`` from these fields."""
        to, asker = (frame.source, frame.session, frame.number), self._engine.asker
        return lambda: Written(self._frame(kind, to, fields), asker)

    def raw_maker(self, frame: Frame, kind: str, body: bytes) -> Make:
        """The same from a body that is kept."""
        code = self._codec.kind(kind).code
        source, session, number = frame.source, frame.session, frame.number
        asker = self._engine.asker
        return lambda: Written(
            self._codec.frames.pack(
                code, body, source=self._engine.address, destination=source, session=session, number=number
            ),
            asker,
        )

    # ------------------------------------------------------------ receipts

    def accepted(self, details: dict[str, Any]) -> bytes:
        """Body of an accepted receipt."""
        return self._codec.new("receipt", result=self._number("result", "accepted"), **details).to_body()

    def refusal(self, refused: Refused) -> bytes:
        """Body of a refused receipt with what its reason carries."""
        engine = self._engine
        holder, session = engine.lease.holder or (0, 0)
        values = {
            "epoch": engine.epoch,
            "lease": engine.lease.number,
            "holder": holder,
            "holder_session": session,
            "halt_count": engine.halt_count,
            "majors": [self._contract.major],
        }
        details = {name: values[name] for name in refused.row.carries if name != "key"}
        if refused.key != NO_KEY:
            details["key"] = refused.key
        return self._codec.new(
            "receipt", result=self._number("result", "refused"), reason=refused.row.number, **details
        ).to_body()

    # ------------------------------------------------------------ reads

    def read(self, request: Request, t2: int) -> Make:
        """A function that makes the answer to an accepted read; ``t2`` is the clock at its arrival."""
        assert request.kind is not None and request.kind.answer is not None  # noqa: PT018 - one fact of the table
        fields = self._reads[request.name](request, t2)
        kind, frame = request.kind.answer, request.frame
        to, asker = (frame.source, frame.session, frame.number), self._engine.asker
        return lambda: Written(self._frame(kind, to, fields()), asker)

    def _description(self) -> dict[str, Any]:
        engine, config = self._engine, self._engine.config
        motions = sum(1 << self._number("motion", name) for name in config.motions)
        return {
            "hardware_id": config.hardware_id,
            "build": config.build,
            "majors": [self._contract.major],
            "minor": self._contract.minor,
            "nature": self._number("nature", "emulated"),
            "capabilities": capability_bits(config, self._contract),
            "motions": motions,
            "epoch": engine.epoch,
            "lease": engine.lease.number,
            "faces": len(config.faces),
            "sessions": config.sessions,
            "numbers": config.numbers,
            "queue": config.queue,
            "outcomes": config.outcomes,
            "faults": config.faults,
            "groups": config.groups,
            "receipt_ms": config.declared_receipt_ms,
            "starting_ms": config.declared_starting_ms,
            "stop_ms": config.declared_stop_ms,
            "turnaround_us": config.turnaround_us,
        }

    def covered(self) -> tuple[object, ...]:
        """What the change number covers: status up to key 18, but for the number itself."""
        engine = self._engine
        return (
            engine.epoch, engine.state, engine.halt_count, engine.halt_cause, engine.lease.number,
            engine.lease.holder, len(engine.motions.queued), len(engine.motions.scheduled),
            sum(motion.is_open for motion in engine.motions.formed), engine.body.known, engine.body.position,
            tuple((face.bonded, face.neighbour) for face in engine.body.faces), len(engine.faults.latched),
        )  # fmt: skip

    def _state(self) -> int:
        return self._number("state", self._contract.states.displayed(self._engine.state))

    def _status(self) -> dict[str, Any]:
        engine = self._engine
        holder, session = engine.lease.holder or (0, 0)
        return {
            "change": engine.change,
            "epoch": engine.epoch,
            "state": self._state(),
            "activity": self._number("activity", engine.state.activity),
            "halt_latch": engine.state.halt,
            "fault_latch": engine.state.fault,
            "halt_count": engine.halt_count,
            "halt_cause": self._number("halt_cause", engine.halt_cause),
            "restart_cause": self._number("restart_cause", engine.restart_cause),
            "lease": engine.lease.number,
            "holder": holder,
            "holder_session": session,
            "queued": len(engine.motions.queued),
            "scheduled": len(engine.motions.scheduled),
            "unconfirmed": sum(motion.is_open for motion in engine.motions.formed),
            "position_known": engine.body.known,
            "position": engine.body.position,
            "faces": [
                (int(face.bonded), face.neighbour if face.bonded else 0, 0) for face in engine.body.faces
            ],
            "latched_faults": len(engine.faults.latched),
            "clock": engine.clock(),
            "lease_remaining": engine.lease.remaining_ms(engine.now_us),
            "supply": engine.config.supply_mv,
            "battery": engine.config.battery_permille,
            "temperatures": list(engine.config.temperatures),
        }

    def _presence(self) -> dict[str, Any]:
        return {
            "hardware_id": self._engine.config.hardware_id,
            "epoch": self._engine.epoch,
            "nature": self._number("nature", "emulated"),
            "state": self._state(),
        }

    def _counters(self) -> dict[str, Any]:
        drops = [0] * max(drop.number for drop in self._contract.drops)
        for drop in self._contract.drops:
            drops[drop.number - 1] = self._engine.drops[drop.name]
        return {"drops": drops, "silent_refusals": self._engine.silent_refusals}

    def _fault_page(self, page: int) -> dict[str, Any]:
        faults = self._engine.faults
        rows = []
        for entry in list(reversed(faults.occurrences))[PAGE * page : PAGE * (page + 1)]:
            kind = self._contract.fault_by_code(entry.code)
            severity = self._number("severity", kind.severity)
            rows.append(
                (
                    entry.occurrence, entry.code, self._number("fault_class", kind.class_), severity, entry.count,
                    entry.time, entry.value, int(entry.code in faults.standing), int(entry.latched), int(entry.told),
                )
            )  # fmt: skip
        return {"total": min(TOTAL_MAX, len(faults.occurrences)), "lost": faults.lost, "entries": rows}

    def _motion_page(self, page: int) -> dict[str, Any]:
        formed = self._engine.motions.formed
        rows = [
            (
                motion.event, motion.source, motion.session, motion.number, self._number("motion", motion.motion),
                self._number("outcome", motion.outcome), self._number("cause", motion.cause), motion.displacement,
                int(motion.confirmed),
            )
            for motion in list(reversed(formed))[PAGE * page : PAGE * (page + 1)]
        ]  # fmt: skip
        return {"total": len(formed), "entries": rows}

    def _times(self, t1: int, t2: int) -> dict[str, Any]:
        return {"t1": t1, "t2": t2, "t3": self._engine.clock()}

    def _motion(self, number: int) -> dict[str, Any]:
        name = self._contract.enum_names("motion")[number]
        motion: MotionConfig = self._engine.config.motions[name]
        return {
            "motion": number,
            "actuator": motion.actuator,
            "magnitude_min": motion.magnitude_min,
            "magnitude_max": motion.magnitude_max,
            "typical_ms": motion.typical_ms,
            "longest_ms": motion.longest_ms,
            "no_return_ms": motion.no_return_ms,
            "halt_category": motion.halt_category,
            "lease_end_category": motion.lease_end_category,
            "fault_category": motion.fault_category,
        }

    def _groups(self) -> dict[str, Any]:
        return {"groups": list(self._engine.storage.groups)}

    def _truth(self, page: int) -> dict[str, Any]:
        engine = self._engine
        return {
            "motion_starts": engine.truth.motion_starts,
            "energized": engine.state.activity in ("energized", "moving"),
            "position": engine.true_position(),
            "total": len(engine.truth.entries),
            "entries": [
                (entry.time, self._number("truth_event", entry.event), entry.position)
                for entry in engine.truth.page(page)
            ],
        }

    # ------------------------------------------------------------ events

    def outcome(self, motion: Motion) -> Written:
        """The outcome of a motion, the same bytes each time."""
        fields = {
            "event": motion.event,
            "epoch": self._engine.epoch,
            "change": motion.change,
            "motion": self._number("motion", motion.motion),
            "outcome": self._number("outcome", motion.outcome),
            "cause": self._number("cause", motion.cause),
            "interrupted": self._number("cause", motion.interrupted),
            "displacement": motion.displacement,
            "duration_ms": motion.duration_ms,
        }
        if self._engine.config.has("energy"):
            fields["energy_mj"] = motion.energy_mj
        return Written(self._frame("outcome", (motion.source, motion.session, motion.number), fields))

    def fault(self, entry: Occurrence) -> Written:
        """A fault event, to the lease holder or to any controller."""
        kind = self._contract.fault_by_code(entry.code)
        holder = self._engine.lease.holder or (self._contract.addresses.any_controller, ANY_SESSION)
        fields = {
            "event": entry.event,
            "epoch": self._engine.epoch,
            "change": entry.change,
            "occurrence": entry.occurrence,
            "code": entry.code,
            "class_": self._number("fault_class", kind.class_),
            "severity": self._number("severity", kind.severity),
            "count": entry.count,
            "time": entry.time,
            "value": entry.value,
        }
        return Written(self._frame("fault", (*holder, 0), fields))

    def telemetry(self, telemetry: Telemetry) -> Written:
        """One telemetry report."""
        engine = self._engine
        fields = {
            "sequence": telemetry.sequence,
            "change": engine.change,
            "clock": engine.clock(),
            "state": self._state(),
            "position": engine.true_position(),
            "supply": engine.config.supply_mv,
            "temperatures": list(engine.config.temperatures),
        }
        return Written(self._frame("telemetry", (*telemetry.requester, telemetry.number), fields))

    def started(self) -> Written:
        """The one frame that says that starting is over."""
        engine = self._engine
        fields = {
            "epoch": engine.epoch,
            "change": engine.change,
            "restart_cause": self._number("restart_cause", engine.restart_cause),
            "hardware_id": engine.config.hardware_id,
            "nature": self._number("nature", "emulated"),
        }
        return Written(self._frame("started", (self._contract.addresses.any_controller, ANY_SESSION, 0), fields))

    def measured(self, code: int) -> int:
        """What the simple body measures when a fault arises."""
        config = self._engine.config
        unit = self._contract.fault_by_code(code).value_unit
        values = {
            "mV": config.supply_mv,
            "0.1 degC": config.temperatures[0] if config.temperatures else 0,
            "mA": 3100,
            "motion unit": self._engine.true_position(),
        }
        return values.get(unit, 0)
