"""What can be wrong with bytes from a peer, and with a message of our own, as different types."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum


class WireError(ValueError):
    """Base of everything raised here."""


class BodyError(WireError):
    """A peer's body is not one canonical map.

    ``rule``: name of the broken rule, see :class:`protobench.wire.form.Rule`; ``offset``: the byte at which
    it is broken; ``detail``: the value found and what the rule wants.
    """

    def __init__(self, rule: str, offset: int, detail: str) -> None:
        super().__init__(f"{rule} at byte {offset}: {detail}")
        self.rule = rule
        self.offset = offset
        self.detail = detail


class FieldRule(StrEnum):
    """The rules for one field, in the order of judging; ``refusal`` is the contract's name for each."""

    NOT_UNDERSTOOD = "not-understood"
    MISSING = "missing"
    TYPE = "type"
    RANGE = "range"

    @property
    def refusal(self) -> str:
        return _REFUSALS[self]

    @property
    def rank(self) -> int:
        """Order of judging; a missing field and one of the wrong type rank alike, the lower key first."""
        return _RANKS[self]


_REFUSALS = {
    FieldRule.NOT_UNDERSTOOD: "not-understood",
    FieldRule.MISSING: "malformed",
    FieldRule.TYPE: "malformed",
    FieldRule.RANGE: "out-of-range",
}
_RANKS = {FieldRule.NOT_UNDERSTOOD: 0, FieldRule.MISSING: 1, FieldRule.TYPE: 1, FieldRule.RANGE: 2}


class FieldError(WireError):
    """A field of a peer's message breaks a rule.

    ``kind``: name of the message kind; ``key`` and ``field``: which field, ``field`` being empty for an
    unknown key; ``value``: what came, None when nothing did; ``rule``: which rule; ``wanted``: what the rule
    asks for.
    """

    def __init__(self, kind: str, key: int, field: str, value: object, rule: FieldRule, wanted: str) -> None:
        name = f"{kind}.{field}" if field else kind
        super().__init__(f"{name} (key {key}): {_told(rule, value)}, {wanted}")
        self.kind = kind
        self.key = key
        self.field = field
        self.value = value
        self.rule = rule
        self.wanted = wanted


class EncodingError(WireError):
    """A message of our own cannot be encoded: the caller's fault.

    ``field`` is empty when no single field is at fault.
    """

    def __init__(self, kind: str, field: str, value: object, rule: str) -> None:
        name = f"{kind}.{field}" if field else kind
        super().__init__(f"{name} = {value!r} cannot be sent: {rule}")
        self.kind = kind
        self.field = field
        self.value = value
        self.rule = rule


def _told(rule: FieldRule, value: object) -> str:
    if rule is FieldRule.MISSING:
        return "missing"
    if rule is FieldRule.TYPE:
        return f"{value!r} has the wrong type"
    return f"{value!r}"


@dataclass(slots=True)
class Dropped:
    """A frame, or what should have been one, that is dropped.

    ``reason``: the contract's name of the drop reason; ``detail``: what was found; ``data``: the bytes, at
    most the first 254 of them.
    """

    reason: str
    detail: str
    data: bytes
