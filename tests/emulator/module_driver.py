"""Drives one emulated module in virtual time, frame by frame, without a link or a tester between."""

from __future__ import annotations

import random
from typing import Any, NamedTuple

from emulator.config import ModuleConfig
from emulator.engine import ModuleEngine
from emulator.storage import Storage
from protobench.contract import load_contract
from protobench.wire import Frame, load_codec

CONTRACT = load_contract()
CODEC = load_codec(CONTRACT)
BROADCAST = CONTRACT.addresses.broadcast
ANY_CONTROLLER = CONTRACT.addresses.any_controller
MODULUS = 1 << 32
STEPS_MAX = 100_000
Sender = tuple[int, int]  # source, session
OWNER: Sender = (0x10001, 7)
OTHER: Sender = (0x10002, 9)


class Seen(NamedTuple):
    """One frame of the module, with the time at which it left."""

    time_us: int
    kind: str
    frame: Frame
    data: bytes
    message: Any
    is_repeat: bool = False  # an outcome's, the same bytes as before


def number_of(enumeration: str, name: str) -> int:
    return CONTRACT.enum_values(enumeration)[name]


def reason_number(name: str) -> int:
    return next(row.number for row in CONTRACT.refusals if row.name == name)


def read_frame(time_us: int, data: bytes) -> Seen:
    """A frame of the module, which must be sound and of a kind that modules send."""
    frame = CODEC.frames.unpack(data)
    assert isinstance(frame, Frame), f"the module sent an unsound frame: {frame}"
    assert CODEC.frames.check_length(frame) is None
    assert (frame.version, frame.flags) == (CONTRACT.major, 0)
    kind = CODEC.kinds_by_code[frame.kind]
    examined = kind.examine(frame.body, False)
    assert not examined.problems, f"{kind.name}: {examined.problems}"
    return Seen(time_us, kind.name, frame, data, examined.message)


class Driver:
    """One module, after its start unless told otherwise. Times in ms count from now."""

    def __init__(
        self,
        config: ModuleConfig | None = None,
        storage: Storage | None = None,
        *,
        seed: int = 1,
        started: bool = True,
        engine_class: type[ModuleEngine] = ModuleEngine,
    ) -> None:
        self.engine = engine_class(
            config or ModuleConfig(), storage or Storage(), random.Random(seed), CONTRACT
        )
        self.now_us = 0
        self.number = 0
        self._outcomes: set[bytes] = set()
        self._aside: list[Seen] = []
        self.start_frames = self.advance(1000) if started else []

    def advance(self, ms: float) -> list[Seen]:
        """Let time pass, stopping at each deadline. Also returns what came besides an answer asked for before."""
        end_us = self.now_us + round(1000 * ms)
        seen, self._aside = self._aside, []
        for _ in range(STEPS_MAX):
            due_us = self.engine.next_deadline_us()
            if due_us is None or due_us > end_us:
                break
            self.now_us = max(self.now_us, due_us)
            self.engine.advance(self.now_us)
            seen += self._taken()
        else:
            raise AssertionError(f"deadlines do not move on at {self.now_us} us")
        self.now_us = end_us
        self.engine.advance(end_us)
        return seen + self._taken()

    def _taken(self) -> list[Seen]:
        seen = []
        for data, _ in self.engine.take_frames():
            seen.append(read_frame(self.now_us, data)._replace(is_repeat=data in self._outcomes))
            if seen[-1].kind == "outcome":
                self._outcomes.add(data)
        return seen

    def make(self, kind: str, *, sender: Sender = OWNER, to: int | None = None, **fields: Any) -> bytes:
        """A request with the next number; epoch and lease are right unless given."""
        self.number = (self.number + 1) % MODULUS
        names = [field.name for field in CONTRACT.kind(kind).fields]
        fence = {"epoch": self.engine.epoch, "lease": self.engine.lease.number}
        fields = {**{name: value for name, value in fence.items() if name in names}, **fields}
        destination = self.engine.address if to is None else to
        return CODEC.new(kind, **fields).to_frame(sender[0], destination, sender[1], self.number)

    def feed(self, data: bytes, wait_ms: float = 0) -> list[Seen]:
        """Give it a frame now, then let time pass."""
        self.engine.feed_frame(self.now_us, data)
        self._aside += self._taken()
        return self.advance(wait_ms)

    def send(self, kind: str, *, wait_ms: float = 60, **fields: Any) -> list[Seen]:
        """Make a request, give it to the module, and return all that it says in ``wait_ms``."""
        return self.feed(self.make(kind, **fields), wait_ms)

    def ask(self, kind: str, **fields: Any) -> Any:
        """The message that answers a request; time passes until it has come, and no longer."""
        seen = self.send(kind, wait_ms=0, **fields)
        while not (answers := [one for one in seen if is_answer(one, self.number)]):
            due_us = self.engine.next_deadline_us()
            assert due_us is not None, f"{kind} is not answered"
            seen += self.advance(max(0, due_us - self.now_us) / 1000)
        assert len(answers) == 1
        self._aside = [one for one in seen if one is not answers[0]]
        return answers[0].message

    def accept(self, kind: str, **fields: Any) -> int:
        """A request that must be accepted; returns its number."""
        receipt = self.ask(kind, **fields)
        assert receipt.result == 0, f"{kind} is refused: {reason_of(receipt)}"
        return self.number

    def refusal(self, kind: str, **fields: Any) -> tuple[str, int | None]:
        """Reason and key of a request that must be refused."""
        receipt = self.ask(kind, **fields)
        assert receipt.result == 1, f"{kind} is accepted"
        return reason_of(receipt), receipt.key

    def ready(self, duration: int = 30_000) -> Driver:
        """Take the lease, reset, energize."""
        self.accept("take-lease", duration=duration)
        self.accept("reset", halt_count=self.engine.halt_count)
        self.accept("energize")
        return self

    def move(self, motion: str = "hinge", magnitude: int = 1000, **fields: Any) -> int:
        """A move that must be accepted; returns its number. Its receipt has left."""
        return self.accept("move", motion=number_of("motion", motion), magnitude=magnitude, **fields)

    def assist(self, operation: str, **fields: Any) -> int:
        return self.accept("assist", op=number_of("assist_op", operation), **fields)

    def raise_fault(self, name: str, **fields: Any) -> int:
        return self.assist("raise", code=CONTRACT.fault(name).code, **fields)

    def withdraw(self, name: str) -> int:
        return self.assist("withdraw", code=CONTRACT.fault(name).code)

    def status(self) -> Any:
        return self.ask("status")

    @property
    def state(self) -> str:
        return CONTRACT.states.displayed(self.engine.state)


def is_answer(seen: Seen, number: int) -> bool:
    low, high = CONTRACT.kind_range("answer")
    return low <= seen.frame.kind <= high and seen.frame.number == number


def reason_of(receipt: Any) -> str:
    return next(row.name for row in CONTRACT.refusals if row.number == receipt.reason)


def of_kind(seen: list[Seen], kind: str) -> list[Seen]:
    return [one for one in seen if one.kind == kind]


def endings(seen: list[Seen]) -> list[tuple[int, str, str]]:
    """Number, outcome and cause of each outcome that is sent for the first time, in order."""
    outcomes, causes = CONTRACT.enum_names("outcome"), CONTRACT.enum_names("cause")
    return [
        (one.frame.number, outcomes[one.message.outcome], causes[one.message.cause])
        for one in of_kind(seen, "outcome")
        if not one.is_repeat
    ]
