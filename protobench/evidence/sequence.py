"""The exchange of one case as a sequence chart in the manner of ITU-T Z.120, before anything is drawn.

An instance is an axis: a controller or the module. On each axis what happens is totally ordered; between axes only
a message orders: it leaves before it arrives. The bench sees one end of each message. When the other end happened is
known by that order alone, and no chart claims more.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from math import ceil
from typing import NamedTuple

from protobench.evidence.text import cut
from protobench.judge import Exchange
from protobench.wire import Codec, Dropped, Explanation, Frame, Line, explain_frame

WAIT_LEAST_NS = 20_000_000  # a shorter pause is not drawn as a wait
AXES_MAX = 6
OTHERS = "others"
MODULE = "module"
LABEL_MAX = 34
NOTE_MAX = 46

# What of a body stands beside the arrow; the whole body stands in the table of frames.
TOLD: Mapping[str, tuple[str, ...]] = {
    "receipt": ("result", "reason", "key"),
    "status-report": ("activity", "halt_latch", "fault_latch"),
    "halt-receipt": ("disposition", "halt_count"),
    "description": ("nature", "build"),
    "outcome": ("motion", "outcome", "cause"),
    "fault": ("code", "class"),
    "started": ("epoch", "restart_cause"),
    "move": ("motion", "magnitude", "start_at"),
    "assist": ("op", "code", "phase", "item", "value"),
    "reset": ("halt_count",),
    "take-lease": ("duration",),
    "renew-lease": ("duration",),
    "cancel": ("number",),
}
SELF_REPORTS = ("truth-page",)
LATCHES = {"halt_latch": "halt latch", "fault_latch": "fault latch"}


@dataclass(frozen=True, slots=True)
class Instance:
    """An axis. ``key`` is what messages name, ``title`` and ``note`` are its head."""

    key: str
    title: str
    note: str = ""


@dataclass(frozen=True, slots=True)
class Message:
    """An arrow. ``target`` None: it is lost, or not for the module that it goes toward."""

    time_ns: int
    source: str
    target: str | None
    label: str
    note: str = ""


@dataclass(frozen=True, slots=True)
class Condition:
    """What holds from here on, on some axes (all, when none is named); ``tone`` is a verdict's word or empty."""

    time_ns: int
    text: str
    axes: tuple[str, ...] = ()
    tone: str = ""


@dataclass(frozen=True, slots=True)
class Wait:
    """The bench lets time pass and nothing comes."""

    time_ns: int
    until_ns: int


Item = Message | Condition | Wait


@dataclass(frozen=True, slots=True)
class Chart:
    """Axes from left to right, and what happens from top to bottom. ``left_out``: frames before the first one."""

    instances: tuple[Instance, ...]
    items: tuple[Item, ...]
    left_out: int = 0


def parts(chart: Chart, most: int) -> list[Chart]:
    """The chart in pieces of at most so many items, each with the same axes, so that each fits on a page."""
    count = max(len(chart.items), 1)
    each = ceil(count / ceil(count / most))
    return [replace(chart, items=chart.items[first : first + each]) for first in range(0, count, each)]


class End(NamedTuple):
    """One end of the message that is item number ``item``."""

    item: int
    arrives: bool


def ends_by_axis(chart: Chart) -> dict[str, list[End]]:
    """The ends of messages on each axis, from top to bottom."""
    axes: dict[str, list[End]] = {instance.key: [] for instance in chart.instances}
    for number, item in enumerate(chart.items):
        if isinstance(item, Message):
            axes[item.source].append(End(number, False))
            if item.target is not None:
                axes[item.target].append(End(number, True))
    return axes


def order(chart: Chart) -> dict[End, set[End]]:
    """What must come before each end of a message: the one above it on its axis, and an arrival's departure.

    Source: ITU-T Z.120, the meaning of a basic chart.
    """
    before: dict[End, set[End]] = {}
    for ends in ends_by_axis(chart).values():
        for place, end in enumerate(ends):
            before.setdefault(end, set()).update(ends[place - 1 : place] if place else ())
    for end in list(before):
        if end.arrives:
            before[end].add(End(end.item, False))
    return before


class Builder:
    """Makes charts of exchanges with one module."""

    def __init__(self, codec: Codec, module: int, names: Mapping[int, str]) -> None:
        """``module``: its address; ``names``: of the bench's own addresses, in the order of their axes."""
        self._codec = codec
        self._module = module
        self._names = names

    def chart(self, exchange: Sequence[Exchange], last: int, verdict: str = "", reason: str = "") -> Chart:
        """The last frames of an exchange, ended by a condition that says the verdict."""
        shown = exchange[-last:] if last else exchange[:0]
        axes = _Axes(self._module, self._names, self._codec.contract.addresses.unicast_last)
        items: list[Item] = []
        told: dict[str, str] = {}
        earlier: int | None = None
        for passed in shown:
            if earlier is not None and passed.time_ns - earlier >= WAIT_LEAST_NS:
                items.append(Wait(earlier, passed.time_ns))
            earlier = passed.time_ns
            items += self._items(passed, axes, told)
        if verdict:
            end_ns = earlier or 0
            items.append(
                Condition(end_ns, cut(f"{verdict}: {reason}" if reason else verdict, 90), (), verdict)
            )
        return Chart(axes.instances(), tuple(items), len(exchange) - len(shown))

    def _items(self, passed: Exchange, axes: _Axes, told: dict[str, str]) -> list[Item]:
        frame = self._codec.frames.unpack(passed.data)
        if isinstance(frame, Dropped):
            return [self._unsound(passed, frame, axes)]
        explanation = explain_frame(self._codec, passed.data)
        label = cut(f"{explanation.kind or f'kind 0x{frame.kind:02x}'} #{frame.number}", LABEL_MAX)
        many = self._many(frame)
        note = cut(", ".join(filter(None, (many, note_of(explanation)))), NOTE_MAX)
        if passed.direction == "<-":
            items: list[Item] = list(self._conditions(passed.time_ns, explanation, told))
            return [*items, Message(passed.time_ns, MODULE, axes.bench(frame.destination), label, note)]
        source = axes.bench(frame.source)
        if explanation.dropped is not None:
            return [
                Message(passed.time_ns, source, None, label, f"must be dropped: {explanation.dropped.reason}")
            ]
        if not many and frame.destination not in (self._module, 0):
            return [Message(passed.time_ns, source, None, label, f"for 0x{frame.destination:x}")]
        return [Message(passed.time_ns, source, MODULE, label, note)]

    def _many(self, frame: Frame) -> str:
        addresses = self._codec.contract.addresses
        if frame.destination == addresses.broadcast:
            return "to all"
        if frame.destination == addresses.any_controller:
            return "to any controller"
        return f"to group 0x{frame.destination:x}" if frame.destination > addresses.unicast_last else ""

    def _unsound(self, passed: Exchange, dropped: Dropped, axes: _Axes) -> Message:
        """Bytes that are no sound frame by themselves; sent raw, they may hold some."""
        size = f"{len(passed.data)} bytes"
        if passed.direction == "<-":
            return Message(
                passed.time_ns, MODULE, axes.bench(None), "no sound frame", cut(passed.words, NOTE_MAX)
            )
        units = self._codec.split_part(b"\0" + passed.data)
        sound = (self._codec.frames.unpack(unit) for unit in units if isinstance(unit, bytes))
        frames = [frame for frame in sound if isinstance(frame, Frame)]
        if not frames:
            note = cut(f"{size}, must be dropped: {dropped.reason}", NOTE_MAX)
            return Message(
                passed.time_ns, axes.bench(self._claimed(passed.data)), None, "no sound frame", note
            )
        held = f"{size} with {len(frames)} sound frame{'s' if len(frames) > 1 else ''}"
        return Message(passed.time_ns, axes.bench(frames[0].source), MODULE, "raw bytes", held)

    def _claimed(self, data: bytes) -> int | None:
        """The bench's own address that stands where a source would, if one does."""
        field = next(field for field in self._codec.frames.layout.fields if field.name == "source")
        source = int.from_bytes(data[field.offset : field.offset + field.size], "big")
        return source if source in self._names else None

    def _conditions(self, time_ns: int, explanation: Explanation, told: dict[str, str]) -> list[Condition]:
        """What the module says of its latches and restarts, where it is news in this chart."""
        found = []
        values = {line.name: line.value for line in explanation.body}
        if explanation.kind == "halt-receipt":
            values["halt_latch"] = "true"
        for field, name in LATCHES.items():
            value = values.get(field)
            if value in ("true", "false") and told.get(field) != value:
                is_news = field in told or value == "true"
                told[field] = value
                if is_news:
                    text = f"{name} set" if value == "true" else f"{name} clear"
                    found.append(Condition(time_ns, text, (MODULE,)))
        if explanation.kind == "started":
            found.append(Condition(time_ns, cut(f"restarted, epoch {values.get('epoch')}", 40), (MODULE,)))
        return found


class _Axes:
    """Gives each address of the bench's side an axis, and the rest one together."""

    def __init__(self, module: int, names: Mapping[int, str], unicast_last: int) -> None:
        self._module = module
        self._unicast_last = unicast_last
        self._names = names
        self._seen: dict[int, None] = {}
        self._others = False

    def bench(self, address: int | None) -> str:
        """The axis of an address; None is whoever sends raw bytes."""
        if address is not None and (
            address in self._names or address in self._seen or self._has_room(address)
        ):
            self._seen.setdefault(address)
            return f"{address:x}"
        self._others = True
        return OTHERS

    def _has_room(self, address: int) -> bool:
        return address <= self._unicast_last and len(self._seen) < AXES_MAX - 2

    def instances(self) -> tuple[Instance, ...]:
        rank = {address: place for place, address in enumerate(self._names)}
        addresses = sorted(self._seen, key=lambda address: (rank.get(address, len(rank)), address))
        found = [
            Instance(f"{address:x}", self._names.get(address, "bench"), f"0x{address:x}")
            for address in addresses
        ]
        if self._others:
            found.append(Instance(OTHERS, "bench", "raw, to all, others"))
        return (*found, Instance(MODULE, "module", f"0x{self._module:x}"))


def note_of(explanation: Explanation) -> str:
    """The fields of a body that matter most to a reader, in short."""
    if explanation.dropped is not None:
        return f"dropped: {explanation.dropped.reason}"
    if explanation.problems:
        return f"bad body: {explanation.problems[0]}"
    wanted = TOLD.get(explanation.kind)
    lines = [line for line in explanation.body if line.name and (wanted is None or line.name in wanted)]
    if wanted is None:
        lines = lines[:2]
    else:
        lines.sort(key=lambda line: wanted.index(line.name))
    told = ", ".join(filter(None, (_told(line) for line in lines)))
    if explanation.kind in SELF_REPORTS:
        return f"self-report: {told}"
    return told


def _told(line: Line) -> str:
    """A field in short: an enumeration without its number, a flag by its name when it is set."""
    if line.value in ("true", "false"):
        return line.name.replace("_", " ") if line.value == "true" else ""
    name, _, number = line.value.partition(" (")
    value = name if number.rstrip(")").isdigit() else line.value
    return f"{line.name} {value}{f' {line.unit}' if line.unit else ''}"
