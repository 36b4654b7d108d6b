"""Writes a replay script: a few plain lines that do what the shortest sequence does, and a check.

Whatever a module sent stands in it as a Python literal or, cleaned, in a comment.
"""

from __future__ import annotations

import textwrap
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any

from protobench.contract import Contract
from protobench.evidence.text import cut
from protobench.suite.bench import Bench
from protobench.suite.options import RunOptions
from protobench.suite.replay.observe import Later
from protobench.suite.replay.oracle import CASE, LINK, TWIN
from protobench.suite.replay.shrink import Shrunk
from protobench.suite.replay.steps import Controller, Raw, Send, Step, Told, Until, Wait

WIDTH = 108
WORDS_MAX = 900
BYTES_A_LINE = 32
DECIDED = {
    "watch": "the watch of every exchange",
    "model": "the model of the contract beside the module",
    TWIN: "a sound twin: an emulated module that describes itself in the same way and was asked the same",
    LINK: "the end of the link",
    CASE: "the case itself, run again; nothing shorter shows it",
}


def script(shrunk: Shrunk, options: RunOptions, bench: Bench) -> str:
    """The text of the script."""
    lines = [*_head(shrunk, bench.contract), ""]
    body = _case_body(shrunk) if shrunk.sequence is None else _steps_body(shrunk, bench)
    uses = "\n".join(body)
    names = [
        "options",
        "run",
        *(name for name in ("case_again", "differs", "ended", "violated") if f"{name}(" in uses),
    ]
    values = [name for name in ("About", "Repeats", "Shown") if f"{name}(" in uses]
    lines += ["import sys", ""]
    if "canonical(" in uses:
        lines.append("from protobench.suite.language import canonical")
    if values:
        lines.append(f"from protobench.suite.replay.observe import {', '.join(values)}")
    if shrunk.sequence is not None:
        lines.append("from protobench.suite.replay.replaying import Replay")
    lines.append(f"from protobench.suite.replay.scripts import {', '.join(sorted(names))}")
    lines += ["from protobench.suite.session import Session", ""]
    lines.append(_line(f"LINK = {options.link!r}"))
    lines += [
        f"ADDRESS = {bench.address!r}",
        f"SEED = {options.seed!r}",
        f"ATTENDED = {options.attended!r}",
        "",
        "",
    ]
    lines += ["def main() -> int:", *(f"    {line}" if line else "" for line in body), "", ""]
    ends = f", ends={shrunk.words!r}" if shrunk.oracle == LINK else ""
    lines += ['if __name__ == "__main__":', f"    sys.exit(run(main{ends}))"]
    return "\n".join(lines) + "\n"


def _head(shrunk: Shrunk, contract: Contract) -> Iterator[str]:
    record = shrunk.record
    yield f'"""Replays a failure of case {record.id}.'
    yield ""
    yield "Exit status: 1 while the failure is there, 0 when it is gone, 3 when something else happens."
    yield '"""'
    yield ""
    yield from _comment(f"The case said: {record.reason.partition(chr(10))[0]}")
    texts = {clause.id: clause.text for clause in contract.clauses}
    for clause in dict.fromkeys([*record.broken, shrunk.clause]):
        if clause in texts:
            yield from _comment(f"{clause} says: {texts[clause]}")
    if shrunk.sequence is not None:
        yield from _comment(f"What is wrong in these {shrunk.steps} of {shrunk.drawn} steps: {shrunk.words}")
    yield from _comment(f"Decided by {DECIDED[shrunk.oracle]}.")
    if not shrunk.repeats:
        yield from _comment(f"The failure did not repeat: {shrunk.differs}")
    yield from _comment(f"The whole case: {record.replay}")


def _comment(text: str) -> list[str]:
    return textwrap.wrap(
        cut(text, WORDS_MAX), WIDTH, initial_indent="# ", subsequent_indent="#   ", break_on_hyphens=False
    )


def _line(text: str) -> str:
    return text if len(text) <= 110 else f"{text}  # noqa: E501"


def _case_body(shrunk: Shrunk) -> list[str]:
    return [
        "with Session(options(LINK, ADDRESS, SEED, attended=ATTENDED)) as session:",
        f"    return case_again(session, {shrunk.record.id!r}, {tuple(shrunk.record.broken)!r})",
    ]


def _steps_body(shrunk: Shrunk, bench: Bench) -> list[str]:
    assert shrunk.sequence is not None
    writer = _Steps(bench)
    inner = [writer.controller(controller) for controller in shrunk.sequence.used]
    for step in shrunk.sequence.steps:
        inner += writer.step(step)
    inner += ["", *_check(shrunk)]
    uses = "\n".join(inner)
    head = [f"{name} = {value}" for name, value in _SHORT if f"{name}." in uses]
    return [
        "opened = Session(options(LINK, ADDRESS, SEED, attended=ATTENDED))",
        "with opened as session, Replay(session.bench) as replay:",
        *(f"    {line}" if line else "" for line in [*head, *inner]),
    ]


_SHORT = (("bench", "session.bench"), ("now", "replay.now"))


def _check(shrunk: Shrunk) -> list[str]:
    if shrunk.oracle == LINK:
        return ["return ended(replay)"]
    if shrunk.where is None:
        clause, way = shrunk.way
        return _call("return violated", ["replay", repr(clause), repr(way)])
    where = shrunk.where
    return _call(
        "return differs",
        [
            "replay",
            repr(where.place),
            repr(where.name),
            f"wrong={_seen(where.module)}",
            f"sound={_seen(where.twin)}",
        ],
    )


def _seen(value: Any) -> str:
    if isinstance(value, Later):
        return _seen(value.value)
    return repr(value)


def _call(name: str, arguments: list[str]) -> list[str]:
    """A call on one line, or on one line an argument where that would be too long."""
    line = f"{name}({', '.join(arguments)})"
    if len(line) <= WIDTH - 12 and "\n" not in line:
        return [line]
    return [f"{name}(", *(_line(f"    {argument},") for argument in arguments), ")"]


@dataclass(slots=True)
class _Steps:
    """Writes steps; ``numbers``: what each controller's next number is, ``sent``: the variable of each frame sent."""

    bench: Bench
    numbers: dict[str, int] = field(default_factory=dict)
    sent: dict[tuple[str, int], str] = field(default_factory=dict)
    count: int = 0

    def controller(self, controller: Controller) -> str:
        arguments = [f"0x{controller.address:08x}"]
        if controller.like:
            arguments.append(
                f"{controller.like}.session" + (f" ^ 0x{controller.xor:x}" if controller.xor else "")
            )
        elif controller.literal is not None:
            arguments.append(repr(controller.literal))
        return f"{controller.name} = replay.tester({', '.join(arguments)})"

    def step(self, step: Step) -> list[str]:
        match step:
            case Wait():
                return [f"bench.port.wait_ms({step.ms:g})"]
            case Until():
                return [f"replay.until({step.kind!r}, {step.ms:g})"]
            case Raw():
                return self._raw(step)
            case Send():
                return self._send(step)

    def _raw(self, step: Raw) -> list[str]:
        data = _bytes(step.data)
        if step.framed:
            return _call("bench.port.send", [data])
        return _call("replay.raw", [data] if step.lead else [data, "lead=False"])

    def _send(self, step: Send) -> list[str]:
        self.count += 1
        name = f"s{self.count}"
        lines: list[str] = []
        known = self.sent.get((step.who, step.number))
        if step.again and known is not None:
            lines += [f"{name} = {step.who}.send_frame({known}.frame_bytes)"]
        else:
            arguments = [repr(step.kind)]
            following = self.numbers.get(step.who)
            if following is None:
                lines.append(f"{step.who}.use_number({(step.number - 1) % (1 << 32)})")
            elif following != step.number:
                arguments.append(f"number={step.number}")
            if following is None or following == step.number:
                self.numbers[step.who] = (step.number + 1) % (1 << 32)
            arguments += self._header(step)
            lines += _call(f"{name} = {step.who}.send", arguments)
        self.sent[step.who, step.number] = name
        if step.awaits:
            lines.append(f"replay.answer({name})")
        return lines

    def _header(self, step: Send) -> Iterator[str]:
        if step.to is not None:
            yield f"to=0x{step.to:08x}"
        if step.body is not None:
            parts = [
                _bytes(part) if isinstance(part, bytes) else f"canonical({self._value(part)})"
                for part in step.body
            ]
            yield f"body={' + '.join(part for part in parts if part != _bytes(b'') or len(parts) == 1)}"
        elif any(isinstance(name, int) for name, _ in step.fields):
            told = ", ".join(f"{name!r}: {self._value(value)}" for name, value in step.fields)
            yield f"body=bench.language.body({step.kind!r}, {{{told}}})"
        else:
            yield from self._fields(step)
        for name, usual in (("flags", 0), ("version", None), ("body_length", None)):
            if getattr(step, name) != usual:
                yield f"{name}={getattr(step, name)}"

    def _fields(self, step: Send) -> Iterator[str]:
        """Fields of the body; what a tester fills in by itself is left out."""
        assert isinstance(step.kind, str)
        many = step.to is not None and self.bench.is_many(step.to)
        filled = self.bench.fence_fields(step.kind, many=many)
        fields: Mapping[str | int, Any] = dict(step.fields)
        for fence in filled:
            if fence not in fields:
                yield f"{fence}=None"
        for name, value in fields.items():
            if name in filled and value == Told(str(name)):
                continue
            yield f"{'target' if name == 'number' else name}={self._value(value)}"

    def _value(self, value: Any) -> str:
        if isinstance(value, Told):
            return self._told(value)
        if isinstance(value, tuple):
            return f"[{', '.join(map(self._value, value))}]"
        return _bytes(value) if isinstance(value, bytes) else repr(value)

    def _told(self, value: Told) -> str:
        plus = f" + {value.plus}" if value.plus > 0 else f" - {-value.plus}" if value.plus else ""
        if value.name == "event":
            kind, *rest = value.of
            names = [str(rest[0]), repr(rest[1])] if kind == "outcome" else [repr(item) for item in rest]
            return f"now.event({', '.join([repr(kind), *names])}){plus}"
        if value.name == "occurrence":
            return f"now.occurrence({value.of[1]!r}){plus}"
        return f"now.{value.name}{plus}"


def _bytes(data: bytes) -> str:
    """Bytes as a call on hex digits, in one line."""
    return f"bytes.fromhex({data.hex()!r})"
