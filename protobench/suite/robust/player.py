"""Plays one sequence on the bench, with the model beside it."""

from __future__ import annotations

import random
from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field

from protobench.judge import Failed
from protobench.links import Framing
from protobench.suite.bench import CONTROLLER_A, CONTROLLER_B, Bench
from protobench.suite.model import Model
from protobench.suite.model.drops import NOT_FOLLOWED, UNSURE, drop_reason
from protobench.suite.port import Received
from protobench.suite.robust.frames import NEVER_DAMAGED, Beliefs, Frames
from protobench.suite.robust.steps import WAITS_MS, Step
from protobench.suite.tester import MODULUS, PATIENCE_MS, Tester
from protobench.wire import Dropped, Frame

REAL_LATE_MS = 1000  # a peer's program may be kept from running for so long without being at fault
FRAMES_KEPT = 40
MS = 1_000_000


@dataclass(slots=True)
class Tally:
    """What sequences did: frames by act, answers by kind or reason, drops by reason, in bounded memory."""

    sequences: int = 0
    sent: Counter[str] = field(default_factory=Counter)
    answers: Counter[str] = field(default_factory=Counter)
    reasons: Counter[str] = field(default_factory=Counter)
    drops: Counter[str] = field(default_factory=Counter)
    commands: Counter[str] = field(default_factory=Counter)
    events: Counter[str] = field(default_factory=Counter)
    slowest_ms: float = 0.0
    steps: int = 0
    judged: int = 0


class Player:
    """Plays sequences; ``tally`` counts what passed."""

    def __init__(self, bench: Bench, tally: Tally) -> None:
        self.bench = bench
        self.port = bench.port
        self.tally = tally
        late_ms = 0 if self.port.link.virtual else REAL_LATE_MS
        late_ns = late_ms * MS + self.port.line_ns
        self.model = Model(
            bench.contract, bench.facts, bench.address, late_ns=late_ns, codec=bench.language.codec
        )
        self.late_ms = late_ns / MS
        self.beliefs = Beliefs()
        self.frames = Frames(bench, self.beliefs)
        self.outcomes: list[Received] = []
        self.testers: list[Tester] = []
        self._sent_ns: int | None = None
        self._many_until_ns = 0
        self.drops: Counter[str] = Counter()

    def play(self, steps: Sequence[Step]) -> None:
        """Play a sequence on a module at rest without a lease. Raises Failed with the clause that broke."""
        self.port.wait_ms(0)
        self.port.inbox.clear()
        self.port.beside = self.model
        try:
            self._play(steps)
        finally:
            self.port.beside = None
            self.tally.sequences += 1

    def _play(self, steps: Sequence[Step]) -> None:
        self.testers = [self.bench.tester(address) for address in (CONTROLLER_A, CONTROLLER_B, CONTROLLER_A)]
        self._begin()
        for place, step in enumerate(steps):
            self.port.wait_ms(0)
            self._take()
            self._sent_ns = None
            _ACTS[step.act](self, step, self._tester(step), random.Random(step.draw))
            self._await()
            self._judge(place + 1, step)
            self._renumber()
        self._alive()

    def _tester(self, step: Step) -> Tester:
        """The controller of a step; the first stands for whoever holds the lease, so that much is accepted."""
        holder = self.beliefs.holder
        return self.testers[step.who] if step.who or holder is None else holder

    def _renumber(self) -> None:
        """Go on after the highest number that the module has taken, whatever a changed frame made of it."""
        for tester in self.testers:
            highest = self.model.history.highest(tester.address, tester.session)
            if highest is not None and 0 < (highest - tester.next_number()) % MODULUS < MODULUS // 2:
                tester.use_number(highest)

    def _begin(self) -> None:
        """The model needs a report to begin from."""
        status = self.testers[0].status()
        self.beliefs.halt_count = status["halt_count"]
        if self.bench.facts.has("groups"):
            self.testers[0].ask("read-groups")
        time = self.testers[0].ask("time-exchange", t1=0)
        self.beliefs.clock, self.beliefs.clock_ns = time.get("t3", 0), time.time_ns
        self._take()

    def _alive(self) -> None:
        """After anything at all, a sound request gets a sound answer."""
        last_ns = self._many_until_ns + round(self._patience_ms() * MS)
        if last_ns > self.port.now_ns:
            self.port.wait_until(last_ns)  # answers to many are none of the next sequence's
        sent = self.testers[0].send("describe")
        answer = self.testers[0].answer(sent, self._patience_ms())
        if answer is None or answer.kind != "description":
            raise Failed("after the sequence a sound request is not answered", clause="LOD-01")
        self.model.quiet(self.port.now_ns)
        self._judge(0, None)

    def _patience_ms(self) -> float:
        return self.bench.facts.receipt_ms + PATIENCE_MS + self.late_ms + self.port.u_ms

    # ------------------------------------------------------------ judging

    def _judge(self, place: int, step: Step | None) -> None:
        if self.model.violations:
            first = self.model.violations[0]
            where = f"at step {place}, {step.words}: " if step is not None else "at the end: "
            raise Failed(where + first.reason, clause=first.clause)

    def _await(self) -> None:
        """Let the answers come that are owed."""
        late_ms = self.port.u_ms if self.model.lost else self.late_ms
        deadline_ns = self.port.now_ns + round((self.bench.facts.receipt_ms + 1 + late_ms) * MS)
        while (self.model.pending or self.model.lost) and self.port.now_ns < deadline_ns:
            self.port.pump(deadline_ns)
        self._take()
        self._many_until_ns = max([self._many_until_ns, *(until for _, until in self.model.many.values())])
        if not self.model.violations:
            self.model.quiet(self.port.now_ns)
        self.tally.steps += 1
        self.tally.judged += not self.model.lost

    def _take(self) -> None:
        """Learn from what came, as a controller would."""
        low, high = self.bench.contract.kind_range("answer")
        for received in self.port.inbox:
            if low <= received.frame.kind <= high:
                self._learn(received)
                if self._sent_ns is not None:
                    slow_ms = (received.time_ns - self._sent_ns) / MS
                    self.tally.slowest_ms = max(self.tally.slowest_ms, slow_ms)
            else:
                self.tally.events[received.kind] += 1
                if received.kind in ("outcome", "fault"):
                    self.outcomes = [*self.outcomes, received][-8:]
        self.port.inbox.clear()

    def _learn(self, received: Received) -> None:
        self.tally.answers[received.kind] += 1
        if received.kind == "receipt":
            self.tally.reasons[received.get("reason") or "accepted"] += 1
        lease, count = received.get("lease"), received.get("halt_count")
        holder = received.get("holder_session")
        if received.kind == "receipt" and received["result"] == "accepted" and lease is not None:
            holder = received.frame.session
        if holder is not None:
            self.beliefs.holder = next((one for one in self.testers if one.session == holder), None)
        if lease is not None:
            for tester in self.testers:
                tester.lease = lease
        if count is not None:
            self.beliefs.halt_count = count

    # ------------------------------------------------------------ acts

    def _send(self, step: Step, *frames: bytes) -> None:
        self.tally.sent[step.act] += len(frames)
        whole = [frame for frame in frames if isinstance(self.bench.language.unpack(frame), Frame)]
        self.beliefs.frames = [*self.beliefs.frames, *whole][-FRAMES_KEPT:]
        self.drops.update(drop_reason(self.model, frame) for frame in frames)
        self._sent_ns = self.port.send(*frames)

    def _sound(self, step: Step, tester: Tester, rng: random.Random) -> None:
        self._send(step, self._request(tester, step.kind, rng))

    def _request(self, tester: Tester, kind: str, rng: random.Random) -> bytes:
        frame = self.frames.sound(tester, kind, rng)
        self.tally.commands[kind] += 1
        if kind == "move":
            self.beliefs.moves = [*self.beliefs.moves, int.from_bytes(frame[16:20], "big")][-8:]
        return frame

    def _ready(self, step: Step, tester: Tester, rng: random.Random) -> None:
        """Lease, reset, energize: what a controller does before it moves the module."""
        first = "renew-lease" if tester is self.beliefs.holder else "take-lease"
        for kind in ("status", first, "reset", "energize"):
            self._sound(step._replace(kind=kind), tester, rng)
            self._await()

    def _confirm(self, step: Step, tester: Tester, rng: random.Random) -> None:  # noqa: ARG002
        for received in self.outcomes:
            asker = next((one for one in self.testers if one.session == received.frame.session), tester)
            self._send(step, asker.frame("confirm", epoch=received["epoch"], event=received["event"]))
        self.outcomes = []

    def _wait(self, step: Step, tester: Tester, rng: random.Random) -> None:  # noqa: ARG002
        self.port.wait_ms(rng.choice(WAITS_MS if self.port.link.virtual else WAITS_MS[:-2]))

    def _copy(self, step: Step, tester: Tester, rng: random.Random) -> None:  # noqa: ARG002
        if self.beliefs.frames:
            self._send(step, rng.choice(self.beliefs.frames[-8:]))

    def _twist(self, step: Step, tester: Tester, rng: random.Random) -> None:
        if step.how == "conflict":
            self._send(step, self._conflicting(rng) or tester.frame("status"))
        elif step.how in ("kind", "class"):
            self._send(step, tester.frame(self._other_kind(step.how, rng)))
        else:
            frame = self.frames.twisted(tester, step.kind, step.how, rng)
            if frame is not None and self._may_go(frame, step):
                self._send(step, frame)

    def _conflicting(self, rng: random.Random) -> bytes | None:
        """Another request under the number of a command that was sent."""
        low, high = self.bench.contract.kind_range("command")
        halt, cancel = self.bench.language.code("halt"), self.bench.language.code("cancel")
        used = [frame for frame in self.beliefs.frames if low <= frame[1] <= high and frame[1] != halt]
        unpacked = self.bench.language.unpack(rng.choice(used[-6:] or [b""]))
        if isinstance(unpacked, Dropped):
            return None
        where = {name: getattr(unpacked, name) for name in ("source", "destination", "session", "number")}
        return self.bench.language.pack(cancel, b"\x81\x02\x00", **where)

    def _rush(self, step: Step, tester: Tester, rng: random.Random) -> None:
        """One motion after the other, none confirmed, until there is no place left."""
        for _ in range(rng.randint(3, 12) if self.bench.facts.motions else 0):
            self._send(step, self._request(tester, "move", rng))
            self._await()

    def _other_kind(self, how: str, rng: random.Random) -> int:
        """A number of no kind among the requests, or one of what is no request."""
        ranges = self.bench.contract.kind_range
        taken = {kind.code for kind in self.bench.contract.kinds}
        names = ("read", "command") if how == "kind" else ("answer", "notice", "event", "reserved")
        low, high = ranges(rng.choice(names))
        free = [code for code in range(low, high + 1) if code not in taken or how == "class"]
        return rng.choice([code for code in free if code != self.bench.language.code("confirm")])

    def _may_go(self, frame: bytes, step: Step) -> bool:
        """Whether a frame that was changed is none that moves the module, nor of a kind that could do anything."""
        unpacked = self.bench.language.unpack(frame)
        code = getattr(unpacked, "kind", None)
        if code is None:
            return True
        private = (self.bench.contract.kind_range(name) for name in ("private", "command_private"))
        if any(low <= code <= high for low, high in private):
            return False
        never = {self.bench.language.code(kind) for kind in NEVER_DAMAGED}
        return step.act == "twist" or code not in never

    def _burst(self, step: Step, tester: Tester, rng: random.Random) -> None:
        kinds = (step.kind, rng.choice(("status", "halt", "cancel", "renew-lease", "describe")), "describe")
        self._send(step, *(self._request(tester, kind, rng) for kind in kinds))

    def _damage(self, step: Step, tester: Tester, rng: random.Random) -> None:
        frame = self.frames.damaged(self.frames.sound(tester, step.kind, rng), step.how, rng)
        if frame is not None and self._may_go(frame, step):
            self._send(step, frame)

    def _stream(self, step: Step, tester: Tester, rng: random.Random) -> None:
        if not self.port.has_stream:
            return
        self.tally.sent[step.act] += 1
        stuffed = self.bench.language.stuff(tester.frame("status"))
        half = stuffed[: rng.randrange(1, len(stuffed))]
        whole = {
            "garbage": bytes(rng.randrange(256) for _ in range(rng.randint(1, 600))) + b"\0",
            "zeros": bytes(rng.randint(1, 400)),
            "glued": stuffed + stuffed + b"\0",
            "half": half + b"\0",
            "too-long": bytes(rng.randrange(1, 256) for _ in range(rng.randint(255, 2000))) + b"\0",
            "early-zero": half + b"\0" + stuffed[len(half) :] + b"\0",
        }
        if step.how in whole:
            self._count_raw(whole[step.how])
            self.port.send_raw(whole[step.how])
        elif self.bench.facts.has("gaps"):
            self._gap(step.how, stuffed, half)

    def _count_raw(self, data: bytes) -> None:
        """What of raw bytes must be counted as dropped."""
        if self.port.link.framing is not Framing.STREAM:
            self.drops[UNSURE] += 1  # a segment is cut by its own rules
            return
        decoder = self.bench.language.stream_decoder()
        for unit in decoder.feed(data, 0):
            self.drops[unit.reason if isinstance(unit, Dropped) else drop_reason(self.model, unit)] += 1

    def check_drops(self, counted: Mapping[str, int]) -> None:
        """The module's counters must have risen by what was sent. Raises Failed."""
        if self.drops[UNSURE]:
            return
        for name, count in counted.items():
            if name not in NOT_FOLLOWED and count != self.drops[name]:
                raise Failed(
                    f"{self.drops[name]} frames to be dropped as {name}; counted were {count}",
                    clause="FRM-12",
                )

    def _gap(self, how: str, stuffed: bytes, half: bytes) -> None:
        """A frame in two pieces, or after half a frame that is too old; or byte by byte."""
        frame = self.bench.language.split(stuffed + b"\0")[0]
        if how == "gap-long":
            self.drops["half-frame"] += 1
            self.port.send_raw(half)
            self.port.wait_ms(1100 + self.port.u_ms)
            self.port.send(frame)
            return
        pieces = [stuffed[:1], stuffed[1:]] if how == "gap-short" else [bytes([byte]) for byte in stuffed]
        self.port.send_raw(pieces[0])
        for piece in pieces[1:]:
            self.port.send_raw(piece, lead=False)
        self.port.note_sent(frame, self.bench.language.read(frame), self.port.now_ns)
        self.port.send_raw(b"\0", lead=False)


_ACTS: dict[str, Callable[[Player, Step, Tester, random.Random], None]] = {
    "sound": Player._sound,
    "ready": Player._ready,
    "confirm": Player._confirm,
    "wait": Player._wait,
    "copy": Player._copy,
    "twist": Player._twist,
    "burst": Player._burst,
    "rush": Player._rush,
    "damage": Player._damage,
    "stream": Player._stream,
}
