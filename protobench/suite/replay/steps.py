"""What a replay is made of: frames as they are asked for, raw bytes, and time that passes."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any, NamedTuple

MODULUS = 1 << 32
TOLD = ("epoch", "lease", "halt_count", "clock")


class Told(NamedTuple):
    """A value that the module tells at replay, and how far from it the recorded one was.

    ``name``: ``epoch``, ``lease``, ``halt_count``, ``clock``, ``event`` or ``occurrence``. ``of``: which event, as
    (``outcome``, controller, number) or (``fault``, code); of an occurrence the fault's code, as (``fault``, code).
    """

    name: str
    plus: int = 0
    of: tuple[str | int, ...] = ()


class Controller(NamedTuple):
    """A (source, session) of the recording. ``like``: the controller whose session this one's differs from by ``xor``.

    ``literal``: a session that is a value of its own, such as 0.
    """

    name: str
    address: int
    like: str = ""
    xor: int = 0
    literal: int | None = None


@dataclass(frozen=True, slots=True)
class Send:
    """One frame. ``to``: None for the module. ``fields``: by name or key, in order; ``body``: bytes instead, with told
    values among them.

    ``again``: the very bytes of the frame that was sent before with this number. ``awaits``: its answer is waited for.
    """

    who: str
    kind: str | int
    number: int
    fields: tuple[tuple[str | int, Any], ...] = ()
    to: int | None = None
    flags: int = 0
    version: int | None = None
    body: tuple[bytes | Told, ...] | None = None
    body_length: int | None = None
    again: bool = False
    awaits: bool = False


@dataclass(frozen=True, slots=True)
class Raw:
    """Bytes as they are. ``framed``: a bare frame that the link frames; ``lead``: a delimiter may stand before them."""

    data: bytes
    framed: bool = False
    lead: bool = True


@dataclass(frozen=True, slots=True)
class Wait:
    """Time that passes."""

    ms: float


@dataclass(frozen=True, slots=True)
class Until:
    """Time that passes until an event of this kind comes after the last frame sent, at most ``ms``."""

    kind: str
    ms: float


Step = Send | Raw | Wait | Until


@dataclass(frozen=True, slots=True)
class Sequence:
    """Steps and the controllers that they speak for. ``link`` is only for who reads it."""

    controllers: tuple[Controller, ...]
    steps: tuple[Step, ...]

    def with_steps(self, steps: Iterable[Step]) -> Sequence:
        """The same controllers with other steps."""
        return Sequence(self.controllers, tuple(steps))

    @property
    def used(self) -> list[Controller]:
        """The controllers that the steps need, in order."""
        wanted = {step.who for step in self.steps if isinstance(step, Send)}
        for controller in reversed(self.controllers):
            if controller.name in wanted and controller.like:
                wanted.add(controller.like)
        return [controller for controller in self.controllers if controller.name in wanted]

    @property
    def waited_ms(self) -> float:
        return sum(step.ms for step in self.steps if isinstance(step, Wait))
