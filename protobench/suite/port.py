"""The point of control and observation: frames out, frames in, each stamped, logged and watched."""

from __future__ import annotations

from collections import deque
from collections.abc import Callable
from dataclasses import dataclass
from itertools import islice
from typing import Any, NamedTuple, Protocol

from protobench.judge import Exchange, Failed
from protobench.links import Chunk, Framing, ImpairedLink, Link
from protobench.suite.language import Language, Reading
from protobench.suite.watch import Watch
from protobench.wire import Dropped, Frame

BLOCK_SIZE_MAX = 256  # of a stuffed frame with its delimiter
SILENCE_NS = 200_000_000  # a sender silent for longer begins with a delimiter
REAL_TIME_U_MS = 4.0  # least uncertainty claimed for a time measured in real time
Predicate = Callable[["Received"], bool]


class Log(Protocol):
    """Takes every frame as it passes; see :class:`protobench.evidence.log.ConformanceLog`."""

    def frame(self, time_ns: int, direction: str, data: bytes, meaning: str) -> None: ...

    def note(self, time_ns: int, text: str) -> None: ...


class NoLog:
    """Keeps nothing."""

    def frame(self, time_ns: int, direction: str, data: bytes, meaning: str) -> None:
        pass

    def note(self, time_ns: int, text: str) -> None:
        pass


class Beside(Protocol):
    """Runs beside the module and is told every sound frame, both ways; see :class:`protobench.suite.model.Model`."""

    def sent(self, data: bytes, time_ns: int) -> None: ...

    def received(self, data: bytes, time_ns: int) -> None: ...


class Event(NamedTuple):
    """What passed, kept raw: words are made only where somebody reads them. ``time_ns`` is the link's clock."""

    time_ns: int
    direction: str
    data: bytes
    meaning: Reading | str

    @property
    def words(self) -> str:
        return self.meaning if isinstance(self.meaning, str) else self.meaning.words


@dataclass(slots=True)
class Sent:
    """A frame as sent; ``time_ns`` is when its last byte was handed over. ``frame_bytes`` are the bare bytes."""

    time_ns: int
    frame_bytes: bytes
    frame: Frame
    kind: str
    fields: dict[str, Any]

    @property
    def number(self) -> int:
        return self.frame.number


@dataclass(slots=True)
class Received:
    """A frame of the module: what the bench got, and what it says. ``time_ns``: when its first byte arrived."""

    time_ns: int
    frame_bytes: bytes
    frame: Frame
    kind: str
    fields: dict[str, Any]

    def __getitem__(self, name: str) -> Any:
        return self.fields[name]

    def get(self, name: str, default: Any = None) -> Any:
        return self.fields.get(name, default)


class Port:
    """Frames over one link.

    ``inbox`` holds what no expectation has taken yet, in order of arrival; ``events`` the last of what passed in the
    case, of ``events_seen`` in all; ``violated_at``: how many there were when the watch first found something.
    """

    def __init__(self, link: Link, language: Language, log: Log | None = None) -> None:
        self.link = link
        self.language = language
        self.log = log or NoLog()
        self._logs = log is not None
        self.inbox: list[Received] = []
        self.events: deque[Event] = deque(maxlen=EVENTS_MAX)
        self.events_seen = 0
        self.violated_at: int | None = None
        self.watch = Watch(language.contract)
        self.beside: Beside | None = None
        self._decoder = language.stream_decoder()
        self._last_sent_ns: int | None = None
        self._begun_ns = 0  # when the frame that is half here began to arrive
        self._lateness_ns = 0
        self._begin_ns = link.clock.now_ns()

    # ------------------------------------------------------------ time

    @property
    def now_ns(self) -> int:
        return self.link.clock.now_ns()

    @property
    def passed_ns(self) -> int:
        """Time since the case began."""
        return self.now_ns - self._begin_ns

    @property
    def u_ms(self) -> float:
        """Expanded uncertainty of an interval in ms: by how late own waits ended, none in virtual time.

        On a line with a rate of its own a frame may have waited behind another.
        """
        own_ms = 0.0 if self.link.virtual else max(REAL_TIME_U_MS, 3 * self._lateness_ns / 1e6)
        return own_ms + self.line_ns / 1e6

    @property
    def line_ns(self) -> int:
        """How long the longest frame takes on the line."""
        return BLOCK_SIZE_MAX * self.link.byte_ns

    @property
    def is_lossless(self) -> bool:
        """Whether a frame cannot be lost, nor an answer be late by the machine's doing."""
        return self.link.virtual and not isinstance(self.link, ImpairedLink)

    @property
    def has_stream(self) -> bool:
        """Whether stuffed bytes can be sent as they are."""
        return self.link.framing is not Framing.DATAGRAM

    def begin_case(self) -> None:
        """Forget what earlier cases left: events, inbox, measured lateness."""
        self.events.clear()
        self.events_seen = 0
        self.violated_at = None
        self.inbox.clear()
        self.watch.begin_case()
        self._lateness_ns = 0
        self._begin_ns = self.now_ns

    # ------------------------------------------------------------ out

    def send(self, *frames: bytes) -> int:
        """Send bare frames, framed as the link wants it; the time in ns of the last byte."""
        if self.link.framing is Framing.STREAM:
            data = b"".join(self.language.stuff(frame) + b"\0" for frame in frames)
            time_ns = self._send_units(self._lead() + data)
        else:
            time_ns = self._send_units(*frames)
        for frame in frames:
            reading = self.language.read(frame)
            self.note_sent(frame, reading, time_ns)
            self._record("->", time_ns, frame, reading)
        return time_ns

    def send_raw(self, data: bytes, *, lead: bool = True) -> int:
        """Send bytes as they are: on a stream link any, over ZeroMQ as one segment, over UDP as one datagram."""
        if self.link.framing is Framing.STREAM:
            unit = (self._lead() if lead else b"") + data
        elif self.link.framing is Framing.PART:
            unit = b"\0" + data
        else:
            unit = data
        time_ns = self._send_units(unit)
        self._record("->", time_ns, data, "raw bytes" if lead else "raw bytes, continued")
        for frame in self.language.split(data):
            self.note_sent(frame, self.language.read(frame), time_ns)
        return time_ns

    def note_sent(self, frame: bytes, reading: Reading, time_ns: int) -> None:
        """A frame was sent, perhaps in pieces: whoever judges what comes back has to know."""
        self.watch.sent(frame, reading, time_ns)
        if self.beside is not None:
            self.beside.sent(frame, time_ns)

    def _lead(self) -> bytes:
        last = self._last_sent_ns
        return b"\0" if last is None or self.now_ns - last > SILENCE_NS else b""

    def _send_units(self, *units: bytes) -> int:
        time_ns = self.link.send(*units)
        self._last_sent_ns = time_ns
        return time_ns

    # ------------------------------------------------------------ in

    def pump(self, deadline_ns: int) -> bool:
        """Take what arrives until something did or the deadline is reached; whether something did."""
        chunk = self.link.receive(deadline_ns)
        if chunk is None:
            self._lateness_ns = max(self._lateness_ns, self.now_ns - deadline_ns)
            self._expire()
            return False
        self._take(chunk)
        if self.violated_at is None and self.watch.violations:
            self.violated_at = self.events_seen
        return True

    def wait_ms(self, milliseconds: float) -> None:
        """Let time pass; whatever arrives goes to the inbox."""
        self.wait_until(self.now_ns + round(milliseconds * 1e6))

    def wait_until(self, time_ns: int) -> None:
        """Let time pass up to an instant of the link's clock."""
        while self.pump(time_ns):
            self._check_flood(time_ns)

    def wait_for(self, predicate: Predicate, milliseconds: float) -> Received | None:
        """The first frame, in the inbox or still to come, that fits; it is taken out. None when the time is over."""
        deadline_ns = self.now_ns + round(milliseconds * 1e6)
        seen = 0
        while True:
            while seen < len(self.inbox):
                if predicate(self.inbox[seen]):
                    return self.inbox.pop(seen)
                seen += 1
            if not self.pump(deadline_ns) and seen >= len(self.inbox):
                return None
            self._check_flood(deadline_ns)

    def take_all(self, predicate: Predicate) -> list[Received]:
        """All frames of the inbox that fit, taken out."""
        taken = [received for received in self.inbox if predicate(received)]
        self.inbox = [received for received in self.inbox if not predicate(received)]
        return taken

    def _check_flood(self, deadline_ns: int) -> None:
        """A peer that never stops sending must not keep a wait from ending, nor fill the memory."""
        if self.now_ns > deadline_ns + FLOOD_GRACE_NS or len(self.inbox) > INBOX_FRAMES_MAX:
            raise Failed(
                f"the module floods the link: {len(self.inbox)} frames that nobody asked for", clause="FRM-14"
            )

    def _expire(self) -> None:
        if self.link.framing is Framing.STREAM:
            for unit in self._decoder.expire(self.now_ns):
                self._unit(unit, self.now_ns, self.now_ns)
                self._begun_ns = 0

    def _take(self, chunk: Chunk) -> None:
        if self.link.framing is Framing.STREAM:
            units = self._decoder.feed(chunk.data, chunk.time_ns)
        elif self.link.framing is Framing.PART:
            units = self.language.split_part(chunk.data)
        else:
            units = [chunk.data]
        for unit in units:
            self._unit(unit, chunk.time_ns, self._begun_ns or chunk.time_ns)
            self._begun_ns = 0
        if not self._decoder.holds_half:
            self._begun_ns = 0
        elif not self._begun_ns:
            self._begun_ns = chunk.time_ns

    def _unit(self, unit: bytes | Dropped, time_ns: int, begun_ns: int) -> None:
        if isinstance(unit, Dropped):
            self._dropped(unit, time_ns)
            return
        frame = self.language.unpack(unit)
        if isinstance(frame, Dropped):
            self._dropped(frame, time_ns)
            return
        reading = self.language.read(unit)
        self._record("<-", time_ns, unit, reading)
        self.watch.received(unit, reading, begun_ns)
        if self.beside is not None:
            self.beside.received(unit, begun_ns)
        if reading.fields is not None:
            self.inbox.append(Received(begun_ns, unit, frame, reading.kind, reading.fields))

    def _dropped(self, dropped: Dropped, time_ns: int) -> None:
        self._record("<-", time_ns, dropped.data, f"{dropped.reason}: {dropped.detail}")
        self.watch.noise(dropped)

    # ------------------------------------------------------------ record

    def _record(self, direction: str, time_ns: int, data: bytes, meaning: Reading | str) -> None:
        kept = data if direction == "->" else data[:KEPT_BYTES_MAX]
        event = Event(time_ns, direction, kept, meaning)
        self.events.append(event)
        self.events_seen += 1
        if self._logs:
            self.log.frame(time_ns, direction, data, event.words)

    def exchange(self, until: int | None = None, last: int | None = None) -> list[Exchange]:
        """What passed in this case: up to its event number ``until``, at most the ``last`` ones before that."""
        end = self.events_seen if until is None else until
        gone = self.events_seen - len(self.events)
        begin = max(gone, 0 if last is None else end - last)
        return [
            Exchange(event.time_ns - self._begin_ns, event.direction, event.data, event.words)
            for event in islice(self.events, begin - gone, max(end - gone, 0))
        ]


EVENTS_MAX = 6000  # of one case; a module that floods the link must not fill the memory
KEPT_BYTES_MAX = 512  # of what is received; a frame is shorter
FLOOD_GRACE_NS = 2_000_000_000
INBOX_FRAMES_MAX = 20_000
