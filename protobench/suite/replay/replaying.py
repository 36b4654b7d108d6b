"""Plays steps on a bench; the scripts that are written make the same calls."""

from __future__ import annotations

import contextlib
from typing import Any

from protobench.judge import CaseVerdict
from protobench.links import LinkError
from protobench.suite.bench import Bench
from protobench.suite.language import canonical
from protobench.suite.model import Model
from protobench.suite.port import Received, Sent
from protobench.suite.replay.observe import Place, Seen, observer
from protobench.suite.replay.recorder import Now, Passed, Recorder
from protobench.suite.replay.steps import Controller, Raw, Send, Sequence, Step, Told, Until, Wait
from protobench.suite.tester import MODULUS, Tester
from protobench.suite.watch import Violation

REAL_LATE_MS = 1000  # a peer's program may be kept from running for so long without being at fault
MS = 1_000_000
WINDOW_MAX_MS = 2000


class Replay:
    """A replay on a bench, from a module at rest. Use as a context manager.

    ``frames``: what passed since; ``now``: what the module told last; ``watched`` and ``modelled``: what the watch of
    every exchange and the model of the contract found wrong.
    """

    def __init__(self, bench: Bench) -> None:
        self.bench = bench
        self.port = bench.port
        late_ms = 0 if self.port.link.virtual else REAL_LATE_MS
        late_ns = late_ms * MS + self.port.line_ns
        codec = bench.language.codec
        self._model = Model(bench.contract, bench.facts, bench.address, late_ns=late_ns, codec=codec)
        self._recorder = Recorder(bench.language, Now(lambda: self.port.now_ns, self.port.pump), self._model)
        self._pieces = bench.language.stream_decoder()
        self._begun = 0
        self._noticed = 0

    def __enter__(self) -> Replay:
        self.begin()
        return self

    def __exit__(self, *what: object) -> None:
        self.port.beside = None

    def begin(self) -> None:
        """Bring the module to its start: restarted where it has assist, else at rest by the postamble."""
        bench = self.bench
        for step in (bench.end, lambda: bench.begin("replay"), self._restart):
            with contextlib.suppress(CaseVerdict):  # a module that is wrong here may still show its failure
                step()
        bench.begin("replay")
        self.port.beside = self._recorder
        self._recorder.testers = [bench.a]
        bench.a.learn()
        bench.a.status()
        with contextlib.suppress(CaseVerdict):
            bench.a.ask("time-exchange", t1=0)
            bench.a.ask("read-counters")
        self.port.inbox.clear()
        self._begun = len(self._recorder.frames)

    def _restart(self) -> None:
        if self.bench.facts.has("assist"):
            self.bench.a.restart()

    # ------------------------------------------------------------ what a script calls

    @property
    def now(self) -> Now:
        return self._recorder.now

    @property
    def frames(self) -> list[Passed]:
        """The sound frames since the start, both ways."""
        self.notice()
        return self._recorder.frames[self._begun :]

    @property
    def before(self) -> list[Passed]:
        """The sound frames of the start."""
        return self._recorder.frames[: self._begun]

    def tester(self, address: int, session: int | None = None) -> Tester:
        """A controller with a fresh session, or with this one."""
        tester = self.bench.tester(address)
        tester.epoch, tester.lease = int(self.now.epoch), int(self.now.lease)
        if session is not None:
            tester.session = session
        self._recorder.testers.append(tester)
        return tester

    def raw(self, data: bytes, *, lead: bool = True) -> None:
        """Send bytes as they are. A frame whose last piece this is counts as sent with it."""
        whole = set(self.bench.language.split(data))
        self.port.send_raw(data, lead=lead)
        if not self.port.has_stream:
            return
        for unit in self._pieces.feed((b"\0" if lead else b"") + data, self.port.now_ns):
            if isinstance(unit, bytes) and unit not in whole:
                self.port.note_sent(unit, self.bench.language.read(unit), self.port.now_ns)

    def answer(self, sent: Sent) -> Received | None:
        """Wait for the answer to a frame, as long as one may take that went to many."""
        window_ms = sent.fields.get("answer_window", 0)
        return self.bench.a.answer(sent, self.bench.a.patience_ms + min(window_ms, WINDOW_MAX_MS))

    def until(self, kind: str, within_ms: float) -> Received | None:
        """Wait for the next event of a kind after the last frame sent."""
        self.port.inbox.clear()
        for passed in reversed(self._recorder.frames):
            if passed.is_sent:
                break
            if passed.reading.kind == kind:
                return None  # it has come already
        return self.port.wait_for(lambda received: received.kind == kind, within_ms)

    def seen(self) -> dict[Place, Seen]:
        """What the module did since the start, without what may differ from one sound module to the next."""
        frames = self.frames
        return observer(self.bench).observe(self.before, frames, self.port.now_ns)[0]

    def violations(self) -> list[Violation]:
        """What the watch and then the model of the contract found, up to now."""
        return [*self.watched(), *self.modelled()]

    def watched(self) -> list[Violation]:
        return list(self.port.watch.violations)

    def modelled(self) -> list[Violation]:
        self.port.wait_ms(0)
        self._model.quiet(self.port.now_ns)
        return list(self._model.violations)

    def notice(self) -> None:
        """Tell the watch of restarts and presets that the steps asked for."""
        frames = self._recorder.frames
        for passed in frames[self._noticed :]:
            told = passed.reading.fields or {}
            if passed.reading.kind == "started":
                self.port.watch.restarted()
            elif passed.is_sent and passed.reading.kind == "assign-address":
                self.port.watch.own_addresses.add(told.get("address", self.bench.address))
            elif passed.is_sent and told.get("op") == "raise":
                self.bench.raised.add(told.get("code", 0))
            elif passed.is_sent and told.get("op") == "preset":
                self.port.watch.forget_reports()
        self._noticed = len(frames)


class Player:
    """Plays a sequence."""

    def __init__(self, replay: Replay, sequence: Sequence) -> None:
        self.replay = replay
        self.bench = replay.bench
        self.port = replay.port
        self.sequence = sequence
        self.testers: dict[str, Tester] = {}
        self._copies: dict[tuple[str, int], Sent] = {}

    def play(self) -> str:
        """Play the steps; what ended them early, in words, or nothing."""
        try:
            for controller in self.sequence.used:
                self.testers[controller.name] = self._tester(controller)
            for step in self.sequence.steps:
                self.step(step)
            self.port.wait_ms(0)
        except LinkError as error:
            return f"the link to the module ended: {type(error).__name__}"
        except CaseVerdict as verdict:
            return str(verdict)
        return ""

    def _tester(self, controller: Controller) -> Tester:
        session = controller.literal
        if controller.like:
            session = self.testers[controller.like].session ^ controller.xor
        return self.replay.tester(controller.address, session)

    def step(self, step: Step) -> None:
        """Do one step."""
        match step:
            case Wait():
                self.port.wait_ms(step.ms)
            case Until():
                self.replay.until(step.kind, step.ms)
            case Raw():
                self._raw(step)
            case Send():
                self._send(step)
        self.replay.notice()

    def _raw(self, step: Raw) -> None:
        if step.framed:
            self.port.send(step.data)
        else:
            self.replay.raw(step.data, lead=step.lead)

    def _send(self, step: Send) -> None:
        tester = self.testers[step.who]
        key = (step.who, step.number)
        if step.again and key in self._copies:
            sent = tester.send_frame(self._copies[key].frame_bytes)
        else:
            sent = tester.send_frame(self._frame(tester, step))
            self._copies[key] = sent
        if step.awaits:
            self.replay.answer(sent)

    def _frame(self, tester: Tester, step: Send) -> bytes:
        if step.body is not None:
            body = b"".join(
                part if isinstance(part, bytes) else canonical(self._value(part)) for part in step.body
            )
        else:
            assert isinstance(step.kind, str)
            fields = {name: self._value(value) for name, value in step.fields}
            body = self.bench.language.body(step.kind, fields)
        return tester.frame(
            step.kind,
            number=step.number,
            to=step.to,
            flags=step.flags,
            version=step.version,
            body=body,
            body_length=step.body_length,
        )

    def _value(self, value: Any) -> Any:
        if isinstance(value, Told):
            return told(self.replay.now, value, self.testers)
        if isinstance(value, tuple):
            return [self._value(item) for item in value]
        return value


def told(now: Now, value: Told, testers: dict[str, Tester]) -> int:
    """What a told value is now."""
    if value.name == "event":
        of = value.of
        if of and of[0] == "outcome":
            tester = testers.get(str(of[1]))
            found = 0 if tester is None else now.event("outcome", tester, of[2])
        else:
            found = now.event(*of)
    elif value.name == "occurrence":
        found = now.occurrence(int(value.of[1]))
    else:
        found = getattr(now, value.name)
    return (int(found) + value.plus) % MODULUS
