"""A frame as the contract judges it before any state counts: its form, its fields, the lowest key out of range."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

from protobench.contract import Contract, Kind
from protobench.suite.language import Language
from protobench.wire import BodyError, Dropped, FieldRule, Frame

Refused = tuple[str, int | None]  # reason and key


@dataclass(slots=True)
class Request:
    """A sound frame. ``form``: the refusal of its form; ``outside``: keys whose value the contract does not allow."""

    frame: Frame
    data: bytes
    kind: Kind | None
    class_: str
    many: bool
    form: Refused | None = None
    values: dict[str, Any] = field(default_factory=dict)
    outside: tuple[int, ...] = ()
    bad_length: bool = False

    @property
    def name(self) -> str:
        return self.kind.name if self.kind is not None else f"0x{self.frame.kind:02x}"

    @property
    def key(self) -> tuple[int, int, int]:
        return self.frame.source, self.frame.session, self.frame.number


class Reader:
    """Makes requests of bytes."""

    def __init__(self, contract: Contract, language: Language) -> None:
        self.contract = contract
        self.language = language
        self._kinds = {kind.code: kind for kind in contract.kinds}
        self._ranges = dict(contract.frame.kind_ranges.items())

    def class_of(self, code: int) -> str:
        """The class of a kind's number; empty where it has none."""
        return next((name for name, (low, high) in self._ranges.items() if low <= code <= high), "")

    def read(self, data: bytes) -> Request | None:
        """The request, or None for what is dropped before its address is looked at."""
        frame = self.language.unpack(data)
        if isinstance(frame, Dropped):
            return None
        many = self.contract.is_multicast(frame.destination)
        kind = self._kinds.get(frame.kind)
        request = Request(frame, data, kind, self.class_of(frame.kind), many)
        request.bad_length = self.language.codec.frames.check_length(frame) is not None
        if not request.bad_length:
            self._examine(request)
        return request

    def _examine(self, request: Request) -> None:
        frame, kind = request.frame, request.kind
        if kind is None:
            request.form = ("unknown-kind", None)
            return
        if frame.flags:
            request.form = ("not-understood", None)
        message = self.language.codec.kind(kind.name)
        try:
            examined = message.examine(frame.body, request.many)
        except BodyError:
            request.form = request.form or ("malformed", None)
            return
        for problem in examined.problems:
            if problem.rule is FieldRule.RANGE:
                request.outside += (problem.key,)
            elif request.form is None:
                request.form = (problem.rule.refusal, problem.key)
        request.values = {
            spec.name: getattr(examined.message, spec.attribute) for spec in message.spec.fields
        }
