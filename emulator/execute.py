"""What an accepted command does, one function a kind; each returns what its receipt tells besides `accepted`."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

from emulator.judge import Request
from emulator.motion import Motion
from emulator.telemetry import Telemetry

if TYPE_CHECKING:
    from emulator.engine import ModuleEngine

Details = dict[str, Any]
MODULUS = 1 << 32


class Executor:
    """Executes for one module. ``execute`` may raise PowerCut or WriteFailed: nothing was changed."""

    def __init__(self, engine: ModuleEngine) -> None:
        self._engine = engine
        self._kinds: dict[str, Callable[[Request], Details | None]] = {
            "reset": self._reset,
            "take-lease": self._take_lease,
            "renew-lease": self._renew_lease,
            "release-lease": self._release_lease,
            "energize": self._energize,
            "de-energize": self._de_energize,
            "move": self._move,
            "cancel": self._cancel,
            "clear-faults": self._clear_faults,
            "telemetry-on": self._telemetry_on,
            "telemetry-off": self._telemetry_off,
            "assign-address": self._assign_address,
            "set-groups": self._set_groups,
            "identify": self._identify,
            "assist": self._assist,
        }
        self._operations: dict[str, Callable[[Any], None]] = {
            "raise": self._raise,
            "withdraw": lambda fields: engine.withdraw_condition(fields.code),
            "restart": self._restart,
            "power-cut": self._power_cut,
            "preset": self._preset,
            "hold": self._hold,
            "release": lambda _: engine.motions.release(engine.now_us),
        }

    def execute(self, request: Request) -> Details:
        """Do what an accepted command asks for."""
        return self._kinds[request.name](request) or {}

    def _name(self, enum: str, number: int) -> str:
        return self._engine.contract.enum_names(enum)[number]

    # ------------------------------------------------------------ lease, power, reset

    def _reset(self, request: Request) -> None:  # noqa: ARG002 - one shape for all kinds
        self._engine.apply("reset")

    def _take_lease(self, request: Request) -> Details:
        engine = self._engine
        engine.lease.grant(request.key, request.fields.duration, engine.now_us)
        engine.apply("take-lease")
        engine.faults.announce(engine.now_us)
        return {"lease": engine.lease.number}

    def _renew_lease(self, request: Request) -> None:
        lease = self._engine.lease
        lease.duration_ms = request.fields.duration
        lease.extend(self._engine.now_us)

    def _release_lease(self, request: Request) -> None:  # noqa: ARG002
        self._engine.end_lease("release-lease")

    def _energize(self, request: Request) -> None:  # noqa: ARG002
        self._engine.apply("energize")

    def _de_energize(self, request: Request) -> None:  # noqa: ARG002
        engine = self._engine
        engine.apply("de-energize")
        for motion in (*engine.motions.queued, *engine.motions.scheduled):
            engine.motions.end(motion, "de-energized")
        engine.form_ended()

    # ------------------------------------------------------------ motion

    def _move(self, request: Request) -> None:
        engine, fields = self._engine, request.fields
        start_us = None
        if fields.start_at is not None:
            start_us = engine.now_us + (fields.start_at - engine.clock()) % MODULUS
        motion = Motion(
            source=request.frame.source,
            session=request.frame.session,
            number=request.frame.number,
            motion=self._name("motion", fields.motion),
            magnitude=fields.magnitude,
            face=fields.face,
            allow_last_bond=fields.allow_last_bond,
            answer=engine.outbox.queued + 1,
            start_us=start_us,
        )
        engine.motions.accept(motion)

    def _cancel(self, request: Request) -> None:
        engine = self._engine
        number = request.fields.number
        if number is None:
            engine.motions.stop_all("cancel", engine.now_us)
            engine.form_ended()
            return
        motion = engine.motions.find(*request.key, number)
        assert motion is not None
        if engine.motions.run is not None and engine.motions.run.motion is motion:
            engine.motions.stop_run("cancel", engine.now_us)
            return
        engine.motions.end(motion, "cancel")
        engine.form_alone(motion)

    def _clear_faults(self, request: Request) -> None:
        self._engine.clear_faults(request.fields.occurrences)

    # ------------------------------------------------------------ telemetry, settings

    def _telemetry_on(self, request: Request) -> None:
        fields = request.fields
        self._engine.telemetry = Telemetry.start(
            request.key, request.frame.number, fields.period, fields.duration, self._engine.now_us
        )

    def _telemetry_off(self, request: Request) -> None:  # noqa: ARG002
        self._engine.telemetry = None

    def _assign_address(self, request: Request) -> None:
        self._engine.storage.write(address=request.fields.address)
        self._engine.address = request.fields.address

    def _set_groups(self, request: Request) -> None:
        self._engine.storage.write(groups=tuple(sorted(set(request.fields.groups))))

    def _identify(self, request: Request) -> None:
        """There is no light to show in an emulated module."""

    # ------------------------------------------------------------ assist

    def _assist(self, request: Request) -> None:
        self._operations[self._name("assist_op", request.fields.op)](request.fields)

    def _raise(self, fields: Any) -> None:
        self._engine.raise_condition(fields.code, survives=fields.survives)

    def _restart(self, fields: Any) -> None:
        engine = self._engine
        engine.restart_wanted = (self._name("restart_cause", fields.cause), engine.outbox.queued + 1)

    def _power_cut(self, fields: Any) -> None:
        self._engine.storage.cut_in = fields.writes

    def _hold(self, fields: Any) -> None:
        self._engine.motions.hold_phase = self._name("phase", fields.phase)

    def _preset(self, fields: Any) -> None:
        engine = self._engine
        item, value = self._name("preset_item", fields.item), fields.value
        if item == "clock":
            engine.boot_us = engine.now_us - value
        elif item == "counters":
            engine.drops = dict.fromkeys(engine.drops, value)
            engine.silent_refusals = value
        elif item == "change":
            engine.change = value
        elif item == "lease":
            engine.lease.number = value
        elif item == "event":
            engine.event_number = value
        else:
            engine.storage.epoch = value
