"""The command states of a module as a machine: power, motion, latches and lease, with two controllers.

Made from the contract's state table (STA-01), its refusal order and the clauses on how motions end. What the machine
knows:

- activity, and of a running motion whether it is past its point of no return and whether a cancel reached it there;
- halt latch; fault latch, and whether the latched fault's cause still stands;
- who holds the lease: nobody, A or B.

Time is inputs: ``commit``, ``complete``, ``lease-end``. What an input stops comes to rest within the same step, so that
only a motion past its point of no return is ever seen stopping. Starting is over within the step of a restart.

The module's declared facts decide what there is: stop categories, motions, assist. Without assist a motion cannot be
held, so a move runs to its end within its step, and nothing is raised but address-conflict.

Not in the machine: more than one motion at a time (with the queue capability a move that would be queued is not sent),
stated starts, bonds, more than one latched fault, notices, unconfirmed outcomes, starting, numbers and copies (the
window machine has those), settings and telemetry.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from typing import NamedTuple

from protobench.contract import Contract, State
from protobench.suite.facts import Facts, MotionFacts
from protobench.suite.machines.mealy import Mealy

CONTROLLERS = ("A", "B")
NOTHING, NOT_SENT = "nothing", "not sent"
GONE, STANDS = "gone", "stands"
EVERYWHERE = {
    "halt": "a halt to the module, by A",
    "lease-end": "the lease expires",
    "fault": "a latching fault arises; with assist its cause stands",
}
WITH_ASSIST = {
    "fault-ends": "the cause of the latched fault ends",
    "restart": "a commanded restart, until it has started",
    "restart-faulty": "a restart by the watchdog, until it has started",
}
WITH_BALLISTIC = {"commit": "the running motion passes its point of no return"}
WITH_HOLD = {"complete": "the running motion comes to its end"}
COMMANDS = {
    "take": "take-lease",
    "renew": "renew-lease",
    "release": "release-lease",
    "energize": "energize",
    "de-energize": "de-energize",
    "cancel": "cancel",
    "reset": "reset",
    "clear": "clear-faults",
    "move": "move",
}
MOVES = ("move", "move-out-of-range", "move-stale-epoch", "move-stale-lease")
ALONE = ("reset-older", "move-out-of-range", "move-stale-epoch", "move-stale-lease", "status")  # by A only
FIXED = {
    "move-stale-epoch": "refused stale-epoch",
    "move-stale-lease": "refused stale-lease",
}
STOPPED = {"halt": "halted", "fault": "failed", "lease-end": "cancelled", "cancel": "cancelled"}


class Product(NamedTuple):
    """One state. ``fault``: empty, GONE or STANDS; ``holder``: empty, "A" or "B"."""

    activity: str = "idle"
    halt: bool = True
    fault: str = ""
    holder: str = ""
    committed: bool = False
    cancelled: bool = False

    @property
    def table(self) -> State:
        """The same as a state of the contract's table."""
        return State(self.activity, self.halt, bool(self.fault), "held" if self.holder else "free")

    def __str__(self) -> str:
        motion = self.activity + (" past no return" if self.committed else "")
        motion += ", cancelled" if self.cancelled else ""
        latches = [name for name, on in (("halt", self.halt), (f"fault {self.fault}", self.fault)) if on]
        return f"{motion}; {' and '.join(latches) or 'clear'}; {self.holder or 'free'}"


Reaction = tuple[tuple[str, ...], Product]


def joined(frames: Iterable[str]) -> str:
    """What a step brought, in one canonical string."""
    return " + ".join(sorted(frames)) or NOTHING


def inputs_of(facts: Facts) -> tuple[str, ...]:
    """The inputs that this module can be given."""
    held = facts.has("assist") and facts.has("travel")
    found = [*EVERYWHERE]
    found += WITH_ASSIST if facts.has("assist") else ()
    found += WITH_HOLD if held else ()
    found += WITH_BALLISTIC if held and facts.has("ballistic") else ()
    for controller in CONTROLLERS:
        verbs = [*COMMANDS, *(ALONE if controller == "A" else ())]
        found += [
            f"{controller}.{verb}"
            for verb in verbs
            if verb not in MOVES
            or (facts.has("travel") and (verb != "move-out-of-range" or has_outside(facts)))
        ]
    return tuple(found)


def has_outside(facts: Facts) -> bool:
    """Whether a magnitude outside the declared range can be written."""
    return moved(facts).magnitude_max < (1 << 31) - 1


def moved(facts: Facts) -> MotionFacts:
    """The motion that the moves ask for: one with a point of no return if there is any."""
    return facts.ballistic() if facts.has("ballistic") else facts.travel()


def contract_machine(contract: Contract, facts: Facts, inputs: Sequence[str] | None = None) -> Mealy:
    """The machine, minimal, with all inputs of :func:`inputs_of` or these of them.

    ValueError for an input that this module cannot be given.
    """
    known_inputs = inputs_of(facts)
    inputs = known_inputs if inputs is None else tuple(inputs)
    unknown = next((symbol for symbol in inputs if symbol not in known_inputs), None)
    if unknown is not None:
        raise ValueError(f"input {unknown!r}: one of {', '.join(known_inputs)}")
    rules = _Rules(contract, facts)
    start = Product()
    table: dict[tuple[str, str], tuple[str, str]] = {}
    waiting, known = [start], {start}
    while waiting:
        state = waiting.pop()
        for symbol in inputs:
            frames, after = rules.react(state, symbol)
            table[str(state), symbol] = (joined(frames), str(after))
            if after not in known:
                known.add(after)
                waiting.append(after)
    return Mealy(inputs, str(start), table).minimal()


class _Rules:
    """What the contract says a module of these facts answers, and what it is then."""

    def __init__(self, contract: Contract, facts: Facts) -> None:
        self._states = contract.states
        self._facts = facts
        self._holds = facts.has("assist")
        self._queue = facts.has("queue")
        self._apart: dict[str, Callable[[Product], Reaction]] = {
            "halt": self._halt,
            "lease-end": self._lease_end,
            "fault": self._fault,
            "fault-ends": self._fault_ends,
            "restart": self._restart,
            "restart-faulty": self._restart_faulty,
            "commit": self._commit,
            "complete": self._complete,
            "A.status": self._status,
        }

    def react(self, state: Product, symbol: str) -> Reaction:
        own = self._apart.get(symbol)
        if own is not None:
            return own(state)
        controller, _, verb = symbol.partition(".")
        return self._command(state, controller, verb)

    # ------------------------------------------------------------ the table

    def _apply(self, state: Product, name: str) -> tuple[str, Product]:
        answer, after = self._states.step(state.table, name, self._facts.settles_for)
        holder = state.holder if after.lease == "held" else ""
        return answer, state._replace(activity=after.activity, halt=after.halt, holder=holder)

    def _stopped(self, state: Product, cause: str) -> Reaction:
        """A cause that ends motions has come: one not past its point of no return comes to rest (HLT-07 and others)."""
        if state.activity != "moving" or state.committed:
            return (), state
        return self._at_rest(state, f"outcome {STOPPED[cause]} {cause}")

    def _at_rest(self, state: Product, outcome: str) -> Reaction:
        _, after = self._apply(state, "rest")
        return (outcome,), after._replace(committed=False, cancelled=False)

    # ------------------------------------------------------------ what happens

    def _halt(self, state: Product) -> Reaction:
        found = "at-rest"
        if state.activity == "moving":
            found = "past-no-return" if state.committed else "stopping"
        frames, after = self._stopped(self._apply(state, "halt")[1], "halt")
        return (f"halt-receipt {found}", *frames), after

    def _lease_end(self, state: Product) -> Reaction:
        if not state.holder:
            return (), state
        return self._stopped(self._apply(state, "lease-end")[1], "lease-end")

    def _fault(self, state: Product) -> Reaction:
        if state.fault:  # FLT-11: what stands raises none, and neither does a second address-conflict
            return ((NOT_SENT,) if self._holds and state.fault == GONE else ()), state
        after = self._apply(state, "fault")[1]._replace(fault=STANDS if self._holds else GONE)
        frames, after = self._stopped(after, "fault")
        return (self._fault_event(state.holder), *frames), after

    @staticmethod
    def _fault_event(holder: str) -> str:
        return f"fault to {holder or 'anyone'}"  # FLT-01, FLT-02

    def _fault_ends(self, state: Product) -> Reaction:
        return (), state._replace(fault=GONE if state.fault else "")  # FLT-10

    def _restart(self, _: Product) -> Reaction:
        return ("started",), Product()

    def _restart_faulty(self, _: Product) -> Reaction:
        return ("started", self._fault_event("")), Product(fault=GONE)  # STA-04

    def _commit(self, state: Product) -> Reaction:
        return (), state._replace(committed=state.activity == "moving")

    def _complete(self, state: Product) -> Reaction:
        if state.activity != "moving":
            return (), state
        return self._at_rest(state, f"outcome {self._landing(state)}")

    @staticmethod
    def _landing(state: Product) -> str:
        """HLT-08, LSE-09, MOT-10, HLT-17: what was told to a motion that could only land, the strongest of it."""
        told = {
            "halt": state.halt,
            "fault": state.fault,
            "lease-end": not state.holder,
            "cancel": state.cancelled,
        }
        cause = next((name for name, on in told.items() if on), "")
        return f"landed, interrupted {cause}" if cause else "done none"

    def _status(self, state: Product) -> Reaction:
        displayed = self._states.displayed(state.table)
        power = None
        if self._holds:
            power = state.activity in ("energized", "moving")
        return (
            status_words(state.activity, displayed, (state.halt, bool(state.fault)), state.holder, power),
        ), state

    # ------------------------------------------------------------ commands

    def _command(self, state: Product, controller: str, verb: str) -> Reaction:
        if verb in FIXED:
            return (FIXED[verb],), state
        refusal = self._fenced(state, controller, verb)
        if refusal:
            return (refusal,), state
        if verb == "move-out-of-range":
            return ("refused out-of-range",), state
        answer, after = self._apply(state, COMMANDS.get(verb, verb))
        if verb == "clear" and state.fault == STANDS:
            answer, after = self._apply(state, "clear-faults-standing")
        if answer == "not-holder":
            return ("refused not-holder of nobody",), state
        if answer != "accepted":
            return (f"refused {answer}",), state
        return self._accepted(state, after, controller, verb)

    @staticmethod
    def _fenced(state: Product, controller: str, verb: str) -> str:
        """LSE-02, LSE-03."""
        if verb == "take":
            return f"refused lease-held of {state.holder}" if state.holder else ""
        return "" if state.holder == controller else f"refused not-holder of {state.holder or 'nobody'}"

    def _accepted(self, state: Product, after: Product, controller: str, verb: str) -> Reaction:
        frames: tuple[str, ...] = ()
        match verb:
            case "take":
                after = after._replace(holder=controller)
                frames = (self._fault_event(controller),) if state.fault else ()  # FLT-07
            case "release":
                frames, after = self._stopped(after, "lease-end")  # LSE-11
            case "clear":
                after = after._replace(fault="")
            case "cancel":
                after = after._replace(cancelled=after.cancelled or after.committed)
                frames, after = self._stopped(after, "cancel")
            case "move":
                return self._moved(state, after)
        return ("accepted", *frames), after

    def _moved(self, state: Product, after: Product) -> Reaction:
        if state.activity == "moving":
            return ((NOT_SENT,) if self._queue else ("refused busy",)), state  # MOT-07
        if not self._holds:
            return ("accepted", "outcome done none"), after  # MOT-04
        _, begun = self._apply(after, "begin")
        return ("accepted",), begun


def status_words(
    activity: str, displayed: str, latches: tuple[bool, bool], holder: str, power: bool | None
) -> str:
    """What a status, and the truth where there is one (``power``), tells of the state."""
    names = [name for name, on in zip(("halt", "fault"), latches, strict=True) if on]
    words = f"status {activity}, {' and '.join(names) or 'clear'}, {holder or 'free'}, shown {displayed}"
    return words if power is None else f"{words}, power {'on' if power else 'off'}"


CLAUSES = {
    "halt-receipt": "HLT-05",
    "outcome halted": "HLT-07",
    "outcome failed fault": "FLT-12",
    "outcome cancelled lease-end": "LSE-09",
    "outcome cancelled cancel": "MOT-08",
    "outcome done": "MOT-04",
    "interrupted halt": "HLT-08",
    "interrupted lease-end": "LSE-09",
    "interrupted cancel": "MOT-10",
    "started": "STA-08",
    "fault to": "FLT-01",
    "lease-held": "LSE-02",
    "not-holder": "LSE-03",
    "out-of-range": "MOT-03",
    "stale": "SEQ-14",
    "newer-halt": "HLT-12",
    "busy": "MOT-07",
}


def clause_of(output: str) -> str:
    """The clause that predicts an output, the state table's where no other says more."""
    return next((clause for part, clause in CLAUSES.items() if part in output), "STA-01")
