"""Judging a request: the rows of the contract's refusal table, in their order, each with the check that answers it."""

from __future__ import annotations

import functools
from collections.abc import Callable, Iterator, Mapping
from typing import TYPE_CHECKING, Any, NamedTuple

from emulator.history import NEW
from emulator.motion import is_bonding
from protobench.contract import Contract, Kind, Refusal
from protobench.wire import BodyError, Examined, FieldRule, Frame

if TYPE_CHECKING:
    from emulator.engine import ModuleEngine

MODULUS = 1 << 32
NO_KEY = -1
ASSIST_NEEDS: dict[str, tuple[str, ...]] = {
    "raise": ("code",),
    "withdraw": ("code",),
    "restart": ("cause",),
    "power-cut": ("writes",),
    "preset": ("item", "value"),
    "hold": ("phase",),
    "release": (),
}
COUNTERS_MAX = 65_535


class Request:
    """One read or command, read as far as it can be. ``message`` is None where the body is not canonical."""

    __slots__ = ("examined", "frame", "key", "kind", "many", "standing")

    def __init__(
        self, frame: Frame, kind: Kind | None, many: bool, examined: Examined | None, standing: str
    ) -> None:
        self.frame = frame
        self.kind = kind
        self.many = many
        self.examined = examined
        self.standing = standing  # in the history
        self.key = (frame.source, frame.session)

    @property
    def fields(self) -> Any:
        """The message; only after its form was judged."""
        assert self.examined is not None
        return self.examined.message

    @property
    def name(self) -> str:
        return self.kind.name if self.kind is not None else ""

    @property
    def is_command(self) -> bool:
        return self.kind is not None and self.kind.class_ == "command"

    def lowest(self, rule: FieldRule) -> int | None:
        """The lowest key that breaks a rule."""
        assert self.examined is not None
        keys = [problem.key for problem in self.examined.problems if problem.rule.refusal == rule.refusal]
        return min(keys, default=None)


class Refused(NamedTuple):
    """A refusal: its row, and the key it names, or NO_KEY."""

    row: Refusal
    key: int


Check = Callable[["Judge", Request], int | None]  # the key named, NO_KEY, or None where the row does not fit


class Judge:
    """Judges for one module; ``rows`` is the table with its checks."""

    def __init__(self, engine: ModuleEngine, contract: Contract) -> None:
        self.engine = engine
        self.contract = contract
        self.names = _names(contract)
        self.rows = _rows(contract)

    def refuse(self, request: Request) -> Refused | None:
        """The first row that fits, or None: accepted."""
        for row, check in self.rows:
            key = check(self, request)
            if key is not None:
                return Refused(row, key)
        return None

    def refusal(self, name: str) -> Refused:
        """The refusal of this name, which names no key: for what shows only while executing."""
        return next(Refused(row, NO_KEY) for row, _ in self.rows if row.name == name)

    def is_readable(self, request: Request) -> bool:
        """Whether the form of a body is right, for what is never refused."""
        return not request.frame.flags and request.examined is not None and not request.examined.problems

    # ------------------------------------------------------------ version, history, form

    def version(self, request: Request) -> int | None:
        return NO_KEY if request.frame.version != self.contract.major else None

    def not_for_many(self, request: Request) -> int | None:
        return NO_KEY if request.many and (request.kind is None or not request.kind.many) else None

    def not_newer(self, request: Request) -> int | None:
        return NO_KEY if request.many and request.is_command and request.standing != NEW else None

    def unknown_kind(self, request: Request) -> int | None:
        return NO_KEY if request.kind is None else None

    def flags(self, request: Request) -> int | None:
        return NO_KEY if request.frame.flags else None

    def form(self, request: Request) -> int | None:
        return NO_KEY if request.examined is None else None

    def critical_key(self, request: Request) -> int | None:
        return request.lowest(FieldRule.NOT_UNDERSTOOD)

    def field(self, request: Request) -> int | None:
        keys = [
            key for key in (request.lowest(FieldRule.TYPE), self._assist_lacks(request)) if key is not None
        ]
        return min(keys, default=None)

    def _assist_lacks(self, request: Request) -> int | None:
        if request.name != "assist" or request.fields.op is None:
            return None
        assert request.kind is not None
        keys = {field.name: field.key for field in request.kind.fields}
        needs = self._assist_needs(request)
        return min((keys[name] for name in needs if getattr(request.fields, name) is None), default=None)

    def _assist_needs(self, request: Request) -> tuple[str, ...]:
        return ASSIST_NEEDS.get(self.names["assist_op"].get(request.fields.op, ""), ())

    def _assist_ignores(self, request: Request) -> frozenset[str]:
        """Fields whose values an assist operation does not look at."""
        if request.name != "assist":
            return frozenset()
        return frozenset(name for names in ASSIST_NEEDS.values() for name in names) - set(
            self._assist_needs(request)
        )

    # ------------------------------------------------------------ fence

    def _fenced(self, request: Request) -> bool:
        return request.is_command and request.kind is not None and request.kind.fence not in (None, "none")

    def stale_epoch(self, request: Request) -> int | None:
        if not self._fenced(request) or (request.many and request.name != "assign-address"):
            return None
        return NO_KEY if request.fields.epoch != self.engine.epoch else None

    def stale_lease(self, request: Request) -> int | None:
        if not self._fenced(request) or request.many or request.name == "assist":
            return None
        return NO_KEY if request.fields.lease != self.engine.lease.number else None

    def wrong_module(self, request: Request) -> int | None:
        if not request.many or request.name != "assign-address":
            return None
        return NO_KEY if request.fields.hardware_id != self.engine.config.hardware_id else None

    def not_holder(self, request: Request) -> int | None:
        if not self._fenced(request) or request.name in ("assist", "take-lease"):
            return None
        if request.many:
            if request.name == "assign-address":
                return None
            if request.name == "telemetry-off":
                telemetry = self.engine.telemetry
                return None if telemetry is not None and telemetry.requester == request.key else NO_KEY
        return None if self.engine.lease.is_holder(request.key) else NO_KEY

    def lease_held(self, request: Request) -> int | None:
        lease = self.engine.lease
        if request.name == "take-lease":
            return NO_KEY if lease.holder is not None else None
        if request.name == "assign-address" and request.many and lease.holder is not None:
            return None if lease.is_holder(request.key) else NO_KEY
        return None

    # ------------------------------------------------------------ capability, range

    def unsupported(self, request: Request) -> int | None:
        assert request.kind is not None
        config = self.engine.config
        if request.kind.needs is not None and not config.has(request.kind.needs):
            return NO_KEY
        if request.name in ("move", "describe-motion"):
            name = self.names["motion"].get(request.fields.motion)
            if name is not None and name not in config.motions:
                return 2 if request.name == "move" else 0
        if request.name == "move" and request.fields.start_at is not None and not config.has("schedule"):
            return 64
        return None

    def out_of_range(self, request: Request) -> int | None:
        declared = _RANGES.get(request.name)
        assert request.examined is not None
        unneeded = self._assist_ignores(request)
        problems = [problem for problem in request.examined.problems if problem.rule is FieldRule.RANGE]
        keys = [problem.key for problem in problems if problem.field not in unneeded]
        if declared is not None:
            keys += declared(self, request)
        return min(keys, default=None)

    def _move_range(self, request: Request) -> Iterator[int]:
        fields = request.fields
        name = self.names["motion"].get(fields.motion)
        if name is None:
            return
        if is_bonding(name):
            if fields.magnitude:
                yield 3
            if fields.face >= len(self.engine.config.faces):
                yield 4
        else:
            motion = self.engine.config.motions[name]
            if not motion.magnitude_min <= fields.magnitude <= motion.magnitude_max:
                yield 3
            if fields.face:
                yield 4

    def _groups_range(self, request: Request) -> Iterator[int]:
        if len(set(request.fields.groups)) > self.engine.config.groups:
            yield 2

    def _assign_range(self, request: Request) -> Iterator[int]:
        if request.fields.hardware_id != self.engine.config.hardware_id:
            yield 2

    def _assist_range(self, request: Request) -> Iterator[int]:
        fields = request.fields
        op = self.names["assist_op"].get(fields.op)
        if op in ("raise", "withdraw") and not self.engine.faults.knows(fields.code):
            yield 3
        if (
            op == "preset"
            and self.names["preset_item"].get(fields.item) == "counters"
            and fields.value > COUNTERS_MAX
        ):
            yield 8

    # ------------------------------------------------------------ state

    def starting(self, request: Request) -> int | None:
        if not request.is_command:
            return None
        return NO_KEY if self.engine.state.activity == "starting" else None

    def newer_halt(self, request: Request) -> int | None:
        if request.name != "reset":
            return None
        return NO_KEY if request.fields.halt_count != self.engine.halt_count else None

    def no_such_fault(self, request: Request) -> int | None:
        if request.name != "clear-faults":
            return None
        faults = self.engine.faults
        return (
            NO_KEY
            if any(faults.find_latched(number) is None for number in request.fields.occurrences)
            else None
        )

    def cause_stands(self, request: Request) -> int | None:
        if request.name != "clear-faults":
            return None
        found = [self.engine.faults.find_latched(number) for number in request.fields.occurrences]
        return (
            NO_KEY
            if any(one is not None and one.code in self.engine.faults.standing for one in found)
            else None
        )

    def no_such_motion(self, request: Request) -> int | None:
        if request.name != "cancel" or request.fields.number is None:
            return None
        return NO_KEY if self.engine.motions.find(*request.key, request.fields.number) is None else None

    def last_bond(self, request: Request) -> int | None:
        fields = request.fields
        if request.name != "move" or fields.allow_last_bond:
            return None
        return 65 if self.engine.body.is_last_bond(self.names["motion"][fields.motion], fields.face) else None

    # ------------------------------------------------------------ time, queue

    def late(self, request: Request) -> int | None:
        lead_us = self._lead_us(request)
        if lead_us is None:
            return None
        return 64 if lead_us >= MODULUS // 2 or lead_us < 1000 * self._lead_limit.min else None

    def too_far(self, request: Request) -> int | None:
        lead_us = self._lead_us(request)
        if lead_us is None:
            return None
        return 64 if lead_us > 1000 * self._lead_limit.max else None

    @property
    def _lead_limit(self) -> Any:
        return self.contract.limit("start_lead")

    def _lead_us(self, request: Request) -> int | None:
        if request.name != "move" or request.fields.start_at is None:
            return None
        return int(request.fields.start_at - self.engine.clock()) % MODULUS

    def busy(self, request: Request) -> int | None:
        if request.name != "move":
            return None
        free = self.engine.motions.has_place(scheduled=request.fields.start_at is not None)
        return None if free else NO_KEY

    def outcomes_full(self, request: Request) -> int | None:
        if request.name != "move":
            return None
        return None if self.engine.motions.has_outcome_place() else NO_KEY

    def never(self, request: Request) -> int | None:  # noqa: ARG002 - one shape for all checks
        """For what is found out only while executing."""
        return None


@functools.lru_cache(maxsize=8)
def _names(contract: Contract) -> dict[str, Mapping[int, str]]:
    """Names of enumerated values, one table for all modules of a contract."""
    return {enum: contract.enum_names(enum) for enum in ("motion", "assist_op", "preset_item")}


@functools.lru_cache(maxsize=8)
def _rows(contract: Contract) -> tuple[tuple[Refusal, Check], ...]:
    """The refusal table with its checks, one for all modules of a contract."""
    return tuple((row, CHECKS[row.name, row.row or ""]) for row in contract.refusals)


def _history(name: str) -> Check:
    """The rows that the history has the answers of."""
    return lambda _, request: NO_KEY if request.standing == name and not request.many else None


def _by_table(name: str) -> Check:
    """The rows that the state table has the answers of."""

    def check(judge: Judge, request: Request) -> int | None:
        engine = judge.engine
        name_of_input = engine.input_of(request)
        if name_of_input is None:
            return None
        # Whoever came so far passed the fence: to the table the lease is held, but for the request that asks for it.
        state = engine.state if request.name == "take-lease" else engine.state._replace(lease="held")
        answer, _ = judge.contract.states.step(state, name_of_input, engine.config.settles)
        return NO_KEY if answer == name else None

    return check


CHECKS: dict[tuple[str, str], Check] = {
    ("unsupported-version", ""): Judge.version,
    ("not-for-many", ""): Judge.not_for_many,
    ("not-newer", ""): Judge.not_newer,
    ("conflict", ""): _history("conflict"),
    ("late-unseen", ""): _history("late-unseen"),
    ("answer-expired", ""): _history("answer-expired"),
    ("unknown-kind", ""): Judge.unknown_kind,
    ("not-understood", "flags"): Judge.flags,
    ("malformed", "form"): Judge.form,
    ("not-understood", "critical-key"): Judge.critical_key,
    ("malformed", "field"): Judge.field,
    ("stale-epoch", ""): Judge.stale_epoch,
    ("stale-lease", ""): Judge.stale_lease,
    ("wrong-module", ""): Judge.wrong_module,
    ("not-holder", ""): Judge.not_holder,
    ("lease-held", ""): Judge.lease_held,
    ("unsupported", ""): Judge.unsupported,
    ("out-of-range", ""): Judge.out_of_range,
    ("starting", ""): Judge.starting,
    ("halted", ""): _by_table("halted"),
    ("fault-latched", ""): _by_table("fault-latched"),
    ("not-energized", ""): _by_table("not-energized"),
    ("energized", ""): _by_table("energized"),
    ("newer-halt", ""): Judge.newer_halt,
    ("moving", ""): _by_table("moving"),
    ("no-such-fault", ""): Judge.no_such_fault,
    ("cause-stands", ""): Judge.cause_stands,
    ("no-such-motion", ""): Judge.no_such_motion,
    ("last-bond", ""): Judge.last_bond,
    ("storage-failed", ""): Judge.never,
    ("late", ""): Judge.late,
    ("too-far", ""): Judge.too_far,
    ("busy", ""): Judge.busy,
    ("outcomes-full", ""): Judge.outcomes_full,
}

_RANGES: dict[str, Callable[[Judge, Request], Iterator[int]]] = {
    "move": Judge._move_range,
    "set-groups": Judge._groups_range,
    "assign-address": Judge._assign_range,
    "assist": Judge._assist_range,
}


def examine(engine: ModuleEngine, frame: Frame, kind: Kind | None, many: bool) -> Examined | None:
    """The body of a frame, or None where it is not canonical or its kind is unknown."""
    if kind is None:
        return None
    try:
        return engine.codec.kind(kind.name).examine(frame.body, many)
    except BodyError:
        return None
