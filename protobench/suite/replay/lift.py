"""Makes steps of a recorded exchange: numbers and times as they were, the module's own values as it tells them.

Sessions, epoch, lease number, halt count, clock, events and occurrences become what they were relative to: a lease
number one too high stays one too high. What cannot be made again byte for byte in this way stays raw.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import replace
from typing import Any

from protobench.judge import Exchange
from protobench.suite.language import Language, Reading, canonical
from protobench.suite.replay.recorder import Now, Passed
from protobench.suite.replay.steps import (
    MODULUS,
    TOLD,
    Controller,
    Raw,
    Send,
    Sequence,
    Step,
    Told,
    Until,
    Wait,
)
from protobench.wire import Frame, WireError

ANSWERED_NS = (
    1_000  # so soon after a frame of the module, what is sent next was waiting for it; in virtual time
)
ANSWERED_REAL_NS = 4_000_000
PATIENCE_MS = 300.0
NEAR = 1 << 16  # a recorded value so near to what the module had told was made from it
BITS_NEAR = 4
WINDOW_MAX_MS = 2000
WINDOW_SLACK_NS = 60_000_000
EVENTS = ("outcome", "fault", "started", "telemetry")


class Lifter:
    """Lifts one exchange against the module at ``address``; ``virtual``: its times are exact."""

    def __init__(self, language: Language, address: int, *, virtual: bool) -> None:
        self.language = language
        self.address = address
        self.virtual = virtual
        self.controllers: list[Controller] = []
        self.steps: list[Step] = []
        self._now_ns = 0
        self._now = Now(lambda: self._now_ns, lambda _: False)
        self._sessions: dict[int, str] = {}
        self._named: dict[tuple[int, int], str] = {}
        self._sent: dict[bytes, Send] = {}
        self._since: list[tuple[int, Reading]] = []
        self._windows: dict[tuple[int, int], int] = {}
        self._last: Send | None = None
        self._last_ns: int | None = None

    def lift(self, exchange: Iterable[Exchange], ended_ns: int = 0) -> Sequence:
        """The steps of an exchange; ``ended_ns``: when the verdict fell, on the exchange's clock."""
        for passed in exchange:
            self._now_ns = passed.time_ns
            if passed.direction == "->":
                self._pass_time(passed.time_ns)
                self._outgoing(passed)
                self._last_ns = passed.time_ns
                self._since.clear()
            else:
                reading = self.language.read(passed.data)
                self._now.learn(reading, passed.time_ns)
                self._since.append((passed.time_ns, reading))
        self._pass_time(max(self._now_ns, ended_ns))
        return Sequence(tuple(self.controllers), tuple(self.steps))

    # ------------------------------------------------------------ time

    def _pass_time(self, until_ns: int) -> None:
        """What the bench did between two frames sent: waited for an answer, for an event, or for time."""
        if self._last_ns is None:
            return
        begin_ns = self._last_ns
        window_ns = self._window_ns() if until_ns > begin_ns else 0
        if window_ns:
            self.steps.append(Wait(_ms(max(until_ns, window_ns) - begin_ns)))
            return
        answer_ns = self._answer_ns()
        if answer_ns is not None:
            assert self._last is not None
            self.steps[-1] = replace(self._last, awaits=True)
            begin_ns = answer_ns
        if self._since:
            last_ns, reading = self._since[-1]
            near_ns = ANSWERED_NS if self.virtual else ANSWERED_REAL_NS
            if last_ns > begin_ns and until_ns - last_ns <= near_ns and reading.kind in EVENTS:
                self.steps.append(Until(reading.kind, _ms(last_ns - begin_ns) * 2 + PATIENCE_MS))
                return
        if until_ns > begin_ns:
            self.steps.append(Wait(_ms(until_ns - begin_ns)))

    def _window_ns(self) -> int:
        """Until when answers to many that came may come at another time."""
        answered = {
            (reading.frame.number, reading.frame.session) for _, reading in self._since if reading.frame
        }
        ends = [end_ns for key, end_ns in self._windows.items() if key in answered]
        if ends:
            self._windows.clear()
        return max(ends, default=0)

    def _answer_ns(self) -> int | None:
        if self._last is None:
            return None
        for time_ns, reading in self._since:
            frame = reading.frame
            if frame is not None and 0x40 <= frame.kind < 0x60 and frame.number == self._last.number:
                return time_ns
        return None

    # ------------------------------------------------------------ frames

    def _outgoing(self, passed: Exchange) -> None:
        self._last = None
        if passed.words.startswith("raw bytes"):
            self.steps.append(Raw(passed.data, lead="continued" not in passed.words))
            return
        known = self._sent.get(passed.data)
        if known is not None:
            step: Step = replace(known, again=True, awaits=False)
        else:
            frame = self.language.unpack(passed.data)
            made = self._send(frame, passed.data) if isinstance(frame, Frame) else None
            if made is not None:
                self._sent[passed.data] = made
            step = made or Raw(passed.data, framed=True)
        if isinstance(step, Send):
            self._last = step
            self._window(step, passed)
        self.steps.append(step)

    def _window(self, step: Send, passed: Exchange) -> None:
        window_ms = dict(step.fields).get("answer_window", 0)
        frame = self.language.unpack(passed.data)
        if step.to is not None and isinstance(frame, Frame) and isinstance(window_ms, int):
            end_ns = passed.time_ns + round(min(window_ms, WINDOW_MAX_MS) * 1e6) + WINDOW_SLACK_NS
            self._windows[frame.number, frame.session] = end_ns

    def _send(self, frame: Frame, data: bytes) -> Send | None:
        reading = self.language.read(data)
        fields, body = self._body(reading, frame)
        size = None if frame.body_length == len(frame.body) else frame.body_length
        packed = self.language.pack(
            frame.kind, frame.body, source=frame.source, destination=frame.destination, session=frame.session,
            number=frame.number, flags=frame.flags, version=frame.version, body_length=size,
        )  # fmt: skip
        if packed != data:
            return None
        return Send(
            who=self._controller(frame.source, frame.session),
            kind=reading.kind if not reading.kind.startswith("0x") else frame.kind,
            number=frame.number,
            fields=fields,
            to=None if frame.destination == self.address else frame.destination,
            flags=frame.flags,
            version=None if frame.version == 1 else frame.version,
            body=body,
            body_length=size,
        )

    def _body(
        self, reading: Reading, frame: Frame
    ) -> tuple[tuple[tuple[str | int, Any], ...], tuple[bytes | Told, ...] | None]:
        """Fields that make the very body again, or the body."""
        if reading.kind.startswith("0x"):
            return (), (frame.body,)
        values: dict[Any, Any] | None = dict(reading.fields or {})
        if values is None or reading.fields is None or not self._makes(reading.kind, values, frame.body):
            values = self._plain(reading.kind, frame.body)
        if values is None:
            return (), self._parts(frame.body)
        return tuple((name, self._lifted(name, value)) for name, value in values.items()), None

    def _plain(self, kind: str, body: bytes) -> dict[str | int, Any] | None:
        try:
            found = self.language.codec.unpack_body(body)
        except WireError:
            return None
        if any(isinstance(value, dict | list) and not _is_flat(value) for value in found.values()):
            return None
        specs = {spec.key: spec for spec in self.language.contract.kind(kind).fields}
        values: dict[str | int, Any] = {}
        for key, value in found.items():
            spec = specs.get(key)
            values[key if spec is None else spec.name] = value
            if spec is not None and spec.enum is not None and type(value) is int:
                names = {
                    number: name for name, number in self.language.contract.enum_values(spec.enum).items()
                }
                values[spec.name] = names.get(value, value)
        return values if self._makes(kind, values, body) else None

    def _parts(self, body: bytes) -> tuple[bytes | Told, ...]:
        """A body of no sound form, with the epoch and the lease number that it begins with as told values."""
        if not body or not 0x80 <= body[0] <= 0x8F:
            return (body,)
        parts: list[bytes | Told] = []
        begin, place = 0, 1
        for key, name in enumerate(("epoch", "lease")):
            value = bytes([key]) + canonical(int(getattr(self._now, name)))
            if not body.startswith(value, place):
                break
            parts += [body[begin : place + 1], Told(name)]
            begin = place = place + len(value)
        return (*parts, body[begin:])

    def _makes(self, kind: str, values: dict[str | int, Any], body: bytes) -> bool:
        try:
            return self.language.body(kind, values) == body
        except (ValueError, TypeError, OverflowError, KeyError):
            return False

    def _controller(self, source: int, session: int) -> str:
        known = self._named.get((source, session))
        if known is not None:
            return known
        name = _name(len(self.controllers))
        like, xor = "", 0
        for other, owner in self._sessions.items():
            if bin(other ^ session).count("1") <= BITS_NEAR:
                like, xor = owner, other ^ session
                break
        literal = session if session < NEAR and not like else None
        self._sessions.setdefault(session, name)
        self._named[source, session] = name
        self.controllers.append(Controller(name, source, like, xor, literal))
        return name

    # ------------------------------------------------------------ values

    def _lifted(self, name: str | int, value: Any) -> Any:
        if name == "start_at" and isinstance(value, int):
            return _relative("clock", value, int(self._now.clock))
        if name in TOLD and isinstance(value, int) and not isinstance(value, bool):
            return _relative(str(name), value, int(getattr(self._now, str(name))))
        if name == "event" and isinstance(value, int):
            return self._event(value)
        if name == "occurrences" and isinstance(value, list | tuple):
            return tuple(self._occurrence(item) for item in value)
        return tuple(value) if isinstance(value, list) else value

    def _event(self, value: int) -> Any:
        for of, number in reversed(self._now._events.items()):
            plus = _signed(value - number)
            if abs(plus) <= 1:
                if of[0] == "outcome":
                    return Told("event", plus, ("outcome", self._controller(*of[1]), of[2]))
                return Told("event", plus, of)
        return value

    def _occurrence(self, value: Any) -> Any:
        for code, occurrence in self._now._occurrences.items():
            if occurrence == value:
                return Told("occurrence", 0, ("fault", code))
        return value


def _relative(name: str, value: int, base: int) -> Any:
    """How ``value`` differs from what the module told; one far from it, or an end of the range, stays as it is."""
    if value == base:
        return Told(name)
    plus = _signed(value - base)
    far = abs(plus) > NEAR and name != "clock"
    return value if far or not 0 <= value < MODULUS or value in (0, MODULUS - 1) else Told(name, plus)


def _is_flat(value: Any) -> bool:
    return isinstance(value, list) and not any(isinstance(item, dict | list) for item in value)


def _signed(number: int) -> int:
    number %= MODULUS
    return number - MODULUS if number >= MODULUS // 2 else number


def _ms(time_ns: int) -> float:
    return round(time_ns / 1e6, 3)


def _name(place: int) -> str:
    return "abcdefgh"[place] if place < 8 else f"c{place + 1}"


def frames_of(exchange: Iterable[Exchange], language: Language) -> Iterator[Passed]:
    """The sound frames of an exchange, those inside raw bytes too, with the last of their pieces."""
    decoder = language.stream_decoder()
    for passed in exchange:
        is_sent = passed.direction == "->"
        found = [passed.data]
        if is_sent and passed.words.startswith("raw bytes"):
            found = language.split(passed.data)
            lead = b"" if "continued" in passed.words else b"\0"
            pieces = decoder.feed(lead + passed.data, passed.time_ns)
            found += [unit for unit in pieces if isinstance(unit, bytes) and unit not in found]
        for data in found:
            reading = language.read(data)
            if reading.frame is not None:
                yield Passed(passed.time_ns, is_sent, data, reading)
