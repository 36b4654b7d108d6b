"""The raw lower tester: one controller address and session, that sends and times every frame itself.

It never sends a frame again by itself without saying so, confirms nothing unasked, and hides nothing.
"""

from __future__ import annotations

import random
from typing import TYPE_CHECKING, Any

from protobench.judge import Failed, Inconclusive
from protobench.suite.port import Port, Received, Sent

if TYPE_CHECKING:
    from protobench.suite.bench import Bench

PATIENCE_MS = 200  # beyond the declared limit, before a missing answer is taken for missing
QUIET_MS = 30
MODULUS = 1 << 32


class Tester:
    """One (address, session) as the module sees it.

    Fields ``epoch`` and ``lease`` of requests are filled in with what this tester believes, unless given;
    ``None`` for a field leaves it out; ``target`` is the field ``number`` of cancel. Enumerations are given and
    received by name.
    """

    __test__ = False  # pytest shall not take the class for tests

    def __init__(self, bench: Bench, address: int, rng: random.Random) -> None:
        self.bench = bench
        self.port: Port = bench.port
        self.address = address
        self.session = rng.randrange(1, MODULUS)
        self.epoch = 0
        self.lease = 0
        self.duration_ms = 0
        self._number = rng.randrange(MODULUS)

    # ------------------------------------------------------------ sending

    def next_number(self) -> int:
        """The next unused number; it wraps."""
        self._number = (self._number + 1) % MODULUS
        return self._number

    def use_number(self, number: int) -> None:
        """Go on numbering after ``number``."""
        self._number = number % MODULUS

    def frame(
        self,
        kind: str | int,
        *,
        number: int | None = None,
        to: int | None = None,
        source: int | None = None,
        session: int | None = None,
        flags: int = 0,
        version: int | None = None,
        body: bytes | None = None,
        body_length: int | None = None,
        **fields: Any,
    ) -> bytes:
        """Bare bytes of a frame, not sent. ``body`` replaces the fields by bytes of any form."""
        language = self.bench.language
        code = kind if isinstance(kind, int) else language.code(kind)
        if body is None:
            body = b"\x80" if isinstance(kind, int) else language.body(kind, self._filled(kind, to, fields))
        return language.pack(
            code,
            body,
            source=self.address if source is None else source,
            destination=self.bench.address if to is None else to,
            session=self.session if session is None else session,
            number=self.next_number() if number is None else number,
            flags=flags,
            version=version,
            body_length=body_length,
        )

    def _filled(self, kind: str, to: int | None, fields: dict[str, Any]) -> dict[str, Any]:
        filled = dict(fields)
        if "target" in filled:  # the field that cancel calls number, as every header does
            filled["number"] = filled.pop("target")
        needed = self.bench.fence_fields(kind, many=to is not None and self.bench.is_many(to))
        for name in needed:
            filled.setdefault(name, getattr(self, name))
        return {name: value for name, value in filled.items() if value is not None}

    def send(self, kind: str | int, **options: Any) -> Sent:
        """Send one frame; parameters as for :meth:`frame`."""
        return self.send_frame(self.frame(kind, **options))

    def send_frame(self, data: bytes) -> Sent:
        """Send bare bytes as a frame: a copy of an earlier one, or one made by :meth:`frame`."""
        time_ns = self.port.send(data)
        return self.sent(data, time_ns)

    def sent(self, data: bytes, time_ns: int) -> Sent:
        """What was sent otherwise, as something to await an answer to."""
        reading = self.bench.language.read(data)
        if reading.frame is None:
            raise ValueError(f"not a sound frame: {reading.problem}")
        return Sent(time_ns, data, reading.frame, reading.kind, reading.fields or {})

    # ------------------------------------------------------------ answers

    def answer(self, sent: Sent, within_ms: float | None = None) -> Received | None:
        """The answer to ``sent``, or None when none came in the time."""
        low, high = self.bench.contract.kind_range("answer")

        def fits(received: Received) -> bool:
            frame = received.frame
            return (
                low <= frame.kind <= high
                and frame.number == sent.frame.number
                and frame.session == sent.frame.session
                and frame.destination == sent.frame.source
            )

        return self.port.wait_for(fits, self.patience_ms if within_ms is None else within_ms)

    @property
    def patience_ms(self) -> float:
        """How long an answer is waited for before it counts as missing."""
        return self.bench.facts.receipt_ms + PATIENCE_MS + self.port.u_ms

    def answered(self, sent: Sent, clause: str = "ACK-01") -> Received:
        """The answer to ``sent``; when it is missing the identical bytes are sent once more to tell a lost frame.

        Raises Failed when nothing answers at all, Inconclusive when only the copy was answered on a link that can lose
        a frame, Failed on one that cannot.
        """
        received = self.answer(sent)
        if received is not None:
            return received
        again = self.send_frame(sent.frame_bytes)
        if self.answer(again) is None:
            raise Failed(f"no answer to {sent.kind} #{sent.number}, sent twice", clause=clause)
        words = f"{sent.kind} #{sent.number} was answered only when sent again"
        if self.port.is_lossless:
            raise Failed(f"{words}, on a link that loses nothing", clause=clause)
        raise Inconclusive(f"{words}: a frame may have been lost")

    def ask(self, kind: str | int, **options: Any) -> Received:
        """Send a request and return its answer."""
        return self.answered(self.send(kind, **options))

    def accepted(self, kind: str, *, clause: str = "ACK-01", **options: Any) -> Sent:
        """Send a command that must be accepted; returns what was sent. ``clause`` is broken when it is not."""
        sent = self.send(kind, **options)
        self.expect_accepted(sent, clause)
        return sent

    def expect_accepted(self, sent: Sent, clause: str) -> Received:
        """The accepted receipt of a command that was sent."""
        receipt = self.answered(sent, clause)
        if receipt.kind != "receipt" or receipt["result"] != "accepted":
            raise Failed(f"{sent.kind} must be accepted; it was {answer_words(receipt)}", clause=clause)
        return receipt

    def refused(
        self, reason: str, kind: str | int, *, clause: str, key: int | None = None, **options: Any
    ) -> Received:
        """Send a request that must be refused with exactly this reason and key."""
        return self.expect_refused(self.send(kind, **options), reason, clause, key)

    def expect_refused(self, sent: Sent, reason: str, clause: str, key: int | None = None) -> Received:
        """The refusal of a request that was sent."""
        receipt = self.answered(sent, clause)
        wanted = f"refused {reason}" + ("" if key is None else f" with key {key}")
        if receipt.kind != "receipt" or receipt.get("reason") != reason or receipt.get("key") != key:
            raise Failed(f"{sent.kind} must be {wanted}; it was {answer_words(receipt)}", clause=clause)
        return receipt

    def read(self, kind: str, **options: Any) -> Received:
        """Ask a read that must be answered by its own kind."""
        received = self.ask(kind, **options)
        if received.kind == "receipt":
            raise Failed(f"{kind} must be answered; it was {answer_words(received)}", clause="STA-12")
        return received

    def status(self) -> Received:
        return self.read("status")

    def silent(self, what: str, clause: str, *, quiet_ms: float = QUIET_MS) -> None:
        """Judge absence: a sentinel read is answered, and no other answer comes before it or in a quiet time after."""
        sentinel = self.send("describe")
        self.answered(sentinel)
        self.port.wait_ms(quiet_ms + self.port.u_ms)
        low, high = self.bench.contract.kind_range("answer")
        stray = [received for received in self.port.inbox if low <= received.frame.kind <= high]
        if stray:
            raise Failed(f"{what} must not be answered; {stray[0].kind} came", clause=clause)

    # ------------------------------------------------------------ events

    def outcome(self, move: Sent, within_ms: float | None = None) -> Received:
        """The outcome of an accepted move, not confirmed."""
        received = self.outcome_or_none(move, within_ms)
        if received is None:
            raise Failed(f"no outcome of move #{move.number}", clause="ACK-07")
        return received

    def outcome_or_none(self, move: Sent, within_ms: float | None = None) -> Received | None:
        """The next sending of an outcome of ``move``, or None when none came in the time."""
        if within_ms is None:
            within_ms = self.bench.longest_ms + self.bench.facts.stop_ms + PATIENCE_MS + self.port.u_ms
        return self.port.wait_for(lambda received: is_outcome_of(received, move), within_ms)

    def confirm(self, received: Received, **options: Any) -> Sent:
        """Confirm an outcome or a fault event."""
        options = {"epoch": received["epoch"], "event": received["event"], **options}
        return self.send("confirm", **options)

    def ended(
        self, move: Sent, outcome: str, cause: str, clause: str, within_ms: float | None = None
    ) -> Received:
        """The outcome of ``move``, which must say this; it is confirmed."""
        received = self.outcome(move, within_ms)
        self.confirm(received)
        if (received["outcome"], received["cause"]) != (outcome, cause):
            raise Failed(
                f"move #{move.number} must end {outcome}, cause {cause}; "
                f"it ended {received['outcome']}, cause {received['cause']}",
                clause=clause,
            )
        return received

    def next_fault(self, code: int | None = None, within_ms: float = PATIENCE_MS) -> Received | None:
        """The next fault event, of one code or of any, to whomever it is addressed."""
        return self.port.wait_for(
            lambda received: received.kind == "fault" and code in (None, received["code"]),
            within_ms + self.port.u_ms,
        )

    # ------------------------------------------------------------ preambles

    def learn(self) -> Received:
        """Read epoch and lease number as the module has them."""
        description = self.read("describe")
        self.epoch = description["epoch"]
        self.lease = description["lease"]
        return description

    def take_lease(self, duration_ms: int = 10_000) -> Received:
        """Become the holder."""
        self.learn()
        sent = self.send("take-lease", duration=duration_ms)
        receipt = self.expect_accepted(sent, "LSE-01")
        self.lease = receipt.get("lease", self.lease)
        self.duration_ms = duration_ms
        return receipt

    def reset(self) -> Sent:
        """Clear the halt latch."""
        return self.accepted("reset", halt_count=self.status()["halt_count"], clause="HLT-11")

    def make_ready(self, duration_ms: int = 10_000) -> None:
        """Preamble: hold the lease, halt latch cleared, energized."""
        self.take_lease(duration_ms)
        self.reset()
        self.accepted("energize", clause="STA-09")

    def move(self, motion: str | None = None, **options: Any) -> Sent:
        """An accepted move; without a name the quickest motion, with half its greatest magnitude unless given."""
        return self.accepted("move", clause="MOT-01", **self.move_fields(motion, **options))

    def wait_begun(self) -> None:
        """Let the time pass within which an accepted motion that need not wait has to begin."""
        self.port.wait_ms(self.bench.facts.receipt_ms + self.port.u_ms)

    def move_fields(self, motion: str | None = None, **options: Any) -> dict[str, Any]:
        """Fields of a sound move request."""
        name = motion or self.bench.facts.travel().name
        if name not in ("bond", "unbond"):
            options.setdefault("magnitude", self.bench.facts.motions[name].magnitude)
        return {"motion": name, **options}

    # ------------------------------------------------------------ assist

    def assist(self, op: str, **fields: Any) -> Sent:
        """An accepted assist operation."""
        if op == "raise":
            self.bench.raised.add(fields["code"])
        if op == "preset" and fields.get("item") == "change":
            self.port.watch.forget_reports()
        return self.accepted("assist", op=op, clause="AST-01", **fields)

    def restart(self, cause: str = "commanded") -> Received:
        """Restart the module and wait until it has started; returns the description of the new start.

        Without assist it is restarted from outside, and then why it started is its own affair.
        """
        outside = self.bench.outside_restart
        if self.bench.facts.has("assist") or outside is None:
            self.assist("restart", cause=cause)
            return self.restarted()
        self.port.log.note(self.port.now_ns, "restart from outside")
        outside()
        return self.restarted(outside.takes_ms)

    def restarted(self, more_ms: float = 0) -> Received:
        """Wait until the module has started again; every tester of the case learns the new epoch."""
        self.port.watch.restarted()
        limit_ms = self.bench.facts.starting_ms + more_ms + PATIENCE_MS + self.port.u_ms
        before = self.epoch
        started = self.port.wait_for(
            lambda received: received.kind == "started" and received["epoch"] != before, limit_ms
        )
        if started is None:
            raise Failed(f"no started event within {limit_ms:.0f} ms of a restart", clause="STA-08")
        description = self.read("describe")
        self.bench.learned(description["epoch"], description["lease"])
        return description

    def truth(self, page: int = 0) -> Received:
        """The truth page; page 0 has the newest entries."""
        return self.read("read-truth", page=page)

    def hold(self, phase: str) -> None:
        """Keep the next motion in a phase until released."""
        self.assist("hold", phase=phase)

    def release_hold(self) -> None:
        self.assist("release")


def is_outcome_of(received: Received, move: Sent) -> bool:
    """Whether an event is an outcome of this move."""
    frame = received.frame
    return (
        received.kind == "outcome"
        and frame.destination == move.frame.source
        and frame.session == move.frame.session
        and frame.number == move.frame.number
    )


def answer_words(received: Received) -> str:
    """An answer in a few words, for a failure's reason."""
    if received.kind != "receipt":
        return f"answered by {received.kind}"
    if received["result"] == "accepted":
        return "accepted"
    key = received.get("key")
    return f"refused {received.get('reason')}" + ("" if key is None else f" with key {key}")
