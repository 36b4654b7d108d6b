"""One possible state of the module, as far as the contract lets a controller know it.

Times are in ns of the link's clock. A world is a value: what can follow from one is other worlds.
"""

from __future__ import annotations

from typing import Any, NamedTuple

from protobench.contract import State

Key = tuple[int, int, int]  # source, session, number of a request
Ending = tuple[str, str, str]  # outcome, cause, interrupted; "*" for any cause
QUEUED, SCHEDULED, DOOMED, RUNNING = "queued", "scheduled", "doomed", "running"
STRENGTH = ("", "cancel", "de-energized", "lease-end", "fault", "halt")  # of what stops a motion (HLT-17)


class Holder(NamedTuple):
    """Who holds the lease: it ends between ``low`` and ``high``, and is extended by ``duration``."""

    source: int
    session: int
    low: int
    high: int
    duration: int


class Motion(NamedTuple):
    """A motion that has not ended.

    ``low``, ``high``: between which it begins or, when it runs, began; ``rest``: when it rests at the latest.
    ``stop``: the strongest cause that came; ``landing``: whether that came past the point of no return.
    ``told``: whether its receipt has been seen, before which it may not begin.
    """

    key: Key
    name: str
    phase: str
    low: int
    high: int
    told: bool = False
    rest: int = 0
    stop: str = ""
    landing: bool = False

    def stopped(self, cause: str) -> Motion:
        """The motion after another cause to stop: the strongest prevails."""
        return self._replace(stop=max(self.stop, cause, key=STRENGTH.index))


class Owed(NamedTuple):
    """A motion that has ended and whose outcome is still to come, by ``due`` at the latest."""

    key: Key
    name: str
    endings: frozenset[Ending]
    begun: bool
    due: int


class Expect(NamedTuple):
    """An answer that is allowed: its kind and, for a receipt, exactly its fields; ``clause`` is broken otherwise."""

    kind: str
    fields: frozenset[tuple[str, Any]] | None
    clause: str


class World(NamedTuple):
    """A possible state. ``kept``: motions whose outcome was seen and is not confirmed; ``groups``: None if unknown.

    ``asked``: the answers that this world gives to requests not answered yet, by the requests' place.
    """

    state: State
    halt_count: int
    lease: int
    holder: Holder | None = None
    motions: tuple[Motion, ...] = ()
    owed: tuple[Owed, ...] = ()
    kept: frozenset[Key] = frozenset()
    groups: frozenset[int] | None = None
    asked: tuple[tuple[int, Expect], ...] = ()

    @property
    def running(self) -> Motion | None:
        return next((motion for motion in self.motions if motion.phase == RUNNING), None)

    def waiting(self, phase: str) -> list[Motion]:
        return [motion for motion in self.motions if motion.phase == phase]

    def holds(self, source: int, session: int) -> bool:
        return self.holder is not None and self.holder[:2] == (source, session)


def swap(motions: tuple[Motion, ...], old: Motion, new: Motion) -> tuple[Motion, ...]:
    return tuple(new if motion is old else motion for motion in motions)
